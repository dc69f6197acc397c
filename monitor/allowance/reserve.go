package allowance

// Share is what each of the existing series gets of an allowance for all of
// them, perYear, of which the share reserve (in [0, 1)) is kept for series yet
// to come.
func Share(perYear, reserve float64, existing int) float64 {
	if existing < 1 {
		return 0
	}
	return perYear * (1 - reserve) / float64(existing)
}

// Newborn is what the i-th series (from 0) that begins within an epoch gets,
// until the next epoch counts it among the existing: half of the reserve, a
// quarter, an eighth and so on. However many come, together they never exceed
// the reserve.
func Newborn(perYear, reserve float64, i int) float64 {
	share := perYear * reserve
	for range min(i, 1000) + 1 {
		share /= 2
	}
	return share
}

// fewestCounted is how many series at least share a reserve that is not drawn on in
// turn.
const fewestCounted = 100

// Uncounted is what each series gets that is not among those counted, where nobody
// can tell how many others are not either: the reserve by their number, or by 100
// if they are fewer. Together the new ones never exceed the reserve as long as they
// are not more than that.
func Uncounted(perYear, reserve float64, counted int) float64 {
	return perYear * reserve / float64(max(counted, fewestCounted))
}
