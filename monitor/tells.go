package monitor

// Tells reports whether Drain would hand over something that other partitions are
// to be told.
func (e *Engine) Tells() bool { return len(e.told) > 0 }
