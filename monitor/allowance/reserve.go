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
