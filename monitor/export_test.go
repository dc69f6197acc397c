package monitor

// Countings is how many indicators, in how many of their lives, partitions count for
// each other.
func (e *Engine) Countings() int { return len(e.countings) }
