package store

import "encoding/binary"

// fields takes a payload apart. Once something is missing, bad is set and
// everything further is zero.
type fields struct {
	rest []byte
	bad  bool
}

func (f *fields) uvarint() uint64 {
	n, size := binary.Uvarint(f.rest)
	if size <= 0 {
		f.bad, f.rest = true, nil
		return 0
	}
	f.rest = f.rest[size:]
	return n
}

func (f *fields) varint() int64 {
	n, size := binary.Varint(f.rest)
	if size <= 0 {
		f.bad, f.rest = true, nil
		return 0
	}
	f.rest = f.rest[size:]
	return n
}

func (f *fields) bytes(n uint64) []byte {
	if n > uint64(len(f.rest)) {
		f.bad, f.rest = true, nil
		return nil
	}
	b := f.rest[:n:n]
	f.rest = f.rest[n:]
	return b
}
