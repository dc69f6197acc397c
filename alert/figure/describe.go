package figure

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"

	"tailbell/alert/words"
)

// Describe says in words what SVG shows.
func (s *Series) Describe() string {
	if len(s.Points) == 0 {
		return "No looks to show."
	}
	from, to := s.Points[0].At, s.Points[len(s.Points)-1].At
	text := fmt.Sprintf("%s in each window of %s, from %s to %s: %s.", capital(s.noun()), s.Window, when(from), when(to),
		words.Amount(int64(len(s.Points)), "looks"))
	var highest, latest *Point
	made, signals := 0, 0
	for i := range s.Points {
		p := &s.Points[i]
		if !p.Made {
			continue
		}
		made++
		latest = p
		if highest == nil || p.Events > highest.Events {
			highest = p
		}
		if p.Signals || p.SignalsLow {
			signals++
		}
	}
	if latest != nil {
		text += fmt.Sprintf(" The latest is %s on %s", words.Whole(latest.Events), when(latest.At)) + against(latest) +
			fmt.Sprintf("; the highest %s on %s.", words.Whole(highest.Events), when(highest.At))
	}
	text += " " + strconv.Itoa(signals) + " of them " + verb(signals) + "."
	if missing := len(s.Points) - made; missing > 0 {
		text += fmt.Sprintf(" %s not made.", words.Amount(int64(missing), "looks"))
	}
	return text
}

func (s *Series) noun() string {
	if s.Events == "" {
		return "events"
	}
	return s.Events
}

func verb(n int) string {
	if n == 1 {
		return "signals"
	}
	return "signal"
}

// against says what a count is held against.
func against(p *Point) string {
	var parts []string
	if p.HasCritical {
		parts = append(parts, "it signals at "+words.Whole(p.Critical)+" or more")
	}
	if p.HasFloor {
		parts = append(parts, "it signals at "+words.Whole(p.Floor)+" or fewer")
	}
	if !math.IsNaN(p.Expected) {
		parts = append(parts, "about "+words.Number(p.Expected)+" would be usual")
	}
	if len(parts) == 0 {
		return ""
	}
	return " (" + strings.Join(parts, ", ") + ")"
}

// DescribeRates says in words what RateSVG shows.
func (s *Series) DescribeRates() string {
	for i := len(s.Points) - 1; i >= 0; i-- {
		p := &s.Points[i]
		if !p.Made || math.IsNaN(p.Rate) {
			continue
		}
		text := fmt.Sprintf("The latest rate is %s %s on %s, exact bounds %s", words.Number(p.Rate), s.Unit, when(p.At), p.bounds())
		if !math.IsNaN(p.Usual) {
			text += "; usual is " + words.Number(p.Usual)
		}
		return text + "."
	}
	return "No rate to show."
}

// brief says in a few words what TrendSVG shows.
func (s *Series) brief() string {
	var counts []string
	signals := 0
	for i := range s.Points {
		p := &s.Points[i]
		if !p.Made {
			counts = append(counts, "no look")
			continue
		}
		if p.Signals || p.SignalsLow {
			signals++
		}
		counts = append(counts, strconv.FormatInt(p.Events, 10))
	}
	if n := len(counts); n > 8 {
		counts = counts[n-8:]
	}
	if len(counts) == 0 {
		return "no looks yet"
	}
	text := "latest counts " + strings.Join(counts, ", ")
	if signals > 0 {
		text += "; " + strconv.Itoa(signals) + " of the " + strconv.Itoa(len(s.Points)) + " shown " + verb(signals)
	}
	return text
}

// when writes a boundary: the day before a midnight, else the time too.
func when(t time.Time) string {
	if h, m, sec := t.Clock(); h == 0 && m == 0 && sec == 0 {
		return t.AddDate(0, 0, -1).Format("2 January 2006")
	}
	return t.Format("2 January 2006 15:04")
}

func capital(s string) string {
	if s == "" || s[0] < 'a' || s[0] > 'z' {
		return s
	}
	return string(s[0]-'a'+'A') + s[1:]
}

// Columns are the heads of Rows.
func (s *Series) Columns() []string {
	return []string{"To", capital(s.noun()), "Exposure", "Usual", "Signals at", "Rate " + s.Unit, "Exact bounds", "Remarks"}
}

// Rows are the numbers behind the pictures, the latest first.
func (s *Series) Rows() [][]string {
	rows := make([][]string, 0, len(s.Points))
	for i := len(s.Points) - 1; i >= 0; i-- {
		rows = append(rows, s.Points[i].row())
	}
	return rows
}

func (p *Point) row() []string {
	row := []string{when(p.At), "", "", "", "", "", "", p.remarks()}
	if !p.Made {
		return row
	}
	row[1], row[2] = words.Whole(p.Events), p.Exposure
	if !math.IsNaN(p.Expected) {
		row[3] = words.Number(p.Expected)
	}
	var at []string
	if p.HasCritical {
		at = append(at, words.Whole(p.Critical)+" or more")
	}
	if p.HasFloor {
		at = append(at, words.Whole(p.Floor)+" or fewer")
	}
	row[4] = strings.Join(at, ", ")
	if !math.IsNaN(p.Rate) {
		row[5] = words.Number(p.Rate)
		row[6] = p.bounds()
	}
	return row
}

// bounds are those of the rate; without exposure there is no upper one.
func (p *Point) bounds() string {
	switch {
	case math.IsNaN(p.Lower) || math.IsNaN(p.Upper):
		return "none"
	case math.IsInf(p.Upper, 1):
		return "from " + words.Number(p.Lower)
	}
	lower, upper := words.Pair(p.Lower, p.Upper)
	return lower + " to " + upper
}

// remarks says in words what the shapes say.
func (p *Point) remarks() string {
	var all []string
	if !p.Made {
		return "no look: " + p.Why
	}
	if p.Signals {
		all = append(all, "\u25b2 signals")
	}
	if p.SignalsLow {
		all = append(all, "\u25bc signals: fewer")
	}
	if p.Provisional {
		all = append(all, "\u25cb provisional")
	}
	if p.Late {
		all = append(all, "\u25c6 holds late events")
	}
	return strings.Join(all, ", ")
}
