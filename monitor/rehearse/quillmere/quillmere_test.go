package quillmere

import "testing"

func TestOne(t *testing.T) {
	s, err := Generate(1)
	if err != nil {
		t.Fatal(err)
	}
	t.Log(len(s.Messages), len(s.Ledger.Entries), len(s.Ledger.Slots), s.Ledger.Count(), s.Ledger.Reasons(), len(s.Ledger.Acts))
}
