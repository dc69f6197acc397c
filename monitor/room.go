package monitor

// room is where what a Drain hands over is written: piece behind piece in blocks
// of memory, so that not each of very many small pieces has one of its own.
type room struct{ block []byte }

const (
	roomBlock = 32 << 10
	// roomLeast is what is left of a block, at least, where a piece is begun:
	// most fit in it.
	roomLeast = 512
)

// next is where the next piece is appended.
func (r *room) next() []byte {
	if cap(r.block)-len(r.block) < roomLeast {
		r.block = make([]byte, 0, roomBlock)
	}
	return r.block[len(r.block):]
}

// keep returns the piece that was appended to next.
func (r *room) keep(piece []byte) []byte {
	if n := len(piece); n <= cap(r.block)-len(r.block) {
		r.block = r.block[:len(r.block)+n]
	} // else it has moved to an array of its own
	return piece[:len(piece):len(piece)]
}
