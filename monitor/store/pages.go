package store

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"hash/fnv"
	"os"
)

// bbolt trusts its pages: a damaged number on one of them sends it in circles
// or outside its map, which no recover catches. So the pages of a file are
// read here first, by plain reads, each number checked before it is followed.
//
// A file is an array of pages. Each begins with
//
//	id 8 | flags 2 | count 2 | overflow 4     (bytes, in the machine's order)
//
// and runs over into the next overflow pages. Pages 0 and 1 are the meta pages;
// the valid one with the higher transaction number leads to the root and to
// the list of free pages.

const (
	pageHeader = 16
	flagBranch = 0x01
	flagLeaf   = 0x02
	flagFree   = 0x10

	boltMagic   = 0xED0CDAED
	boltVersion = 2
)

var order = binary.NativeEndian

// sheet is what the meta pages say.
type sheet struct {
	pageSize             uint64
	root, freelist, high uint64
	transaction          uint64
	// used counts the pages that are neither free nor beyond the end.
	used uint64
	// valid counts the meta pages whose checksum holds; ours says that at
	// least one claims to be bbolt's, newer that one is of a later version.
	valid       int
	ours, newer bool
}

// readSheet reads the meta pages. Only a failing disk is an error.
func readSheet(f *os.File) (sheet, error) {
	var best sheet
	info, err := f.Stat()
	if err != nil {
		return best, err
	}
	offsets := []int64{0}
	for size := int64(1 << 10); size <= 16<<20; size <<= 1 {
		offsets = append(offsets, size)
	}
	ours, newer, valid := false, false, 0
	for _, at := range offsets {
		var page [pageHeader + 64]byte
		if at+int64(len(page)) > info.Size() {
			break
		}
		if _, err := f.ReadAt(page[:], at); err != nil {
			return best, err
		}
		m := page[pageHeader:]
		if order.Uint32(m) != boltMagic || (at != 0 && order.Uint64(page[:]) != 1) {
			continue
		}
		ours = true
		h := fnv.New64a()
		if _, err := h.Write(m[:56]); err != nil {
			return best, err
		}
		size := uint64(order.Uint32(m[8:]))
		if h.Sum64() != order.Uint64(m[56:]) || (at != 0 && uint64(at) != size) {
			continue
		}
		if order.Uint32(m[4:]) != boltVersion {
			newer = order.Uint32(m[4:]) > boltVersion
			continue
		}
		valid++
		found := sheet{
			pageSize: size, root: order.Uint64(m[16:]), freelist: order.Uint64(m[32:]),
			high: order.Uint64(m[40:]), transaction: order.Uint64(m[48:]),
		}
		if valid == 1 || found.transaction > best.transaction {
			best = found
		}
	}
	best.ours, best.newer, best.valid = ours, newer, valid
	return best, nil
}

// pages walks over the pages that a sheet leads to.
type pages struct {
	sheet
	f    *os.File
	seen []bool
	// spare is memory of pages that were checked, for others.
	spare [][]byte
}

// readPages checks all pages of a file and returns what its meta pages say.
func readPages(f *os.File) (sheet, error) {
	s, err := readSheet(f)
	if err != nil {
		return s, err
	}
	info, err := f.Stat()
	if err != nil {
		return s, err
	}
	switch {
	case s.valid == 0:
		return s, fmt.Errorf("neither meta page is valid: %w", ErrDamaged)
	case s.pageSize < 512 || s.pageSize&(s.pageSize-1) != 0 || s.high < 4 || s.high > 1<<48/s.pageSize:
		return s, fmt.Errorf("the meta page is absurd: %w", ErrDamaged)
	case uint64(info.Size()) < s.high*s.pageSize:
		return s, fmt.Errorf("the file ends at byte %d of %d, it was cut off: %w",
			info.Size(), s.high*s.pageSize, ErrDamaged)
	}
	p := pages{sheet: s, f: f, seen: make([]bool, s.high)}
	if err := p.tree(s.root, nil, nil); err != nil {
		return s, err
	}
	err = p.rest()
	return p.sheet, err
}

func (p *pages) bad(id uint64, format string, args ...any) error {
	return fmt.Errorf("page %d: %s: %w", id, fmt.Sprintf(format, args...), ErrDamaged)
}

// run reads a page with its overflow and marks it as seen.
func (p *pages) run(id uint64) ([]byte, error) {
	if id < 2 || id >= p.high {
		return nil, p.bad(id, "there is no such page")
	}
	page := p.memory(p.pageSize)
	if _, err := p.f.ReadAt(page, int64(id*p.pageSize)); err != nil {
		return nil, p.bad(id, "%v", err)
	}
	over := uint64(order.Uint32(page[12:]))
	if order.Uint64(page) != id || id+over >= p.high {
		return nil, p.bad(id, "its header is wrong")
	}
	for i := id; i <= id+over; i++ {
		if p.seen[i] {
			return nil, p.bad(i, "it is used twice")
		}
		p.seen[i] = true
	}
	if over == 0 {
		return page, nil
	}
	p.spare = append(p.spare, page)
	page = p.memory((over + 1) * p.pageSize)
	if _, err := p.f.ReadAt(page, int64(id*p.pageSize)); err != nil {
		return nil, p.bad(id, "%v", err)
	}
	return page, nil
}

// memory returns so many bytes; whoever is done with them puts them to the spare.
func (p *pages) memory(size uint64) []byte {
	if n := len(p.spare); n > 0 {
		b := p.spare[n-1]
		p.spare = p.spare[:n-1]
		if uint64(cap(b)) >= size {
			return b[:size]
		}
	}
	return make([]byte, size)
}

// tree checks the pages under a root; keys lie in [low, high), nil for no bound.
func (p *pages) tree(id uint64, low, high []byte) error {
	page, err := p.run(id)
	if err != nil {
		return err
	}
	defer func() { p.spare = append(p.spare, page) }()
	switch order.Uint16(page[8:]) {
	case flagLeaf:
		return p.leaf(id, page, low, high)
	case flagBranch:
		return p.branch(id, page, low, high)
	}
	return p.bad(id, "it is neither branch nor leaf")
}

func (p *pages) branch(id uint64, page, low, high []byte) error {
	count := int(order.Uint16(page[10:]))
	if count == 0 || pageHeader+16*count > len(page) {
		return p.bad(id, "its count %d is wrong", count)
	}
	keys, children := make([][]byte, count), make([]uint64, count)
	for i := range count {
		at := pageHeader + 16*i
		keys[i] = cut(page, at, order.Uint32(page[at:]), order.Uint32(page[at+4:]))
		children[i] = order.Uint64(page[at+8:])
	}
	if err := p.ascending(id, keys, low, high); err != nil {
		return err
	}
	for i, child := range children {
		next := high
		if i+1 < count {
			next = keys[i+1]
		}
		if err := p.tree(child, keys[i], next); err != nil {
			return err
		}
	}
	return nil
}

func (p *pages) leaf(id uint64, page, low, high []byte) error {
	count := int(order.Uint16(page[10:]))
	if pageHeader+16*count > len(page) {
		return p.bad(id, "its count %d is wrong", count)
	}
	keys := make([][]byte, count)
	for i := range count {
		at := pageHeader + 16*i
		pos, ksize, vsize := order.Uint32(page[at+4:]), order.Uint32(page[at+8:]), order.Uint32(page[at+12:])
		keys[i] = cut(page, at, pos, ksize)
		value := cut(page, at+int(ksize), pos, vsize)
		if value == nil {
			return p.bad(id, "element %d lies outside of it", i)
		}
		switch order.Uint32(page[at:]) {
		case 0:
		case 1:
			if err := p.bucket(id, value); err != nil {
				return err
			}
		default:
			return p.bad(id, "element %d is of no known kind", i)
		}
	}
	return p.ascending(id, keys, low, high)
}

// bucket checks a bucket's own pages: the value holds its root (8 bytes), a
// sequence (8), and if the root is 0 the only page itself.
func (p *pages) bucket(id uint64, value []byte) error {
	if len(value) < 16 {
		return p.bad(id, "a bucket is too short")
	}
	if root := order.Uint64(value); root != 0 {
		return p.tree(root, nil, nil)
	}
	inline := value[16:]
	if len(inline) < pageHeader || order.Uint16(inline[8:]) != flagLeaf {
		return p.bad(id, "a small bucket has no page")
	}
	return p.leaf(id, inline, nil, nil)
}

func (p *pages) ascending(id uint64, keys [][]byte, low, high []byte) error {
	for i, key := range keys {
		switch {
		case key == nil:
			return p.bad(id, "key %d lies outside of it", i)
		case i == 0 && low != nil && bytes.Compare(key, low) < 0,
			i > 0 && bytes.Compare(keys[i-1], key) >= 0,
			high != nil && bytes.Compare(key, high) >= 0:
			return p.bad(id, "key %d is out of order", i)
		}
	}
	return nil
}

// cut returns size bytes of a page at offset at+pos, nil if they lie outside.
func cut(page []byte, at int, pos, size uint32) []byte {
	from := uint64(at) + uint64(pos)
	if from+uint64(size) > uint64(len(page)) {
		return nil
	}
	return page[from : from+uint64(size) : from+uint64(size)]
}

// rest checks the list of free pages, and that every page is used or free.
func (p *pages) rest() error {
	page, err := p.run(p.freelist)
	if err != nil {
		return err
	}
	if order.Uint16(page[8:]) != flagFree {
		return p.bad(p.freelist, "it is no list of free pages")
	}
	count, at := uint64(order.Uint16(page[10:])), uint64(pageHeader)
	if count == 0xFFFF {
		count, at = order.Uint64(page[at:]), at+8
	}
	if count > p.high || at+8*count > uint64(len(page)) {
		return p.bad(p.freelist, "its count %d is wrong", count)
	}
	p.used = p.high - count
	for i := range count {
		id := order.Uint64(page[at+8*i:])
		if id < 2 || id >= p.high || p.seen[id] {
			return p.bad(p.freelist, "page %d is free and used", id)
		}
		p.seen[id] = true
	}
	for id := uint64(2); id < p.high; id++ {
		if !p.seen[id] {
			return p.bad(id, "it is neither used nor free")
		}
	}
	return nil
}
