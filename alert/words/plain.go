package words

import (
	"time"

	"tailbell/monitor/life"
)

// Number writes an expected number or a rate as the sentences do.
func Number(x float64) string { return number(x) }

// Pair writes two bounds as the sentences do: with decimals enough to tell them
// apart.
func Pair(lower, upper float64) (string, string) { return pair(lower, upper) }

// PValue writes p = 10^log10p as the sentences do.
func PValue(log10p float64) string { return pvalue(log10p) }

// Odds writes the chance 10^log10p as "about 1 of 38".
func Odds(log10p float64) string { return odds(log10p) }

// Grouped puts commas between groups of three digits of a plain decimal.
func Grouped(decimal string) string { return grouped(decimal) }

// Length writes a window in words: "28 days".
func Length(window string) string { return length(window) }

// Place turns the record's series into words, the narrowest part first.
func Place(r *life.Record) string { return place(r) }

// Noun names the events of a look in the plural.
func Noun(e *life.Evidence) string { return noun(e) }

// Brief gives the numbers of a look in one short phrase, in the record's zone.
func Brief(r *life.Record, e *life.Evidence) string {
	if h := r.Silence; h != nil {
		return "nothing heard; expected within " + clean(h.Within)
	}
	return brief(e, zoneOf(r))
}

// Numbers gives the ratio and how a look was judged, Basis by which usual rate.
func Numbers(e *life.Evidence) string { return numbers(e) }

// Basis says by which usual rate a look was judged.
func Basis(r *life.Record, e *life.Evidence) string { return basis(r, e) }

// Bounds gives the exact bounds of a look's rate, and the usual rate.
func Bounds(e *life.Evidence) string { return bounds(e) }

// Afterwards tells of the data after the opening look; "" where there are none.
func Afterwards(r *life.Record) string { return afterwards(r, zoneOf(r)) }

// Sources names the observations behind an alert; "" where none has an id.
func Sources(r *life.Record) string { return sources(r) }

// Per is what follows a rate of the look: " per 1,000 device-days".
func Per(e *life.Evidence) string { return per(e) }

// CautionOf is the caution that stands on the record.
func CautionOf(r *life.Record) string { return caution(r) }

// Zone is the record's zone.
func Zone(r *life.Record) *time.Location { return zoneOf(r) }

// Day writes a date without its time of day, Moment with it unless it is
// midnight.
func Day(t time.Time) string { return day(t) }

// Moment writes a date with its time of day, unless that is midnight.
func Moment(t time.Time) string { return moment(t) }

// Last names the end of a half-open span: its last day, or its hour.
func Last(t time.Time) string { return last(t) }

// SameLook reports whether two pieces of evidence are of one look.
func SameLook(a, b *life.Evidence) bool { return sameLook(a, b) }
