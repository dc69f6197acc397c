package config

import (
	"fmt"
	"math"
)

// keepsAll is how a set-up says that the archive is kept whole.
const keepsAll = "all"

// maxArchiveYears bounds how long an archive is kept.
const maxArchiveYears = 250

// readArchive reads how long archived slots are kept; no length for good.
func (s section) readArchive() Every {
	n, given, ok := s.get("archive", textKind)
	if !given || !ok || n.text == keepsAll {
		return Every{}
	}
	const mend = `write e.g. "90d", "18mo" or "10y", or "all" to keep the whole archive`
	keep, err := ParseSpan(n.text)
	switch {
	case err != nil:
		s.fault("archive", fmt.Sprintf("%q is not a whole number, 1 or more, of days, weeks, months or years", n.text), mend)
	case keep.Unit < Day:
		s.fault("archive", fmt.Sprintf("%q is not in days or more: the archive goes by whole days", n.text), mend)
	case 1/keep.perYear() > maxArchiveYears:
		s.fault("archive", fmt.Sprintf("%q is more than %s years", n.text, grouped(maxArchiveYears)), mend)
	default:
		return keep
	}
	return Every{}
}

// archiveText is how long slots are archived, as a set-up says it.
func archiveText(keep Every) string {
	if keep.N == 0 {
		return keepsAll
	}
	return keep.String()
}

// archive compares how long slots are archived.
func (c *comparison) archive(a, b Every) {
	effect := "what was let go stays so: the archive reaches back further with time"
	if b.N > 0 && (a.N == 0 || b.longestHours() < a.longestHours()) {
		effect = "what began longer ago is let go at once and for good, counted in \"tailbell status\"; \"tailbell store copy\" beforehand keeps it"
	}
	c.value("archive", NextLook, archiveText(a), archiveText(b), effect)
}

func (p *prose) archive(keep Every) {
	if keep.N == 0 {
		return
	}
	p.line("Counts that no look needs any more are archived for %s after they began; what is older is let go by whole days, for good, and counted.", lengthWords(keep))
	p.line("So reports and baselines that are made from the store reach no further back than that.")
}

// archive finds indicators of which nothing would ever be archived.
func (d *doubts) archive(in *Indicator, i int, keep Every) {
	if keep.N == 0 {
		return
	}
	held := in.heldHours()
	if keep.shortest().Hours() > held {
		return
	}
	d.at(in, i, "windows", fmt.Sprintf("with what corrections may change they reach back about %s days, and limits.archive is %s: when memory lets a slot go the archive has no place for it, and a report of the store tells of nothing older",
		about(math.Floor(held/24)), keep), "keep the archive for longer")
}

// heldHours is about how far back memory holds the slots of a series, in hours.
func (in *Indicator) heldHours() float64 {
	return float64(in.keptSlots())*in.Every.longestHours() + in.Horizon.Hours()
}
