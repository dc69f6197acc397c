package config

import "slices"

// Spans reports whether the series of the indicator, or the members of a sum of
// it, may lie in several partitions, whatever the number of partitions is: their
// first keyParts parts do not say where they lie.
func (in *Indicator) Spans(keyParts int) bool {
	return !onePartition(in.Series, keyParts) || len(in.Gathered(keyParts)) > 0
}

// CountsAcross reports whether partitions tell each other, day by day, what they
// count of the indicator: its series may lie in several, and share an allowance or
// are each other's peers.
func (in *Indicator) CountsAcross(keyParts int) bool {
	shared := in.Allowance != nil && in.Allowance.PerIndicator
	return (shared || in.hasPeers()) && in.Spans(keyParts)
}

func (in *Indicator) hasPeers() bool {
	return slices.ContainsFunc(in.Baselines, func(b Baseline) bool { return b.Kind == Peers })
}
