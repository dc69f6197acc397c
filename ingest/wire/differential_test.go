package wire

import (
	"bytes"
	"fmt"
	"strings"
	"testing"

	"tailbell/monitor"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// disagreement returns how decoder and reference differ on an element, "" if
// they agree; and what the decoder made of it.
func disagreement(d *Decoder, data []byte) (string, monitor.Item) {
	before := bytes.Clone(data)
	item := d.Observation(data)
	if !bytes.Equal(before, data) {
		return "the decoder changed its input", item
	}
	if !bytes.Equal(item.Raw, data) {
		return fmt.Sprintf("Raw is %q", item.Raw), item
	}
	if (item.Reason == "") != (item.Detail == "") {
		return fmt.Sprintf("reason %q with detail %q", item.Reason, item.Detail), item
	}
	if len(data) > d.limits.ElementBytes {
		if item.Reason != monitor.TooLarge {
			return "an element over the limit was not too_large", item
		}
		return "", item
	}
	o, reason := refDecode(data, d.limits.Depth)
	switch {
	case reason == syntaxFault && isSyntax(item.Reason), reason != "" && reason == item.Reason:
		return "", item
	case reason != item.Reason:
		return fmt.Sprintf("reference says %q, decoder %q (%s)", reason, item.Reason, item.Detail), item
	}
	return cmp.Diff(o, item.Observation), item
}

// elementGen generates elements near the contract: mostly valid, with every
// kind of fault.
func elementGen() *rapid.Generator[string] {
	return rapid.Custom(func(t *rapid.T) string {
		var names []string
		switch rapid.IntRange(0, 9).Draw(t, "shape") {
		case 0:
			names = []string{"id", "series", "revision", "retracted"}
		case 1, 2:
			names = []string{"series", "at", "events"}
		case 3:
			names = rapid.SliceOfN(rapid.SampledFrom(allNames), 0, 12).Draw(t, "names")
		case 4, 5:
			names = []string{"series", "at", "total", "exposure_total", "since", "reported"}
			names = names[:rapid.IntRange(3, len(names)).Draw(t, "fields")]
			if rapid.IntRange(0, 5).Draw(t, "more") == 0 {
				names = append(names, rapid.SampledFrom(allNames).Draw(t, "another"))
			}
		default:
			names = []string{"id", "series", "start", "end", "events", "exposure", "revision", "reported"}
		}
		names = rapid.Permutation(names).Draw(t, "order")
		var b strings.Builder
		space := func() { b.WriteString(rapid.SampledFrom([]string{"", "", "", " ", "\t", "\r\n"}).Draw(t, "space")) }
		space()
		b.WriteByte('{')
		for i, name := range names {
			if i > 0 {
				b.WriteByte(',')
			}
			space()
			b.WriteString(rapid.SampledFrom([]string{quoteName(name), quoteName(name), quoteName(name), escapeAll(name)}).Draw(t, "name"))
			space()
			b.WriteByte(':')
			space()
			b.WriteString(valueGen(name).Draw(t, name))
			space()
		}
		b.WriteByte('}')
		space()
		return b.String()
	})
}

var allNames = []string{"id", "series", "start", "end", "at", "events", "exposure", "revision", "reported", "retracted", "total", "exposure_total", "since", "ward", "Series", ""}

func quoteName(s string) string { return `"` + s + `"` }

// escapeAll writes every character of an ASCII name as an escape.
func escapeAll(s string) string {
	var b strings.Builder
	b.WriteByte('"')
	for _, c := range []byte(s) {
		fmt.Fprintf(&b, `\u%04X`, c)
	}
	b.WriteByte('"')
	return b.String()
}

func valueGen(name string) *rapid.Generator[string] {
	good := map[string][]string{
		"id":        {`"lab-1"`, `"x"`, `"Ä-é"`, `"a\"b"`, `"a\u0041\ud83d\ude00"`, `"a b/c"`},
		"series":    {`"quillmere-east/ward-3/line-infection"`, `"a"`, `"ferrybill/payments_eu.1/failures"`, `"Ωmega/ward"`, `"a\/b"`},
		"start":     {`"2026-03-02T00:00:00+01:00"`, `"2026-03-02T23:00:00.0000019Z"`, `"2026-03-01T23:00:00Z"`, `"0001-01-01T00:00:00Z"`},
		"end":       {`"2026-03-03T00:00:00+01:00"`, `"2026-03-02t23:00:00.000001z"`, `"9998-12-31T23:59:59.999999999Z"`, `"2024-02-29T00:00:00Z"`},
		"at":        {`"2026-03-02T14:30:00.5-00:30"`, `"2016-12-31T23:59:60Z"`},
		"reported":  {`"2026-03-05T09:10:00+01:00"`, `"2015-07-01T01:59:60.25+02:00"`},
		"events":    {"0", "1", "3.0", "2e1", "-0", "9007199254740992", "1E+2", "999999999999999"},
		"exposure":  {"22", "0", "0.5", "0.000001", "1e-6", "18446744073709551615", "12.500", "-0.0", "1234567890.12345678", "0.0"},
		"revision":  {"0", "2", "1"},
		"retracted": {"true", "false"},
		"total":     {"0", "17", "3.0", "9007199254740992"},
		"since":     {`"2016-12-31T23:59:60Z"`, `"2026-03-02T14:30:00.5-00:30"`, `"2026-03-02T14:30:00.4-00:30"`, `"0001-01-01T00:00:00Z"`, `"2026-03-03T00:00:00Z"`},
	}
	good["exposure_total"] = good["exposure"]
	bad := []string{
		"null", "true", `"1"`, `""`, "-1", "1.5", "01", "1.", ".5", "1e", "NaN", "Infinity", "[]", "{}", `{"a":[1,{"b":null}]}`,
		"9007199254740993", "18446744073709551616", "0.0000000000000000001", "1e400", "1e999", `"\ud800"`, "\"\xff\"", "\"\x01\"", `"\x"`,
		`"2026-03-02"`, `"2026-03-02T24:00:00Z"`, `"2026-02-30T00:00:00Z"`, `"2026-03-02T00:00:00"`, `"2026-03-02 00:00:00Z"`,
		`"2026-03-02T00:00:60Z"`, `"2026-3-2T00:00:00Z"`, `"2026-03-02T00:00:00.Z"`, `"2026-03-02T00:00:00+24:00"`, `"0000-01-01T00:00:00Z"`,
		`"9999-01-01T00:00:00Z"`, `"2026-06-31T00:00:00Z"`, `"2100-02-29T00:00:00Z"`, `"2026-13-01T00:00:00Z"`, `"2026-00-01T00:00:00Z"`, `"2026-01-00T00:00:00Z"`,
		`"a//b"`, `"/a"`, `"a/"`, `"a b"`, `"a/b/c/d/e/f/g/h/i/j/k/l/m"`, `"` + strings.Repeat("x", 65) + `"`, `"` + strings.Repeat("y", 201) + `"`,
		"\"\x7f\"", `"\u0085"`, `"\b"`, `"\f"`, `"\n"`, `"\r"`, `"\t"`, "", "tru", "nul", strings.Repeat("[", 30) + strings.Repeat("]", 30), `"open`,
	}
	return rapid.Custom(func(t *rapid.T) string {
		list := good[name]
		if len(list) == 0 || rapid.IntRange(0, 24).Draw(t, "bad") == 0 {
			list = bad
		}
		return rapid.SampledFrom(list).Draw(t, "value")
	})
}

func TestDecoderAgreesWithReference(t *testing.T) {
	d := NewDecoder(Limits{})
	valid, refused := 0, map[monitor.Reason]int{}
	one := func(rt *rapid.T) {
		data := []byte(elementGen().Draw(rt, "element"))
		if rapid.IntRange(0, 5).Draw(rt, "damage") == 0 && len(data) > 0 {
			at := rapid.IntRange(0, len(data)-1).Draw(rt, "at")
			data[at] = rapid.SampledFrom([]byte(`"\{}[],:0123eE+-. nt`+"\x00\xff\xc3")).Draw(rt, "byte")
		}
		diff, item := disagreement(d, data)
		if diff != "" {
			rt.Fatalf("%q: %s", data, diff)
		}
		if item.Reason == "" {
			valid++
		} else {
			refused[item.Reason]++
		}
	}
	rapid.Check(t, func(rt *rapid.T) {
		for range 50 {
			one(rt)
		}
	})
	t.Logf("%d valid, refused: %v", valid, refused)
	if valid == 0 || len(refused) < 5 {
		t.Errorf("the generator no longer reaches both sides: %d valid, refused %v", valid, refused)
	}
}

func FuzzObservation(f *testing.F) {
	for i := range 60 {
		f.Add([]byte(elementGen().Example(i)))
	}
	f.Add([]byte(example))
	d := NewDecoder(Limits{ElementBytes: 1 << 12, Depth: 5})
	f.Fuzz(func(t *testing.T, data []byte) {
		if diff, _ := disagreement(d, data); diff != "" {
			t.Fatalf("%q: %s", data, diff)
		}
	})
}

// example is the contract's own.
const example = `{"id":"lab-2026-03-0117","series":"quillmere-east/ward-3/line-infection",
 "start":"2026-03-02T00:00:00+01:00","end":"2026-03-03T00:00:00+01:00",
 "events":1,"exposure":22,"revision":2,"reported":"2026-03-05T09:10:00+01:00"}`
