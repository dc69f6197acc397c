package wire

import (
	"bytes"
	"slices"
	"strings"
	"testing"

	"tailbell/monitor"

	"github.com/santhosh-tekuri/jsonschema/v6"
	"pgregory.net/rapid"
)

func compileSchema(t *testing.T) *jsonschema.Schema {
	t.Helper()
	document, err := jsonschema.UnmarshalJSON(bytes.NewReader(Schema()))
	if err != nil {
		t.Fatal(err)
	}
	c := jsonschema.NewCompiler()
	c.AssertFormat()
	if err := c.AddResource("observation.json", document); err != nil {
		t.Fatal(err)
	}
	return c.MustCompile("observation.json")
}

// beyondSchema reports whether a schema can't say what the decoder refuses:
// duplicate fields, an end before the start, digits of exposure, times that
// are no leap seconds, and lengths in bytes.
func beyondSchema(data []byte, item monitor.Item) bool {
	list, _ := refParse(data, DefaultDepth)
	longSeries := slices.ContainsFunc(list, func(f refField) bool { return f.name == "series" && len(f.value) > 256 })
	names := make(map[string]bool)
	for _, f := range list {
		names[f.name] = true
	}
	// What a validator sees of a field given twice is its last value.
	return len(names) < len(list) ||
		item.Reason == monitor.BadInterval && strings.HasPrefix(item.Detail, "end must be after start") ||
		item.Reason == monitor.BadReading && strings.HasPrefix(item.Detail, "since must not be after at") ||
		item.Reason == monitor.BadExposure && strings.Contains(item.Detail, "more digits than can be held") ||
		item.Reason == monitor.BadTime && strings.Contains(item.Detail, "no leap second") ||
		item.Reason == monitor.BadSeries && longSeries ||
		isSyntax(item.Reason)
}

func TestSchemaAgreesWithDecoder(t *testing.T) {
	schema := compileSchema(t)
	d := NewDecoder(Limits{})
	valid, invalid := 0, 0
	check := func(rt *rapid.T, data []byte) {
		item := d.Observation(data)
		if beyondSchema(data, item) || bytes.Contains(data, []byte("e999")) || bytes.Contains(data, []byte("e400")) {
			return
		}
		value, err := jsonschema.UnmarshalJSON(bytes.NewReader(data))
		if err != nil {
			rt.Fatalf("%s: %v", data, err)
		}
		err = schema.Validate(value)
		if (err == nil) != (item.Reason == "") {
			rt.Fatalf("%s: the decoder says %q (%s), the schema %v", data, item.Reason, item.Detail, err)
		}
		if err == nil {
			valid++
		} else {
			invalid++
		}
	}
	rapid.Check(t, func(rt *rapid.T) {
		for range 20 {
			check(rt, []byte(elementGen().Draw(rt, "element")))
			o := observationGen().Draw(rt, "observation")
			check(rt, EncodeObservation(nil, &o))
		}
	})
	t.Logf("%d valid, %d invalid", valid, invalid)
	if all := valid + invalid; valid < all/2 || invalid < all/10 {
		t.Errorf("the generator no longer reaches both sides: %d valid, %d invalid", valid, invalid)
	}
}

func TestSchemaDescribesEveryField(t *testing.T) {
	for name, property := range compileSchema(t).Properties {
		if memberOf([]byte(name)) == 0 {
			t.Errorf("the schema has a field %s, which the decoder lacks", name)
		}
		if property.Description == "" {
			t.Errorf("the field %s has no description", name)
		}
	}
	if n := len(compileSchema(t).Properties); n != 13 {
		t.Errorf("the schema has %d fields", n)
	}
	one := Schema()
	one[0] = 'x'
	if Schema()[0] != '{' {
		t.Error("Schema gives out its own bytes")
	}
}
