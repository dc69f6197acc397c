package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/control"
	"tailbell/monitor/store"
)

func newStoreCopyCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "copy FOLDER|FILE TO",
		Short: "Copy stores, with or without a running daemon",
		Long: `Copies a store into the new file TO, or all stores of a folder into the folder
TO. A copy appears under its name once it is complete, checked and on the disk;
what is there already is never written over. Copies are made value by value, so
that what has expired is not in them.

If the daemon has the store, it makes the copy itself, while it goes on; --config
names its set-up then. TO must lie outside of its folder, on its machine.`,
		RunE: func(c *cobra.Command, args []string) error {
			return copier{c.Context(), c.OutOrStdout(), path}.all(args[0], args[1])
		},
	}
	addConfigFlag(c, &path)
	return c
}

// copier copies stores.
type copier struct {
	ctx  context.Context //nolint:containedctx // one command's
	w    io.Writer
	path string // of the set-up, if a daemon has to be asked
}

func (c copier) all(from, to string) error {
	files, err := storeFiles(from)
	if err != nil {
		return err
	}
	info, err := os.Stat(from)
	if err != nil {
		return err
	}
	if info.IsDir() {
		if err := os.MkdirAll(to, 0o700); err != nil {
			return err
		}
	}
	for _, file := range files {
		target := to
		if info.IsDir() {
			target = filepath.Join(to, filepath.Base(file))
		}
		if err := c.one(file, target); err != nil {
			return err
		}
	}
	return nil
}

func (c copier) one(from, to string) (err error) {
	s, err := store.OpenReadOnly(from, store.Options{})
	if errors.Is(err, store.ErrInUse) {
		return c.hot(from, to, err)
	}
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, s.Close()) }()
	if _, err := s.CompactTo(to); err != nil {
		return err
	}
	return tellCopy(c.w, to)
}

func tellCopy(w io.Writer, path string) (err error) {
	s, err := store.OpenReadOnly(path, store.Options{})
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, s.Close()) }()
	position, err := s.Position()
	if err != nil {
		return err
	}
	info, err := os.Stat(path)
	if err != nil {
		return err
	}
	return say(w, "%s: %s, at position %d of its stream", path, amount(info.Size(), "bytes"), position)
}

// errand is what the daemon is asked to copy. It lies in a file of the daemon's
// own folder: only who may write there can have a copy made.
type errand struct {
	Partition int    `json:"partition"`
	To        string `json:"to"`
}

const (
	errandPattern = "copy-*.request"
	errandBytes   = 64 << 10
	// copyPatience is how long one request waits for a copy: well below what
	// the bus lets a request take.
	copyPatience = 10 * time.Second
)

// hot has the daemon copy the store that it holds.
func (c copier) hot(from, to string, inUse error) (err error) {
	setup, err := loadSetup(c.path)
	if err != nil {
		return fmt.Errorf("%w\nA running daemon copies it, if --config names its set-up: %w", inUse, err)
	}
	number, ok := partitionOfFile(setup, from)
	if !ok {
		return fmt.Errorf("%w\n--config %s names the set-up of another folder, %s", inUse, c.path, setup.Folder)
	}
	if to, err = filepath.Abs(to); err != nil {
		return err
	}
	request, err := os.CreateTemp(setup.Folder, errandPattern)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, os.Remove(request.Name())) }()
	err = errors.Join(json.NewEncoder(request).Encode(errand{number, to}), request.Close())
	for done := false; err == nil && !done; {
		err = ask(c.ctx, setup, verbCopy, filepath.Base(request.Name()), &done)
	}
	if err != nil {
		return err
	}
	return tellCopy(c.w, to)
}

// partitionOfFile returns which partition's store the file is.
func partitionOfFile(setup *config.Setup, file string) (int, bool) {
	have, err := os.Stat(file)
	if err != nil {
		return 0, false
	}
	for n := range setup.Partitions {
		if info, err := os.Stat(storePath(setup, n)); err == nil && os.SameFile(have, info) {
			return n, true
		}
	}
	return 0, false
}

// copyJobs are those that the daemon makes, by their request. The zero value
// has none.
type copyJobs struct {
	mu      sync.Mutex
	running map[string]*copying
	all     sync.WaitGroup
}

type copying struct {
	done chan struct{} // closed when err is set
	err  error
}

// copyStore makes a copy that a file in the folder asks for, and reports
// whether it is done; if not, the same request waits on.
func (d *daemon) copyStore(ctx context.Context, name string) (any, error) {
	d.copies.mu.Lock()
	job := d.copies.running[name]
	if job == nil {
		order, p, err := d.readErrand(name)
		if err != nil {
			d.copies.mu.Unlock()
			return nil, err
		}
		job = &copying{done: make(chan struct{})}
		if d.copies.running == nil {
			d.copies.running = map[string]*copying{}
		}
		d.copies.running[name] = job
		d.copies.all.Go(func() {
			defer close(job.done)
			_, job.err = p.store.CompactTo(order.To)
			d.log.Info().Err(job.err).Int("partition", p.number).Str("to", order.To).Msg("copied the store")
		})
	}
	d.copies.mu.Unlock()
	select {
	case <-job.done:
	case <-time.After(copyPatience):
		return false, nil
	case <-ctx.Done():
		return false, nil
	}
	d.copies.mu.Lock()
	delete(d.copies.running, name)
	d.copies.mu.Unlock()
	return true, job.err
}

// readErrand reads what is asked for, and refuses what may not be written.
func (d *daemon) readErrand(name string) (order errand, p *part, err error) {
	matches, err := filepath.Match(errandPattern, name)
	if err != nil || !matches || filepath.Base(name) != name {
		return order, nil, control.Errorf(control.BadRequest, "%q is not the name of a request for a copy", name)
	}
	file := filepath.Join(d.setup.Folder, name)
	info, err := os.Lstat(file)
	if err != nil || !info.Mode().IsRegular() || info.Size() > errandBytes {
		return order, nil, control.Errorf(codeNotFound, "the request for a copy is not in the daemon's folder: is it on another machine?")
	}
	text, err := os.ReadFile(file)
	if err == nil {
		err = json.Unmarshal(text, &order)
	}
	if err != nil {
		return order, nil, control.Errorf(control.BadRequest, "the request for a copy can't be read")
	}
	if p, err = d.part(order.Partition); err != nil {
		return order, nil, err
	}
	if why := d.unfitTarget(order.To); why != "" {
		return order, nil, control.Errorf(codeRefused, "%s: %s", order.To, why)
	}
	return order, p, nil
}

// unfitTarget says why no copy may be written there, "" if one may.
func (d *daemon) unfitTarget(to string) string {
	if !filepath.IsAbs(to) || filepath.Clean(to) != to {
		return "a copy needs a whole path"
	}
	folder, err := filepath.EvalSymlinks(filepath.Dir(to))
	if err != nil {
		return "there is no such folder: make it first"
	}
	own, err := filepath.EvalSymlinks(d.setup.Folder)
	if err != nil {
		return err.Error()
	}
	if own, err = filepath.Abs(own); err != nil {
		return err.Error()
	}
	inside, err := filepath.Rel(own, folder)
	if err != nil || inside != ".." && !strings.HasPrefix(inside, ".."+string(filepath.Separator)) {
		return "a copy may not lie in the daemon's own folder, where it would be lost with the store: name another one"
	}
	if _, err := os.Lstat(to); err == nil {
		return "it exists already: nothing is written over"
	}
	return ""
}
