package wire

import (
	"strings"
	"testing"
)

func TestDetailsQuoteNothing(t *testing.T) {
	for _, c := range []struct{ kind, data, want string }{
		{"obs", `{"series":"a/b","at":"2026-03-02T00:00:00Z","events":1,"Merle Tann\"quist":"x"}`, `the contract has no field "..."; leave it out`},
		{"obs", `{"series":"a/b","at":"Tannquist","events":1}`, `"..." is no RFC 3339 time`},
		{"obs", `{"series":"Tannquist, M.","at":"2026-03-02T00:00:00Z","events":1}`, `series "...": not a series name`},
		{"act", `{"act":"note","alert":"x","act":"note"}`, `the field "act" is given twice`},
		{"act", `{"act":"mark","alert":"x","by":"A","mark":"Tannquist"}`, `mark is "..."; it must be one of real, chance, data error, change of definition, or none`},
	} {
		m := NewDecoder(Limits{}).Decode(Raw{Position: 1, Subject: "q.in.0." + c.kind, Data: []byte(c.data)})
		if len(m.Items) != 1 || !strings.Contains(m.Items[0].Detail, c.want) || strings.Contains(m.Items[0].Detail, "Tann") {
			t.Errorf("%s: %+v", c.data, m.Items)
		}
	}
	// Whoever feeds a file sees what is wrong in it.
	if it := NewDecoder(Limits{}).Observation([]byte(`{"series":"a/b","at":"noon"}`)); !strings.Contains(it.Detail, `"noon"`) {
		t.Errorf("%+v", it)
	}
}
