package history

// arena keeps many short texts in few pieces of memory.
type arena struct{ block []byte }

const arenaBlock = 256 << 10

// keep returns a copy of text.
func (a *arena) keep(text []byte) []byte {
	if cap(a.block)-len(a.block) < len(text) {
		a.block = make([]byte, 0, max(arenaBlock, len(text)))
	}
	first := len(a.block)
	a.block = append(a.block, text...)
	return a.block[first:len(a.block):len(a.block)]
}
