package config

import (
	"testing"
)

func TestSampleValidates(t *testing.T) {
	s, err := Parse(Sample(), "sample.toml")
	if err != nil {
		t.Fatal(err)
	}
	if len(s.Indicators) != 3 {
		t.Errorf("indicators: %d", len(s.Indicators))
	}
	t.Logf("%+v", s.Memory())
	_, err = Parse([]byte("nam = \"x\"\npartitions = \"3\"\n[[indicator]]\nname='a b'\nevery='1d'\nwindows=['1mo',{span='7d',step='8d'}]\nseries=['**','**', 'a b']\nzone='Europe/Berln'\nlevel=0.95\nalpha=2\n[indicator.baseline]\nkind='knwn'\n[indicator.baseline]\n"), "x.toml")
	t.Log("\n", err)
}
