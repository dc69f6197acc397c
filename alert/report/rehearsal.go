package report

import (
	"fmt"
	"math"
	"strconv"

	"tailbell/alert/words"
	"tailbell/monitor/rehearse/plant"
)

func rehearsalTitle(r *plant.Report) string {
	return fmt.Sprintf("%s: excesses of shape %s over %s", r.Title, r.Shape, words.Length(r.Length))
}

// letter tells two set-ups apart.
func letter(r *plant.Report, i int) string {
	if len(r.Setups) < 2 {
		return ""
	}
	return string(rune('A'+i)) + " "
}

func three(x float64) string { return strconv.FormatFloat(x, 'f', 3, 64) }

// rehearsal tells a rehearsal.
func rehearsal(r *plant.Report) []block {
	text := fmt.Sprintf("%s, seed %d. %s", words.Amount(int64(r.Histories), "histories"), r.Seed, r.How)
	var setups []string
	for i, s := range r.Setups {
		digest := s.Digest
		setups = append(setups, fmt.Sprintf("%sset-up %s: %s (digest %s)", letter(r, i), s.Name, s.Limit, digest[:min(16, len(digest))]))
	}
	blocks := []block{{Text: text}, {List: setups}, {Table: foundTable(r)}, {
		Text: `"Late": found after the excess had ended. "Masked": an alert signalled already, and none opened. "By chance": the same would have been seen there without the excess.`,
	}}
	for _, f := range r.False {
		blocks = append(blocks, block{Text: falseText(r, &f)})
	}
	if t := predictTable(r); len(t.Rows) > 0 {
		blocks = append(blocks, block{Table: t})
	}
	if t := pairTable(r); len(t.Rows) > 0 {
		blocks = append(blocks, block{Table: t})
	}
	for i := range r.Against {
		blocks = append(blocks, against(r, &r.Against[i])...)
	}
	return append(blocks, block{Text: r.Caution})
}

func share(s plant.Share) string {
	return three(s.Share) + " (" + three(s.Lower) + " to " + three(s.Upper) + ")"
}

func foundTable(r *plant.Report) *table {
	t := &table{
		Caption: fmt.Sprintf("Excesses found in time, with exact %s %% bounds, and how many days after their beginning", multiple(100*r.Level)),
		Head:    []string{"ratio", "by", "found in time", "late", "masked", "by chance", "median delay", "quartiles"}, Numbers: []int{0, 3, 4},
	}
	for _, f := range r.Found {
		row := []string{multiple(f.Ratio), letter(r, f.Setup) + "alerts", share(f.InTime), words.Whole(f.Late), words.Whole(f.Masked), three(f.ByChance.Share), "-", "-"}
		if f.Window != "" {
			row[1], row[3], row[4] = letter(r, f.Setup)+"windows of "+words.Length(f.Window), "", ""
		}
		if d := f.Delay; d != nil {
			row[6] = words.Number(d.Median) + " (" + pair(d.Lower, d.Upper) + ")"
			row[7] = pair(d.First, d.Third)
		}
		t.Rows = append(t.Rows, row)
	}
	return t
}

func falseText(r *plant.Report, f *plant.False) string {
	who := letter(r, f.Setup)
	if !f.Told {
		return who + "False alerts can't be told: the history's own excesses are not labelled."
	}
	text := fmt.Sprintf("%sFalse alerts a year and series: %s (%s, Garwood's exact bounds): %s in %s years.", who, words.Number(f.Rate), pair(f.Lower, f.Upper),
		words.Whole(f.Alerts), words.Number(f.Years))
	if f.Resampled[1] > 0 {
		text += " By the bootstrap over histories: " + pair(f.Resampled[0], f.Resampled[1]) + "."
	}
	return text
}

func predictTable(r *plant.Report) *table {
	t := &table{
		Caption: "Share of alerts that stand for an excess, if excesses come so often",
		Head:    []string{"ratio", "excesses a year and series", "predictive value"}, Numbers: []int{0, 1},
	}
	for _, v := range r.Predict {
		t.Rows = append(t.Rows, []string{letter(r, v.Setup) + multiple(v.Ratio), multiple(v.Frequency), three(v.Value) + " (" + three(v.Lower) + " to " + three(v.Upper) + ")"})
	}
	return t
}

func pairTable(r *plant.Report) *table {
	t := &table{
		Caption: "A and B on the same planted histories",
		Head:    []string{"ratio", "both", "A alone", "B alone", "neither", "p of the difference", "B later by, days"}, Numbers: []int{0, 1, 2, 3, 4},
	}
	for _, x := range r.Pairs {
		row := []string{multiple(x.Ratio), words.Whole(x.Both), words.Whole(x.OnlyFirst), words.Whole(x.OnlySecond), words.Whole(x.Neither), words.PValue(math.Log10(x.P)), "-"}
		if l := x.Later; l != nil {
			row[6] = words.Number(l.Median) + " (" + pair(l.Lower, l.Upper) + ")"
		}
		t.Rows = append(t.Rows, row)
	}
	return t
}

// against tells how the alerts compare with what is known.
func against(r *plant.Report, a *plant.Record) []block {
	var list []string
	if s := a.Sensitivity; s.Of > 0 {
		list = append(list, fmt.Sprintf("Sensitivity %s: in %d of %s an alert opened, in %d of them after its end.", share(s), s.Count, words.Amount(s.Of, "known episodes"), a.Late))
	}
	if s := a.Predictive; s.Of > 0 {
		list = append(list, fmt.Sprintf("Predictive value positive %s: %d of %s stand for something real; %d of the others were withdrawn.", share(s), s.Count, words.Amount(s.Of, "alerts"), a.Withdrawn))
	}
	if a.Undecided > 0 {
		list = append(list, words.Amount(a.Undecided, "alerts")+" not marked, and no known episodes given: left out.")
	}
	if d := a.Timeliness; d != nil {
		list = append(list, fmt.Sprintf("Timeliness: median %s days, quartiles %s.", words.Number(d.Median), pair(d.First, d.Third)))
	}
	if len(list) == 0 {
		return nil
	}
	t := &table{Head: []string{"known episode", "direction", "from", "to", "first alert", "after, days", "note"}, Numbers: []int{5}}
	for _, e := range a.Episodes {
		row := []string{e.Series, e.Direction, e.From.Format(day), e.To.Format(day), "none", "", e.Note}
		if e.Found {
			row[4], row[5] = e.Alert, words.Number(e.Days)
		}
		t.Rows = append(t.Rows, row)
	}
	return []block{
		{Text: letter(r, a.Setup) + "The history as it is, against what is known of it (in the terms of the CDC's guidelines, MMWR 2001;50 RR-13):"},
		{List: list},
		{Table: t},
	}
}
