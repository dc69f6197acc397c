package config

import (
	"fmt"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"
)

func TestCompareSame(t *testing.T) {
	s := mustParse(t, string(Sample()))
	if changes := Compare(s, mustParse(t, "# a comment\n"+string(Sample()))); len(changes) > 0 {
		t.Errorf("a comment changed %v", changes)
	}
}

func TestCompare(t *testing.T) {
	old := string(Sample())
	tests := []struct {
		from, to string
		want     string // key and class of every change
	}{
		{`p_limit = 0.001`, `p_limit = 0.002`, "indicator[line-infection].p_limit next look"},
		{`"28d", {`, `"56d", "28d", {`, "indicator[line-infection].windows filling"},
		{`"28d", {`, `{`, "indicator[line-infection].windows next look"},
		{`step = "7d"`, `step = "14d"`, "indicator[line-infection].windows next look"},
		{`every = "1d" `, `every = "1w" `, "indicator[line-infection].every rebuild"},
		{`zone = "Europe/Berlin"      #`, `#`, "indicator[line-infection].zone rebuild"},
		{`horizon = "120d"`, `horizon = "130d"`, "indicator[line-infection].horizon filling"},
		{`horizon = "120d"`, `horizon = "110d"`, "indicator[line-infection].horizon next look"},
		{`series = ["quillmere-*/*/line-infection"]`, `series = ["quillmere-*/*/line-infection", "a"]`, "indicator[line-infection].series filling"},
		{`rate = 1.8`, `rate = 1.9`, "indicator[line-infection].baseline[2] next look"},
		{`name = "wound-infection"`, `name = "wounds"`, "indicator[wound-infection] next look, indicator[wounds] filling"},
		{`ids = "none"`, `ids = "kept"`, "indicator[payment-failure].ids rebuild"},
		{`folder = "tailbell-data"`, `folder = "elsewhere"`, "folder restart"},
		{`measure = "proportion"`, ``, "indicator[wound-infection].measure rebuild, indicator[wound-infection].grain rebuild, indicator[wound-infection].baseline[1] next look"},
	}
	for _, test := range tests {
		text := strings.Replace(old, test.from, test.to, 1)
		if test.from == `every = "1d" ` {
			text = strings.Replace(text, `windows = ["28d"`, `windows = ["4w"`, 1)
			test.want += ", indicator[line-infection].windows next look, indicator[line-infection].windows next look" +
				", indicator[line-infection].windows filling, indicator[line-infection].windows filling"
		}
		if text == old {
			t.Fatalf("%q is not in the sample", test.from)
		}
		var got []string
		for _, c := range Compare(mustParse(t, old), mustParse(t, text)) {
			got = append(got, c.Key+" "+c.Class.String())
		}
		if strings.Join(got, ", ") != test.want {
			t.Errorf("%s -> %s:\n got %s\nwant %s", test.from, test.to, strings.Join(got, ", "), test.want)
		}
	}
}

// TestCompareSeesEveryField changes every field of a set-up in turn: a field
// that is added to the set-up and forgotten in Compare fails here.
func TestCompareSeesEveryField(t *testing.T) {
	exempt := []string{"Text", "Digest", "Indicators.Line", "Indicators.Zone", "Indicators.Name", "Indicators.Windows.Slots"}
	var exposure Exposure
	var kind BaselineKind
	fresh := func() *Setup {
		s := mustParse(t, string(Sample()))
		s.Limits.Archive = Every{10, Year}
		s.Outlets = []Outlet{{
			Name: "ward", URL: "https://hooks.example.org", SecretFile: "secret", Mail: MailOutlet{To: []string{"ward@example.org"}},
			Command: []string{"/bin/ring"}, Told: Told{Indicators: []string{"fall"}, Series: []Pattern{NewPattern("**")}, Steps: []string{"opened"}},
		}}
		in := &s.Indicators[0]
		in.Exposure = exposure
		in.Sums = []Sum{NewSum("*/*/fall")}
		in.Allowance = &Allowance{Alerts: 1, Every: Every{5, Year}}
		in.Baselines = in.Baselines[:1]
		in.Baselines[0].Kind = kind
		in.Baselines[0].Strata = &Strata{By: ByWeekday, Factors: []float64{1, 1, 1, 1, 1, 1, 1}}
		in.Baselines[0].Delay = &Delay{Ages: []time.Duration{0, time.Hour}, Reported: []float64{0.5, 1}}
		return s
	}
	var walk func(path string, at func(*Setup) reflect.Value)
	walk = func(path string, at func(*Setup) reflect.Value) {
		if slices.Contains(exempt, path) {
			return
		}
		v := at(fresh())
		switch {
		case v.Type() == reflect.TypeFor[time.Time](), v.Type() == reflect.TypeFor[Pattern](), v.Type() == reflect.TypeFor[Sum]():
		case v.Kind() == reflect.Struct:
			for i := range v.NumField() {
				walk(strings.TrimPrefix(path+"."+v.Type().Field(i).Name, "."), func(s *Setup) reflect.Value { return at(s).Field(i) })
			}
			return
		case v.Kind() == reflect.Pointer:
			walk(path, func(s *Setup) reflect.Value { return at(s).Elem() })
			return
		case v.Kind() == reflect.Slice:
			walk(path, func(s *Setup) reflect.Value { return at(s).Index(0) })
			return
		}
		// A baseline of one kind does not show the fields of another, nor an
		// exposure that of another.
		for i := range 4 {
			kind, exposure = BaselineKind(i), Exposure(i%3)
			before, after := fresh(), fresh()
			alter(t, path, at(after))
			if len(Compare(before, after)) > 0 {
				return
			}
		}
		t.Errorf("Compare does not see a change of %s", path)
	}
	walk("", func(s *Setup) reflect.Value { return reflect.ValueOf(s).Elem() })
}

func alter(t *testing.T, path string, v reflect.Value) {
	t.Helper()
	switch {
	case v.Type() == reflect.TypeFor[time.Time]():
		v.Set(reflect.ValueOf(time.Date(2030, 1, 1, 0, 0, 0, 0, time.UTC)))
	case v.Type() == reflect.TypeFor[Pattern]():
		v.Set(reflect.ValueOf(NewPattern("other/**")))
	case v.Type() == reflect.TypeFor[Sum]():
		v.Set(reflect.ValueOf(NewSum("other/**")))
	case v.Kind() == reflect.String:
		v.SetString(v.String() + "x")
	case v.Kind() == reflect.Bool:
		v.SetBool(!v.Bool())
	case v.CanInt():
		// Enumerations go from their first to their second value and back.
		if n := v.Int(); n == 1 && strings.HasPrefix(v.Type().Name(), "E") || n == 1 && v.Type() == reflect.TypeFor[Measure]() {
			v.SetInt(0)
		} else {
			v.SetInt(n + 1)
		}
	case v.CanUint():
		v.SetUint(v.Uint() + 1)
	case v.CanFloat():
		v.SetFloat(v.Float() + 0.5)
	default:
		t.Fatalf("%s: no way to change a %s", path, v.Type())
	}
}

func TestChangeString(t *testing.T) {
	c := Change{Key: "indicator[falls].windows", Class: Filling, New: "84d", Effect: "it is looked at once it is full"}
	const want = "indicator[falls].windows: nothing -> 84d (filling): it is looked at once it is full"
	if c.String() != want {
		t.Errorf("got %s", c)
	}
	if s := fmt.Sprint(Class(9)); s != "Class(9)" {
		t.Errorf("got %s", s)
	}
}

// TestChangesReadWell holds that a change says nothing of what is not set, and
// counts no single slot.
func TestChangesReadWell(t *testing.T) {
	peers := func(span, windows string) *Setup {
		s := plain("", "kind = \"peers\"\nrefresh = \"1mo\"\nspan = \""+span+"\"\n")
		return mustParse(t, strings.Replace(s, `windows = [`, `windows = [`+windows, 1))
	}
	changes := Compare(peers("364d", ""), peers("728d", `"7d", { span = "14d", step = "7d" }, `))
	var told []string
	for _, c := range changes {
		told = append(told, c.Key+": "+c.Old+" -> "+c.New)
	}
	for _, want := range []string{
		"windows:  -> 7d, a look every slot", "windows:  -> 14d, a look every 7 slots",
		"baseline[1]: all series: peers, 364 slots, refresh 1mo, min_events 1 -> all series: peers, 728 slots, refresh 1mo, min_events 1",
	} {
		if !slices.ContainsFunc(told, func(s string) bool { return strings.HasSuffix(s, want) }) {
			t.Errorf("%q is not among %q", want, told)
		}
	}
}
