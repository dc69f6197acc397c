package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io/fs"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"tailbell/config"
	"tailbell/ingest/bus"
)

// The soak is run by hand:
//
//	go test ./cmd/tailbell -run TestSoak -soak 30m -soak-rate 4000 -timeout 0 -v
var (
	soakTime = flag.Duration("soak", 0, "how long TestSoak runs")
	soakRate = flag.Int("soak-rate", 4000, "how many observations a second TestSoak publishes")
)

const soakSetup = `name = "soak"
folder = %q
[limits]
max_series = 12_000
[bus]
max_bytes = "2GiB"
[[indicator]]
name = "failure"
series = ["ferrybill/*/failure"]
unit = "requests"
every = "1m"
grain = 1
exposure = "clock"
clock = { size = 1000, per = "1s" }
settle = "1m"
horizon = "2m"
ids = "none"
windows = ["1m", "5m"]
p_limit = 1e-6
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.001
[[indicator]]
name = "fall"
series = ["quillmere-*/*/fall"]
unit = "bed-days"
every = "1m"
settle = "1m"
horizon = "2m"
windows = ["3m"]
p_limit = 1e-4
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.05
`

const (
	soakNames    = 4000 // series there are in all
	soakActive   = 1000 // series that report at a time
	soakStay     = 8 * time.Minute
	soakBad      = 100 // every so many fails three times as often
	soakElements = 50  // in a message
	soakEvery    = 30 * time.Second
	soakCopies   = 2
)

// soak is a daemon under a steady load.
type soak struct {
	t      *testing.T
	path   string
	setup  *config.Setup
	daemon *daemon
	bus    *bus.Bus
	random *rand.Rand
	first  int // the first series of those that report
	sent   uint64
	waits  []time.Duration // from an acknowledgement to the commit
	copies []string
	heaps  []uint64
}

// TestSoak publishes at a steady rate while series come and go, stores are
// copied and the stream is trimmed to the older of two copies. Nothing may grow
// but what is kept for good: the archive in the store.
func TestSoak(t *testing.T) {
	if *soakTime == 0 {
		t.Skip("run by hand: -soak 30m")
	}
	folder := t.TempDir()
	s := &soak{t: t, path: filepath.Join(folder, "tailbell.toml"), random: rand.New(rand.NewPCG(20261201, 1))}
	if err := os.WriteFile(s.path, fmt.Appendf(nil, soakSetup, filepath.Join(folder, "data")), 0o600); err != nil {
		t.Fatal(err)
	}
	var err error
	if s.setup, err = loadSetup(s.path); err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(t.Context())
	defer stop()
	if s.daemon, err = openDaemon(ctx, s.setup, daemonOptions{log: zerolog.New(os.Stderr).Level(zerolog.WarnLevel)}); err != nil {
		t.Fatal(err)
	}
	ended := make(chan error, 1)
	go func() { ended <- s.daemon.run(ctx) }()
	if s.bus, err = bus.Dial(ctx, s.setup); err != nil {
		t.Fatal(err)
	}
	s.load(ctx)
	s.balance(ctx)
	stop()
	if err := errors.Join(<-ended, s.bus.Close(), s.daemon.close()); err != nil {
		t.Error(err)
	}
}

// load publishes until the time is over.
func (s *soak) load(ctx context.Context) {
	begin := time.Now()
	tell := begin.Add(soakEvery)
	t := time.NewTicker(100 * time.Millisecond)
	defer t.Stop()
	var calm struct{ routines, files int }
	for time.Since(begin) < *soakTime {
		s.first = int(time.Since(begin) * soakActive / soakStay) // series come and go
		s.publish(ctx, *soakRate/10)
		if time.Now().After(tell) {
			tell = tell.Add(soakEvery)
			s.trim()
			routines, files := s.report(time.Since(begin))
			if calm.routines == 0 {
				calm.routines, calm.files = routines, files
			}
			if routines > calm.routines+20 || files > calm.files+20 {
				s.t.Errorf("%d goroutines and %d open files, at first %d and %d", routines, files, calm.routines, calm.files)
			}
		}
		<-t.C
	}
	s.t.Logf("figure | soak: %.0f observations a second of the %d asked for, over %s; heap after each half minute %v MiB |",
		float64(s.sent)/time.Since(begin).Seconds(), *soakRate, time.Since(begin).Round(time.Second), mebibytes(s.heaps))
	if n := len(s.heaps); n >= 6 {
		early, late := slices.Max(s.heaps[n/3:2*n/3]), slices.Max(s.heaps[2*n/3:])
		if late > early+early/4 {
			s.t.Errorf("the heap grows: at most %d MiB in the second third, %d MiB in the last", early>>20, late>>20)
		}
	}
}

func mebibytes(of []uint64) (list []uint64) {
	for _, n := range of {
		list = append(list, n>>20)
	}
	return list
}

// publish sends n observations and measures how long the last takes to be
// committed.
func (s *soak) publish(ctx context.Context, n int) {
	var messages []bus.Outgoing
	at := time.Now().UTC()
	for n > 0 {
		var b strings.Builder
		for range min(n, soakElements) {
			series := (s.first + s.random.IntN(soakActive)) % soakNames
			s.sent++
			if series%2 == 0 {
				fmt.Fprintf(&b, `{"series":"ferrybill/eu-%d/failure","at":"%s","events":%d}`+"\n", series, at.Format(time.RFC3339Nano), s.failures(series))
				continue
			}
			// Ids are kept for a day at least: a series corrects its minute over
			// and over.
			minute := at.Truncate(time.Minute)
			fmt.Fprintf(&b, `{"id":"m%d","revision":%d,"series":"quillmere-%d/ward/fall","start":"%s","end":"%s","events":0,"exposure":1.5}`+"\n",
				minute.Unix()/60, s.sent, series, minute.Format(time.RFC3339), minute.Add(time.Minute).Format(time.RFC3339))
		}
		n -= soakElements
		messages = append(messages, bus.Outgoing{Data: []byte(b.String())})
	}
	if _, err := s.bus.PublishBatch(ctx, messages); err != nil {
		s.t.Fatal(err)
	}
	acked := time.Now()
	end, err := s.bus.End(ctx)
	if err != nil {
		s.t.Fatal(err)
	}
	if err := s.daemon.parts.get(0).reach(ctx, end); err != nil {
		s.t.Fatal(err)
	}
	s.waits = append(s.waits, time.Since(acked))
}

// failures draws how many failures one observation reports: one a second and
// series on average, as is usual, but for a few.
func (s *soak) failures(series int) int {
	n := 0
	if s.random.IntN(max(1, *soakRate/soakActive)) == 0 {
		n = 1
	}
	if series%soakBad == 0 {
		return 3 * n
	}
	return n
}

// trim makes a copy, lets the oldest go and trims the stream to those kept.
func (s *soak) trim() {
	s.t.Helper()
	name := filepath.Join(filepath.Dir(s.path), fmt.Sprintf("copy-%d.store", s.sent))
	if code, out, complaint := run(s.t, "store", "copy", storePath(s.setup, 0), name, "--config", s.path); code != 0 {
		s.t.Fatalf("copying: %s%s", out, complaint)
	}
	s.copies = append(s.copies, name)
	if len(s.copies) > soakCopies {
		if err := os.Remove(s.copies[0]); err != nil {
			s.t.Fatal(err)
		}
		s.copies = s.copies[1:]
	}
	if code, out, complaint := run(s.t, append([]string{"stream", "trim", "--config", s.path}, s.copies...)...); code != 0 {
		s.t.Fatalf("trimming: %s%s", out, complaint)
	}
}

// report logs how things stand and returns the numbers of goroutines and of
// open files.
func (s *soak) report(after time.Duration) (routines, files int) {
	runtime.GC()
	var m runtime.MemStats
	runtime.ReadMemStats(&m)
	s.heaps = append(s.heaps, m.HeapAlloc)
	open, err := os.ReadDir("/proc/self/fd")
	if err != nil {
		s.t.Log(err)
	}
	info, err := os.Stat(storePath(s.setup, 0))
	if err != nil {
		s.t.Fatal(err)
	}
	slices.Sort(s.waits)
	n := len(s.waits)
	id, err := s.bus.Identity(s.t.Context())
	if err != nil {
		s.t.Fatal(err)
	}
	s.t.Logf("%4.0fs: %d sent; heap %d MiB, resident %d MiB; %d goroutines, %d open files; store %d MiB, stream %d MiB in messages %d to %d; to commit: median %s, 99%% %s, longest %s",
		after.Seconds(), s.sent, m.HeapAlloc>>20, resident()>>20, runtime.NumGoroutine(), len(open), info.Size()>>20, folderBytes(s.t, s.setup.Folder, storePath(s.setup, 0))>>20,
		id.First, id.Last, s.waits[n/2].Round(time.Millisecond), s.waits[n*99/100].Round(time.Millisecond), s.waits[n-1].Round(time.Millisecond))
	s.waits = s.waits[:0]
	if status, err := s.daemon.status(s.t.Context()); err == nil {
		a := status.Partitions[0].Account
		s.t.Logf("       looks: %d made, %d withheld, %d filling", a.Looks, a.WithheldLooks, a.Filling)
	}
	return runtime.NumGoroutine(), len(open)
}

// resident is the memory that the process occupies, 0 where that is not told.
func resident() int {
	text, err := os.ReadFile("/proc/self/status")
	if err != nil {
		return 0
	}
	_, after, _ := strings.Cut(string(text), "VmRSS:")
	fields := strings.Fields(after)
	if len(fields) == 0 {
		return 0
	}
	n, err := strconv.Atoi(fields[0])
	if err != nil {
		return 0
	}
	return n << 10
}

// folderBytes sums the sizes of all files of a folder but one.
func folderBytes(t *testing.T, folder, but string) (sum int64) {
	t.Helper()
	err := filepath.WalkDir(folder, func(path string, e fs.DirEntry, err error) error {
		if err != nil || e.IsDir() || path == but {
			return nil //nolint:nilerr // a file may go meanwhile
		}
		if info, err := e.Info(); err == nil {
			sum += info.Size()
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return sum
}

// balance checks that everything sent stands in the account.
func (s *soak) balance(ctx context.Context) {
	status, err := s.daemon.status(ctx)
	if err != nil {
		s.t.Fatal(err)
	}
	a := status.Partitions[0].Account
	s.t.Logf("account: %+v", a)
	if uint64(a.Elements) != s.sent || a.Refused+a.Rejected+a.Unmonitored != 0 {
		s.t.Errorf("%d sent, the account has %+v", s.sent, a)
	}
	if a.Looks == 0 && *soakTime > 3*time.Minute {
		s.t.Error("no look was made")
	}
}
