package allowances

import (
	"flag"
	"fmt"
	"math"
	"os"
	"strings"
	"testing"
)

var (
	table = flag.Bool("table", false, "play the whole table and write it into README.md")
	only  = flag.String("cell", "", "with -table: play only cells whose name holds this, and write nothing")
)

// brief makes a cell a hundredth as long or so.
func brief(c Cell) *Cell {
	switch {
	case c.Shared:
		c.Series, c.Slots = together, 365+c.longest()
	case c.Whole:
		c.Series = 300
	case c.Reference != nil:
		c.Series, c.Slots = 40, 365*2+c.longest()
	case len(c.Windows) > 1 && (c.reported() || c.Factors != nil): // what takes the engine longest
		c.Series, c.Slots = 4, 365+c.longest()
	case c.Hourly:
		c.Series, c.Slots = 8, 24*100+c.longest()
	default:
		c.Series, c.Slots = 16, 365*2+c.longest()
	}
	return &c
}

func told(c Count) string { return fmt.Sprintf("%.4f ± %.4f", c.Mean, c.Err) }

// TestCells plays a short version of the table.
func TestCells(t *testing.T) {
	for _, c := range Cells() {
		o, err := brief(c).Play(1)
		if err != nil {
			t.Fatal(err)
		}
		t.Logf("%s: allowed %.3f, told %.4f, predicted %.4f; crossings %s (%d), first %d, alerts %s, %.3f of the looks signal",
			c.Name, o.Allowed(), o.Told(), o.Predicted(), told(o.Crossings()), o.Crossings().N, o.Firsts().N, told(o.Alerts()), o.lit)
		if f := o.Fault(); f != "" {
			t.Errorf("%s, seed 1: %s", c.Name, f)
		}
	}
}

// TestSameSeedSameOutcome holds what is played to its seeds, however it is spread
// over processors.
func TestSameSeedSameOutcome(t *testing.T) {
	c := brief(Cells()[1])
	c.Series = 2*together + 3
	a, err := c.Play(3, 4)
	if err != nil {
		t.Fatal(err)
	}
	b, err := c.Play(3, 4)
	if err != nil {
		t.Fatal(err)
	}
	if fmt.Sprint(a.series, a.limits, a.lit) != fmt.Sprint(b.series, b.limits, b.lit) {
		t.Error("the same seeds came to something else")
	}
}

// number4 is a number a year, or a dash.
func number4(v float64) string {
	if math.IsNaN(v) {
		return "–"
	}
	return fmt.Sprintf("%.3f", v)
}

// TestTable plays the whole table and writes it.
func TestTable(t *testing.T) {
	if !*table {
		t.Skip("the whole table takes half an hour of two idle processors: go test ./monitor/rehearse/allowances -run TestTable -table -v -timeout 3h")
	}
	var b strings.Builder
	line := func(cells ...string) { b.WriteString("| " + strings.Join(cells, " | ") + " |\n") }
	line("cell", "promise", "allowed", "told", "predicted", "crossings a year", "Garwood 95 %", "crossings", "alerts a year", "90 % of the series")
	b.WriteString(strings.Repeat("|---", 10) + "|\n")
	for _, c := range Cells() {
		if !strings.Contains(c.Name, *only) {
			continue
		}
		o, err := c.Play(1, 2, 3)
		if err != nil {
			t.Fatal(err)
		}
		x, a := o.Crossings(), o.Alerts()
		line(c.Name, c.Promise.String(), number4(o.Allowed()), number4(o.Told()), number4(o.Predicted()),
			fmt.Sprintf("%.3f ± %.3f", x.Mean, x.Err), fmt.Sprintf("%.3f to %.3f", x.Low, x.High), fmt.Sprint(x.N),
			fmt.Sprintf("%.3f ± %.3f", a.Mean, a.Err), fmt.Sprintf("%.2f", a.Quantile90))
		t.Logf("%s: %d series of %.2f years, allowed %.3f, told %.4f, predicted %.4f; crossings %s (%d), first %d, alerts %s, late %s, %.4f of the looks signal",
			c.Name, len(o.series), o.Years, o.Allowed(), o.Told(), o.Predicted(), told(x), x.N, o.Firsts().N, told(a), told(o.Late()), o.lit)
		if f := o.Fault(); f != "" {
			t.Errorf("%s: %s", c.Name, f)
		}
	}
	t.Logf("\n%s", b.String())
	if *only == "" {
		write(t, b.String())
	}
}

// write puts the table between the marks in the README.
func write(t *testing.T, text string) {
	t.Helper()
	const readme, begin, end = "README.md", "<!-- the table -->\n", "<!-- end of the table -->\n"
	all, err := os.ReadFile(readme)
	if err != nil {
		t.Fatal(err)
	}
	before, rest, ok := strings.Cut(string(all), begin)
	_, after, closed := strings.Cut(rest, end)
	if !ok || !closed {
		t.Fatalf("%s has no marks for the table", readme)
	}
	if err := os.WriteFile(readme, []byte(before+begin+"\n"+text+"\n"+end+after), 0o644); err != nil {
		t.Fatal(err)
	}
}
