package words

import "time"

// Archive says how many of the slots that no look needs any more are kept, and how
// many of those that began before from were let go, the first of them on the day of
// first: "1,204 slots since 2016-12-01 (UTC); before, 6,000 slots were let go, from
// 2016-03-01 on". With a zero from all are kept.
func Archive(kept, letGo uint64, first, from time.Time) string {
	text := Amount(int64(kept), "slots")
	if from.IsZero() {
		return text
	}
	text += " since " + from.UTC().Format(time.DateOnly) + " (UTC)"
	if letGo == 0 {
		return text + "; none had to be let go"
	}
	were := " were let go"
	if letGo == 1 {
		were = " was let go"
	}
	return text + "; before, " + Amount(int64(letGo), "slots") + were + ", from " + first.UTC().Format(time.DateOnly) + " on"
}
