package main

import (
	"bufio"
	"bytes"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// call is one system call of the daemon, as it was traced.
type call struct {
	at        float64 // seconds since 1970, when it began
	name      string
	args      []string
	result    int64
	completed bool // this is where it returned, for one that was interrupted
	whole     bool // it began and returned here
	thread    string
}

// traced are the system calls that decide what a disk holds.
const traced = "openat,close,lseek,write,pwrite64,ftruncate,fallocate,fsync,fdatasync,rename,renameat,renameat2,unlink,unlinkat,link,linkat"

var (
	wholeCall = regexp.MustCompile(`^(\d+) +([\d.]+) (\w+)\((.*)\) += (-?\d+)`)
	callBegan = regexp.MustCompile(`^(\d+) +([\d.]+) (\w+)\((.*?),? *<unfinished \.\.\.>`)
	callEnded = regexp.MustCompile(`^(\d+) +([\d.]+) <\.\.\. (\w+) resumed>(.*)\) += (-?\d+)`)
)

// readTrace reads what strace wrote with -f -ttt -xx.
func readTrace(t *testing.T, path string) (calls []call) {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := f.Close(); err != nil {
			t.Error(err)
		}
	}()
	began := map[string]call{}
	lines := bufio.NewScanner(f)
	lines.Buffer(nil, 256<<20)
	for lines.Scan() {
		line := lines.Bytes()
		if m := wholeCall.FindSubmatch(line); m != nil {
			calls = append(calls, callOf(t, m[1], m[2], m[3], m[4], m[5], true))
		} else if m := callBegan.FindSubmatch(line); m != nil {
			c := callOf(t, m[1], m[2], m[3], m[4], []byte("0"), false)
			began[c.thread] = c
			calls = append(calls, c)
		} else if m := callEnded.FindSubmatch(line); m != nil {
			c := began[string(m[1])]
			c.args = append(slices.Clone(c.args), callOf(t, m[1], m[2], m[3], m[4], m[5], false).args...)
			c.result, err = strconv.ParseInt(string(m[5]), 10, 64)
			if err != nil {
				t.Fatal(err)
			}
			c.completed = true
			calls = append(calls, c)
		}
	}
	if err := lines.Err(); err != nil {
		t.Fatal(err)
	}
	return calls
}

func callOf(t *testing.T, thread, at, name, args, result []byte, whole bool) call {
	t.Helper()
	c := call{thread: string(thread), name: string(name), whole: whole}
	var err error
	if c.at, err = strconv.ParseFloat(string(at), 64); err != nil {
		t.Fatal(err)
	}
	if c.result, err = strconv.ParseInt(string(result), 10, 64); err != nil {
		t.Fatal(err)
	}
	for _, one := range strings.Split(string(args), ", ") {
		if one != "" {
			c.args = append(c.args, one)
		}
	}
	return c
}

// text decodes a string of \x.. bytes.
func (c *call) text(i int) []byte {
	raw := strings.ReplaceAll(strings.Trim(strings.TrimSuffix(c.args[i], "..."), `"`), `\x`, "")
	b := make([]byte, len(raw)/2)
	if _, err := fmt.Sscanf(raw, "%x", &b); err != nil {
		return nil
	}
	return b
}

func (c *call) number(i int) int64 {
	n, err := strconv.ParseInt(strings.TrimSpace(c.args[i]), 0, 64)
	if err != nil {
		return -1
	}
	return n
}

// file is what a file holds, and what of it is on the disk for good.
type file struct {
	live, durable []byte
	pending       []edit // what was written since
}

// edit is one write, or with data nil a new length.
type edit struct {
	offset int64
	data   []byte
}

func (e edit) apply(to []byte) []byte {
	if e.data == nil {
		if int64(len(to)) >= e.offset {
			return to[:e.offset:e.offset]
		}
		return append(to, make([]byte, e.offset-int64(len(to)))...)
	}
	if end := e.offset + int64(len(e.data)); end > int64(len(to)) {
		to = append(to, make([]byte, end-int64(len(to)))...)
	}
	copy(to[e.offset:], e.data)
	return to
}

type handle struct {
	file     *file
	offset   int64
	appended bool
	synced   bool // every write is
}

// disk is a disk that keeps for good only what was synced: the data of a file
// by a sync of it, names by the next sync of anything, in order.
type disk struct {
	folder  string
	live    map[string]*file
	durable map[string]*file
	renames []func(names map[string]*file)
	handles map[int64]*handle
	syncing map[string]func() // by thread: what its sync makes durable
}

func newDisk(folder string) *disk {
	return &disk{
		folder: folder, live: map[string]*file{}, durable: map[string]*file{},
		handles: map[int64]*handle{}, syncing: map[string]func(){},
	}
}

func (d *disk) rename(f func(names map[string]*file)) {
	f(d.live)
	d.renames = append(d.renames, f)
}

// take follows one call.
func (d *disk) take(c *call) {
	begins, ends := c.whole || !c.completed, c.whole || c.completed
	switch c.name {
	case "fsync", "fdatasync":
		if begins {
			d.beginSync(c)
		}
		if done := d.syncing[c.thread]; ends && done != nil && c.result == 0 {
			done()
			delete(d.syncing, c.thread)
		}
		return
	case "write", "pwrite64", "ftruncate", "fallocate":
		if begins {
			d.write(c)
		} else if done := d.syncing[c.thread]; done != nil {
			done()
			delete(d.syncing, c.thread)
		}
		return
	}
	if !ends || c.result < 0 {
		return
	}
	switch c.name {
	case "openat":
		d.open(c)
	case "close":
		delete(d.handles, c.number(0))
	case "lseek":
		if h := d.handles[c.number(0)]; h != nil {
			h.offset = c.result
		}
	case "rename":
		d.move(c.text(0), c.text(1), true)
	case "renameat", "renameat2":
		d.move(c.text(1), c.text(3), true)
	case "linkat":
		d.move(c.text(1), c.text(3), false)
	case "link":
		d.move(c.text(0), c.text(1), false)
	case "unlink":
		d.remove(c.text(0))
	case "unlinkat":
		d.remove(c.text(1))
	}
}

func (d *disk) open(c *call) {
	path := string(c.text(1))
	if !strings.HasPrefix(path, d.folder) {
		delete(d.handles, c.result)
		return
	}
	flags := c.args[2]
	f := d.live[path]
	if f == nil {
		if !strings.Contains(flags, "O_CREAT") {
			d.handles[c.result] = nil // a folder
			return
		}
		f = &file{}
		d.rename(func(names map[string]*file) { names[path] = f })
	}
	if strings.Contains(flags, "O_TRUNC") && len(f.live) > 0 {
		f.edit(edit{})
	}
	d.handles[c.result] = &handle{file: f, appended: strings.Contains(flags, "O_APPEND"), synced: strings.Contains(flags, "SYNC")}
}

func (f *file) edit(e edit) {
	f.live = e.apply(f.live)
	f.pending = append(f.pending, e)
}

func (d *disk) write(c *call) {
	h := d.handles[c.number(0)]
	if h == nil {
		return
	}
	switch c.name {
	case "write":
		if h.appended {
			h.offset = int64(len(h.file.live))
		}
		data := c.text(1)
		h.file.edit(edit{h.offset, data})
		h.offset += int64(len(data))
	case "pwrite64":
		h.file.edit(edit{c.number(3), c.text(1)})
	case "ftruncate":
		h.file.edit(edit{offset: c.number(1)})
	case "fallocate":
		h.file.edit(edit{offset: max(int64(len(h.file.live)), c.number(2)+c.number(3))})
	}
	if h.synced && c.whole {
		d.beginSync(c)
		d.syncing[c.thread]()
		delete(d.syncing, c.thread)
	} else if h.synced {
		d.beginSync(c)
	}
}

// beginSync notes what a sync makes durable once it returns: what was written
// before it began.
func (d *disk) beginSync(c *call) {
	names := len(d.renames)
	h := d.handles[c.number(0)]
	edits := 0
	if h != nil {
		edits = len(h.file.pending)
	}
	d.syncing[c.thread] = func() {
		if n := min(names, len(d.renames)); n > 0 {
			for _, f := range d.renames[:n] {
				f(d.durable)
			}
			d.renames = d.renames[n:]
		}
		if h == nil {
			return
		}
		n := min(edits, len(h.file.pending))
		for _, e := range h.file.pending[:n] {
			h.file.durable = e.apply(h.file.durable)
		}
		h.file.pending = h.file.pending[n:]
	}
}

func (d *disk) move(from, to []byte, gone bool) {
	f := d.live[string(from)]
	if f == nil {
		return
	}
	d.rename(func(names map[string]*file) {
		names[string(to)] = f
		if gone {
			delete(names, string(from))
		}
	})
}

func (d *disk) remove(path []byte) {
	if d.live[string(path)] != nil {
		d.rename(func(names map[string]*file) { delete(names, string(path)) })
	}
}

// image writes into another folder what the disk holds when the power goes now.
// With a source of randomness some of what was not synced is there as well, in
// any order, as a disk may do.
func (d *disk) image(t *testing.T, to string, random *rand.Rand) {
	t.Helper()
	names := map[string]*file{}
	for path, f := range d.durable {
		names[path] = f
	}
	if random != nil {
		for _, f := range d.renames[:random.IntN(len(d.renames)+1)] {
			f(names)
		}
	}
	for path, f := range names {
		data := bytes.Clone(f.durable)
		if random != nil {
			for _, e := range f.pending {
				if random.IntN(2) == 0 {
					data = e.apply(data)
				}
			}
		}
		target := filepath.Join(to, strings.TrimPrefix(path, d.folder))
		if err := os.MkdirAll(filepath.Dir(target), 0o700); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(target, data, 0o600); err != nil {
			t.Fatal(err)
		}
	}
}
