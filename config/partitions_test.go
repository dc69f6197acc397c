package config_test

import (
	"strings"
	"testing"

	"tailbell/config"
)

func TestWithPartitions(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"name = \"q\"\n[bus]\n", "partitions = 16\nname = \"q\"\n[bus]\n"},
		{"name = \"q\"\npartitions = 4 # few\n[bus]\n", "name = \"q\"\npartitions = 16 # few\n[bus]\n"},
		{"  partitions=4\n", "  partitions=16\n"},
		{"name = \"q\"\n[other]\npartitions = 4\n", "partitions = 16\nname = \"q\"\n[other]\npartitions = 4\n"},
		{"# partitions = 4\nname = \"q\"\n", "partitions = 16\n# partitions = 4\nname = \"q\"\n"},
	} {
		if got := string(config.WithPartitions([]byte(c.text), 16)); got != c.want {
			t.Errorf("%q became %q, want %q", c.text, got, c.want)
		}
	}
}

func TestWithPartitionsParses(t *testing.T) {
	setup, err := config.Parse(config.WithPartitions(config.Sample(), 3), "sample")
	if err != nil || setup.Partitions != 3 {
		t.Fatalf("partitions %v, %v", setup, err)
	}
	if !strings.Contains(string(setup.Text), "partitions = 3") {
		t.Error("the text does not say so")
	}
}
