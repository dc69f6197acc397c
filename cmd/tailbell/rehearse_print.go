package main

import (
	"fmt"
	"io"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/rehearse/plant"
)

// printRehearsal prints a rehearsal for people.
func printRehearsal(w io.Writer, in *config.Indicator, r *plant.Report) error {
	p := &rehearsalPage{baselinePage{width: widthOf(w)}, r}
	p.line("REHEARSAL of %s (%s): %s histories, an excess of shape %s over %s in each, seed %d",
		in.Title, in.Name, words.Whole(int64(r.Histories)), r.Shape, r.Length, r.Seed)
	for i, s := range r.Setups {
		p.line("  set-up %s%s, digest %s: %s", p.letter(i), s.Name, s.Digest[:16], s.Limit)
	}
	if r.Data != "" {
		p.line("  data %s", r.Data[:16])
	}
	p.wrap(r.How)
	p.found()
	p.falseAlerts()
	p.predictive()
	p.pairs()
	p.against()
	p.line("")
	p.wrap(r.Caution)
	_, err := w.Write(p.Bytes())
	return err
}

type rehearsalPage struct {
	baselinePage
	report *plant.Report
}

// letter tells two set-ups apart.
func (p *rehearsalPage) letter(i int) string {
	if len(p.report.Setups) == 1 {
		return ""
	}
	return string(rune('A'+i)) + " "
}

func (p *rehearsalPage) level() string { return trim(100*p.report.Level) + " %" }

func shareText(s plant.Share) string {
	return fmt.Sprintf("%.3f (%.3f to %.3f)", s.Share, s.Lower, s.Upper)
}

func (p *rehearsalPage) found() {
	p.line("\nFOUND IN TIME, with exact %s bounds; delays in days, the median with bounds by the bootstrap", p.level())
	rows := [][]string{{"ratio", "by", "found in time", "late", "masked", "by chance", "delay", "quartiles", "half of all"}}
	for _, f := range p.report.Found {
		row := []string{trim(f.Ratio), p.letter(f.Setup) + "alerts", shareText(f.InTime), fmt.Sprint(f.Late), fmt.Sprint(f.Masked), fmt.Sprintf("%.3f", f.ByChance.Share), "-", "-", "-"}
		if f.Window != "" {
			row[1], row[3], row[4] = p.letter(f.Setup)+"window "+f.Window, "", ""
		}
		if d := f.Delay; d != nil {
			row[6] = fmt.Sprintf("%s (%s to %s)", short(d.Median), short(d.Lower), short(d.Upper))
			row[7] = short(d.First) + ", " + short(d.Third)
			if d.Half != nil {
				row[8] = short(*d.Half)
			}
		}
		rows = append(rows, row)
	}
	p.table(rows)
	p.line(`  "late": found after the end of the excess. "masked": an alert signalled already, and none opened.`)
	p.line(`  "by chance": the same would have been seen there without the excess. "half of all": the day by which half of all`)
	p.line(`  excesses were found, those not found counted as never.`)
	if n := p.report.RefusedPlanted; n > 0 {
		p.line("  %s came after the horizon, as the slot's own data did, and were refused.", amount(n, "planted observations"))
	}
}

func (p *rehearsalPage) falseAlerts() {
	p.line("\nFALSE ALERTS a year and series, with Garwood's exact %s bounds", p.level())
	for _, f := range p.report.False {
		switch {
		case !f.Told:
			p.wrap(p.letter(f.Setup) + "They can't be told: a real history holds excesses of its own, and no file of known episodes says which (--known).")
			continue
		case f.Resampled[1] > 0:
			p.line("  %s%s (%s to %s; %s to %s by the bootstrap over histories): %s in %s years", p.letter(f.Setup), short(f.Rate), short(f.Lower), short(f.Upper),
				short(f.Resampled[0]), short(f.Resampled[1]), words.Whole(f.Alerts), short(f.Years))
		default:
			p.line("  %s%s (%s to %s): %s in %s years outside known episodes", p.letter(f.Setup), short(f.Rate), short(f.Lower), short(f.Upper), words.Whole(f.Alerts), short(f.Years))
		}
	}
}

func (p *rehearsalPage) predictive() {
	if len(p.report.Predict) == 0 {
		return
	}
	p.line("\nPREDICTIVE VALUE of an alert, if excesses come so often; its bounds hold at %s together", p.level())
	rows := [][]string{{"ratio", "excesses a year and series", "share of alerts that stand for an excess"}}
	for _, v := range p.report.Predict {
		rows = append(rows, []string{p.letter(v.Setup) + trim(v.Ratio), trim(v.Frequency), fmt.Sprintf("%.3f (%.3f to %.3f)", v.Value, v.Lower, v.Upper)})
	}
	p.table(rows)
}

func (p *rehearsalPage) pairs() {
	if len(p.report.Pairs) == 0 {
		return
	}
	p.line("\nA AND B on the same planted histories: found in time by")
	rows := [][]string{{"ratio", "both", "A alone", "B alone", "neither", "p of the difference", "B later by, days"}}
	for _, x := range p.report.Pairs {
		row := []string{trim(x.Ratio), fmt.Sprint(x.Both), fmt.Sprint(x.OnlyFirst), fmt.Sprint(x.OnlySecond), fmt.Sprint(x.Neither), short(x.P), "-"}
		if l := x.Later; l != nil {
			row[6] = fmt.Sprintf("%s (%s to %s)", short(l.Median), short(l.Lower), short(l.Upper))
		}
		rows = append(rows, row)
	}
	p.table(rows)
}

func (p *rehearsalPage) against() {
	for _, a := range p.report.Against {
		if a.Sensitivity.Of == 0 && a.Predictive.Of == 0 {
			continue
		}
		p.line("\n%sTHE HISTORY AS IT IS, against what is known of it", p.letter(a.Setup))
		if s := a.Sensitivity; s.Of > 0 {
			p.line("  sensitivity       %s: in %d of %d known episodes an alert opened, in %d of them after its end", shareText(s), s.Count, s.Of, a.Late)
		}
		if s := a.Predictive; s.Of > 0 {
			p.line("  predictive value  %s: %d of %s stand for something real; %d of the others were withdrawn", shareText(s), s.Count, amount(s.Of, "alerts"), a.Withdrawn)
		}
		if a.Undecided > 0 {
			p.line("  %s not marked, and no known episodes were given: left out", amount(a.Undecided, "alerts"))
		}
		if d := a.Timeliness; d != nil {
			p.line("  timeliness        median %s days, quartiles %s and %s", short(d.Median), short(d.First), short(d.Third))
		}
		rows := [][]string{{"episode", "", "from", "to", "first alert", "after"}}
		for _, e := range a.Episodes {
			row := []string{e.Series, e.Direction, e.From.Format("2006-01-02"), e.To.Format("2006-01-02"), "none", ""}
			if e.Found {
				row[4], row[5] = e.Alert, short(e.Days)+" days"
			}
			rows = append(rows, row)
		}
		if len(rows) > 1 {
			p.table(rows)
		}
	}
}
