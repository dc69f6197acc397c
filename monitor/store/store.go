package store

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"runtime/debug"
	"sync"
	"time"

	bolt "go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"
)

// Identity says whose state a store holds. It is written once, by Create.
type Identity struct {
	// Deployment is the name of the deployment.
	Deployment string `json:"deployment"`
	// Partition counts from 0 to Partitions-1; KeyParts leading name parts
	// decide a series' partition.
	Partition  int `json:"partition"`
	Partitions int `json:"partitions"`
	KeyParts   int `json:"key_parts"`
}

// String returns the identity in words.
func (id Identity) String() string {
	return fmt.Sprintf("deployment %q, partition %d of %d by %d name parts",
		id.Deployment, id.Partition, id.Partitions, id.KeyParts)
}

func (id Identity) validate() error {
	if id.Deployment == "" || id.Partitions < 1 || id.Partition < 0 || id.Partition >= id.Partitions || id.KeyParts < 1 {
		return fmt.Errorf("%s: a store needs a name and a partition that exists", id)
	}
	return nil
}

// Options adjust a store. The zero value is the default.
type Options struct {
	// MapBytes is the address space reserved for the file's map. Beyond it a
	// growing file has to wait for every open read. 0 means 16 GiB; address
	// space costs no memory.
	MapBytes int
	// MaxBytes limits the file; a write beyond it fails with ErrFull. 0 means
	// no limit.
	MaxBytes int
	// LockWait is how long to wait for another process to let go of the file.
	// 0 means half a second.
	LockWait time.Duration
	// Retention bounds what is kept of refusals.
	Retention Retention
	// Fault, if not nil, is asked before every step of a write; what it returns
	// happens instead. It lets tests break off anywhere.
	Fault func(step string) error
}

func (o Options) withDefaults() Options {
	if o.MapBytes <= 0 {
		o.MapBytes = 16 << 30
	}
	if runtime.GOOS == "windows" || ^uint(0)>>32 == 0 {
		o.MapBytes = 0 // there, the file itself would grow to it, or it would not fit
	}
	if o.LockWait <= 0 {
		o.LockWait = 500 * time.Millisecond
	}
	o.Retention = o.Retention.withDefaults()
	return o
}

// Store is one partition's state in one file. Its methods may be called from
// several goroutines; writes take turns.
type Store struct {
	path     string
	identity Identity
	opts     Options
	db       *bolt.DB
	fault    func(step string) error // Options.Fault
	tidings  tidings
	// writing is held during a write and during Check.
	writing struct {
		sync.Mutex
		failed error
	}
}

// pageSize of the files made, whatever the machine's.
const pageSize = 4096

// Create makes a new store in a file that must not exist yet, with its
// folders, and opens it. The file appears under its name once it is complete.
func Create(path string, id Identity, opts Options) (*Store, error) {
	if err := id.validate(); err != nil {
		return nil, fmt.Errorf("store %s: %w", path, err)
	}
	if _, err := os.Lstat(path); err == nil {
		return nil, fmt.Errorf("store %s: %w", path, fs.ErrExist)
	}
	folder := filepath.Dir(path)
	if err := os.MkdirAll(folder, 0o700); err != nil {
		return nil, fmt.Errorf("store %s: %w", path, err)
	}
	draft, err := os.CreateTemp(folder, filepath.Base(path)+".new-*")
	if err != nil {
		return nil, fmt.Errorf("store %s: %w", path, err)
	}
	err = errors.Join(draft.Close(), lay(draft.Name(), id))
	if err == nil {
		err = publish(draft.Name(), path)
	}
	if gone := os.Remove(draft.Name()); gone != nil && !errors.Is(gone, fs.ErrNotExist) {
		err = errors.Join(err, gone)
	}
	if err != nil {
		return nil, fmt.Errorf("store %s: %w", path, translate(err, false))
	}
	return Open(path, id, opts)
}

// lay writes an empty store into an empty file.
func lay(path string, id Identity) error {
	db, err := bolt.Open(path, 0o600, &bolt.Options{PageSize: pageSize, FreelistType: bolt.FreelistMapType})
	if err != nil {
		return err
	}
	err = db.Update(func(tx *bolt.Tx) error {
		for _, s := range allShelves() {
			if _, err := tx.CreateBucket([]byte(s.name)); err != nil {
				return err
			}
		}
		h := newHead()
		return errors.Join(writeMeta(tx, id), writeHead(tx, &h))
	})
	return errors.Join(err, db.Close())
}

// publish gives a complete file its name, unless the name is taken.
func publish(draft, path string) error {
	err := os.Link(draft, path)
	if err != nil && !errors.Is(err, fs.ErrExist) {
		err = os.Rename(draft, path) // a file system without links
	}
	if err != nil {
		return err
	}
	return syncFolder(filepath.Dir(path))
}

func syncFolder(path string) error {
	if runtime.GOOS == "windows" {
		return nil
	}
	d, err := os.Open(path)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}

// Open opens the store in a file that must exist. It looks at the file without
// writing first: what it refuses (ErrForeign, ErrDamaged, ErrFormatTooNew,
// ErrIdentity, ErrInUse) it leaves untouched.
func Open(path string, id Identity, opts Options) (*Store, error) {
	opts = opts.withDefaults()
	found, err := look(path, opts.LockWait)
	if err == nil && found != id {
		err = fmt.Errorf("it holds %s, wanted is %s: %w", found, id, ErrIdentity)
	}
	if err != nil {
		return nil, fmt.Errorf("store %s: %w", path, err)
	}
	return open(path, opts, &bolt.Options{
		Timeout:         opts.LockWait,
		FreelistType:    bolt.FreelistMapType,
		InitialMmapSize: opts.MapBytes,
		MaxSize:         opts.MaxBytes,
		NoStatistics:    true,
	})
}

// OpenReadOnly opens a store of any identity for reading. Others may read it
// at the same time; a writer is kept out.
func OpenReadOnly(path string, opts Options) (*Store, error) {
	opts = opts.withDefaults()
	if _, err := look(path, opts.LockWait); err != nil {
		return nil, fmt.Errorf("store %s: %w", path, err)
	}
	return open(path, opts, &bolt.Options{
		Timeout: opts.LockWait, FreelistType: bolt.FreelistMapType, ReadOnly: true, NoStatistics: true,
	})
}

func open(path string, opts Options, how *bolt.Options) (*Store, error) {
	db, err := bolt.Open(path, 0o600, how)
	if errors.Is(err, bolterrors.ErrTimeout) {
		err = ErrInUse
	}
	if err != nil {
		return nil, fmt.Errorf("store %s: %w", path, translate(err, false))
	}
	s := &Store{path: path, opts: opts, db: db, fault: opts.Fault}
	err = s.view(func(tx *bolt.Tx) error {
		var err error
		s.identity, err = readMeta(tx)
		return err
	})
	if err != nil {
		return nil, errors.Join(err, db.Close())
	}
	return s, nil
}

// Path returns the file's path.
func (s *Store) Path() string { return s.path }

// Identity returns whose state the store holds.
func (s *Store) Identity() Identity { return s.identity }

// Close waits for open reads and writes and lets go of the file. Closing
// again does nothing.
func (s *Store) Close() error {
	if err := s.db.Close(); err != nil {
		return fmt.Errorf("store %s: %w", s.path, err)
	}
	return nil
}

// view runs a short read.
func (s *Store) view(read func(tx *bolt.Tx) error) error {
	err := guard(func() error { return s.db.View(read) })
	if err != nil {
		return fmt.Errorf("store %s: %w", s.path, translate(err, false))
	}
	return nil
}

// update runs a write: all of it happens, fsynced, or nothing.
func (s *Store) update(step string, write func(tx *bolt.Tx, h *head) error) error {
	s.writing.Lock()
	defer s.writing.Unlock()
	err := s.writing.failed
	if err == nil {
		err = s.attempt(step, write)
	}
	if errors.Is(err, ErrFailed) && s.writing.failed == nil {
		s.writing.failed = err
	}
	if err != nil {
		return fmt.Errorf("store %s: %w", s.path, err)
	}
	return nil
}

func (s *Store) attempt(step string, write func(tx *bolt.Tx, h *head) error) error {
	committing, told := false, 0
	err := guard(func() (err error) {
		if err := s.ask(step); err != nil {
			return err
		}
		tx, err := s.db.Begin(true)
		if err != nil {
			return err
		}
		defer func() {
			if undo := tx.Rollback(); undo != nil && !errors.Is(undo, bolterrors.ErrTxClosed) {
				err = errors.Join(err, undo)
			}
		}()
		h, err := readHead(tx)
		if err != nil {
			return err
		}
		if told, err = s.writeTidings(tx, &h); err != nil {
			return err
		}
		if err := write(tx, &h); err != nil {
			return err
		}
		if err := errors.Join(writeHead(tx, &h), s.ask(step+" written")); err != nil {
			return err
		}
		committing = true
		if err := tx.Commit(); err != nil {
			return err
		}
		s.tidings.written(told)
		return s.ask(step + " durable")
	})
	return translate(err, committing)
}

func (s *Store) ask(step string) error {
	if s.fault == nil {
		return nil
	}
	return s.fault(step)
}

// guard turns what damaged pages do to bbolt (a failed assertion, an access
// outside the file) into an error.
func guard(run func() error) (err error) {
	defer debug.SetPanicOnFault(debug.SetPanicOnFault(true))
	defer func() {
		if r := recover(); r != nil {
			err = fmt.Errorf("%v: %w", r, ErrDamaged)
		}
	}()
	return run()
}

// The keys of the meta bucket. They and their values, but for the identity,
// stay readable for every later version: never change them.
var (
	magicKey    = []byte("magic")
	formatKey   = []byte("format")
	identityKey = []byte("identity")
)

const magic = "tailbell store"

// format is the number of the layout that this version reads and writes.
//
//	1  the first one
const format = 1

func writeMeta(tx *bolt.Tx, id Identity) error {
	r, err := metaShelf.in(tx)
	if err != nil {
		return err
	}
	return errors.Join(
		r.Put(magicKey, []byte(magic)),
		r.Put(formatKey, binary.BigEndian.AppendUint32(nil, format)),
		r.putJSON(identityKey, id),
	)
}

func readMeta(tx *bolt.Tx) (Identity, error) {
	var id Identity
	b := tx.Bucket([]byte(metaShelf.name))
	if b == nil || string(b.Get(magicKey)) != magic {
		return id, fmt.Errorf("a database of another program: %w", ErrForeign)
	}
	number := b.Get(formatKey)
	if len(number) != 4 {
		return id, metaShelf.damaged(formatKey, "it is no number")
	}
	switch n := binary.BigEndian.Uint32(number); {
	case n > format:
		return id, fmt.Errorf("format %d, known is %d: %w", n, format, ErrFormatTooNew)
	case n < format:
		return id, metaShelf.damaged(formatKey, "there never was such a format")
	}
	r := rack{Bucket: b, shelf: metaShelf}
	found, err := r.getJSON(identityKey, &id)
	if err == nil && !found {
		err = r.damaged(identityKey, "it is missing")
	}
	return id, err
}
