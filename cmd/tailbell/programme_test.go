package main

import (
	"bufio"
	"context"
	"encoding/json"
	"errors"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/alert/outlet"
	"tailbell/alert/words"
	"tailbell/ingest/bus"
	"tailbell/monitor/life"
)

// programmeFiles are the year of a programme: the script, and the set-ups that it
// names.
const programmeFiles = "../../testdata/programme"

const (
	chapter   = "* " // begins the heading of one
	everyStep = "every step"
)

// leadScript is the program of the outlet that is told what nobody acknowledged.
const leadScript = "#!/bin/sh\ncat >> \"$(dirname \"$0\")/heard\"\n"

// programme plays a script against a daemon that is a process of its own.
type programme struct {
	*service
	bus     *bus.Bus
	nights  *nights
	notices []string // as the daemon printed them, a line each
	seen    int      // bytes of the daemon's output read
	shown   int      // notices shown in the script
	last    uint64   // position published last
	kills   string   // when the daemon is killed: before each chapter, each step, or "" for never
}

// TestProgramme plays the year of a programme: what people see, step by step,
// is what the script says, whether the daemon lives through it or is killed
// again and again; and the stream read anew, in commits of other sizes, gives the
// same records to the byte.
func TestProgramme(t *testing.T) {
	path, err := filepath.Abs(programmeFiles)
	if err != nil {
		t.Fatal(err)
	}
	year := filepath.Join(path, "year.txt")
	t.Setenv(byVariable, "A. Nurse")
	t.Run("undisturbed", func(t *testing.T) {
		p := newProgramme(t, path)
		s := readScript(t, year)
		p.play(s)
		if *update {
			s.write(t, year)
		}
		alerts := p.says(0, nil, "alert", "list", "--all", "--json")
		p.letGo()
		p.stop(syscall.SIGTERM)
		for _, batch := range []int{1, 7, 0} {
			t.Run("again by "+strconv.Itoa(batch), func(t *testing.T) { p.again(t, batch, alerts) })
		}
	})
	t.Run("killed", func(t *testing.T) {
		p := newProgramme(t, path)
		p.kills = chapter
		p.play(readScript(t, year))
	})
	t.Run("killed at each step", func(t *testing.T) {
		slow(t)
		p := newProgramme(t, path)
		p.kills = everyStep
		p.play(readScript(t, year))
	})
}

func newProgramme(t *testing.T, files string) *programme {
	t.Helper()
	folder := t.TempDir()
	if err := os.CopyFS(folder, os.DirFS(files)); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(folder, "lead"), []byte(leadScript), 0o700); err != nil { //nolint:gosec // it is a program
		t.Fatal(err)
	}
	t.Chdir(folder)
	return &programme{service: newService(t, defaultSetup), nights: newNights(t, "2025-01-01")}
}

// play plays the script, and compares what it prints.
func (p *programme) play(s *script) {
	p.t.Helper()
	for i := range s.lines {
		l := &s.lines[i]
		if p.cmd != nil && (p.kills == chapter && strings.HasPrefix(l.text, chapter) || p.kills == everyStep && l.step) {
			p.letGo()
			p.stop(syscall.SIGKILL)
			p.begin(p.path)
		}
		if !l.step {
			continue
		}
		got := strings.TrimRight(p.step(l), "\n")
		if *update && p.kills == "" {
			l.prints = got
		}
		want, had := l.prints, got
		if p.kills != "" { // what was told may be told again
			want, had = withoutOutlets(want), withoutOutlets(had)
		}
		if diff := cmp.Diff(want, had); diff != "" {
			p.t.Errorf("line %d: %s (-want +got)\n%s", l.number, l.text, diff)
		}
	}
}

// withoutOutlets leaves out how many steps each outlet was told.
func withoutOutlets(text string) string {
	return strings.Join(slices.DeleteFunc(strings.Split(text, "\n"), func(line string) bool { return strings.HasPrefix(line, "  outlet ") }), "\n")
}

// step does one step and returns what it prints.
func (p *programme) step(l *scriptLine) string {
	p.t.Helper()
	args := commandWords(l.text)
	switch word := args[0]; {
	case word == "daemon":
		if p.cmd != nil {
			p.letGo()
			p.stop(syscall.SIGTERM)
		}
		p.begin(args[1])
		return p.told()
	case word == "$":
		return p.command(args[1:])
	case word == "heard":
		return p.heard()
	case word == "replayed":
		return p.replayed()
	case word == "nights":
		p.sleepUntil(args[1])
	case strings.HasPrefix(word, "{"):
		p.send(l.text)
	default:
		p.reporter(args)
		return ""
	}
	p.counted()
	return p.told()
}

// reporter changes who reports what.
func (p *programme) reporter(args []string) {
	p.t.Helper()
	number := func(text string) int {
		n, err := strconv.Atoi(text)
		if err != nil {
			p.t.Fatal(err)
		}
		return n
	}
	switch args[0] {
	case "daily":
		r := &reporter{series: args[1], exposure: args[2], every: -1}
		if len(args) > 3 {
			r.every = number(args[3])
		}
		p.nights.reporters = append(p.nights.reporters, r)
	case "extra":
		p.nights.extra[args[1]+" "+args[2]] += number(args[3])
	case "stop":
		p.nights.find(p.t, args[1]).stopped = true
	case "hold":
		p.nights.find(p.t, args[1]).held = true
	case "release":
		p.nights.find(p.t, args[1]).held = false
	default:
		p.t.Fatalf("what is %q?", args)
	}
}

func (p *programme) sleepUntil(date string) {
	p.t.Helper()
	until, err := time.ParseInLocation(time.DateOnly, date, p.nights.zone)
	if err != nil {
		p.t.Fatal(err)
	}
	for p.nights.day.Before(until) {
		for _, m := range p.nights.next() {
			p.send(m)
		}
	}
}

// send publishes a message.
func (p *programme) send(data string) {
	p.t.Helper()
	position, err := p.bus.Publish(p.t.Context(), bus.Outgoing{Data: []byte(data)})
	if err != nil {
		p.t.Fatal(err)
	}
	p.last = position
}

// begin starts the daemon with a set-up, and waits until it has read all.
func (p *programme) begin(setup string) {
	p.t.Helper()
	p.path = setup
	p.start()
	live := !p.setup().History
	p.await("all read", func() bool {
		r, ok := p.status()
		return ok && r.Partitions[0].Position >= r.Partitions[0].End && r.Partitions[0].History != live
	})
	var err error
	if p.bus, err = bus.Dial(p.t.Context(), p.setup()); err != nil {
		p.t.Fatal(err)
	}
}

func (p *programme) letGo() {
	if err := p.bus.Close(); err != nil {
		p.t.Log(err)
	}
}

// counted waits until all that was published is counted and told.
func (p *programme) counted() {
	p.t.Helper()
	p.await("counted and told", func() bool {
		r, ok := p.status()
		return ok && r.Partitions[0].Position >= p.last &&
			!slices.ContainsFunc(r.Partitions[0].Outlets, func(o outletRow) bool { return o.Waiting > 0 })
	})
}

// told returns the steps told since it was last asked, one a line.
func (p *programme) told() string {
	p.t.Helper()
	p.counted()
	out := p.stdout.String()
	whole := strings.LastIndexByte(out, '\n') + 1
	for line := range strings.Lines(out[p.seen:whole]) {
		if !slices.Contains(p.notices, line) { // after a kill a step may be told again
			p.notices = append(p.notices, line)
		}
	}
	p.seen = whole
	var b strings.Builder
	for _, line := range p.notices[p.shown:] {
		n := noticeOf(p.t, line)
		b.WriteString(words.Line(&n) + "\n")
	}
	p.shown = len(p.notices)
	return b.String()
}

func noticeOf(t *testing.T, line string) life.Notice {
	t.Helper()
	var n life.Notice
	if err := json.Unmarshal([]byte(line), &n); err != nil {
		t.Fatal(err)
	}
	return n
}

// command runs a command as typed.
func (p *programme) command(args []string) string {
	p.t.Helper()
	switch args[0] {
	case "cp", "mv":
		text := readText(p.t, args[1])
		if err := os.WriteFile(args[2], []byte(text), 0o600); err != nil {
			p.t.Fatal(err)
		}
		if args[0] == "mv" {
			if err := os.Remove(args[1]); err != nil {
				p.t.Fatal(err)
			}
		}
		return ""
	case "tailbell":
	default:
		p.t.Fatalf("no command of the script: %q", args)
	}
	p.counted()
	code, out, complaint := run(p.t, args[1:]...)
	if out += complaint; code != 0 {
		out += "(exit code " + strconv.Itoa(code) + ")\n"
	}
	return out
}

// heard returns the subjects of what the outlet "lead" was told.
func (p *programme) heard() string {
	p.t.Helper()
	p.counted()
	text, err := os.ReadFile("heard")
	if err != nil {
		p.t.Fatal(err)
	}
	var subjects []string
	for d := json.NewDecoder(strings.NewReader(string(text))); ; {
		var e outlet.Errand
		if err := d.Decode(&e); errors.Is(err, io.EOF) {
			return strings.Join(slices.Compact(subjects), "\n")
		} else if err != nil {
			p.t.Fatal(err)
		}
		subjects = append(subjects, e.Subject)
	}
}

// replayed replays the stream, and compares the steps with those told.
func (p *programme) replayed() string {
	p.t.Helper()
	_, out, complaint := run(p.t, "replay", "--stream", "--json")
	var live, replay []string
	for _, line := range p.notices {
		if n := noticeOf(p.t, line); n.Record.Silence == nil { // of which replays know nothing
			live = append(live, line)
		}
	}
	for line := range strings.Lines(out) {
		replay = append(replay, line)
	}
	slices.Sort(live)
	slices.Sort(replay)
	if diff := cmp.Diff(live, replay); diff != "" {
		p.t.Errorf("the replay tells other steps (-live +replay), %s\n%s", complaint, diff)
	}
	return words.Amount(int64(len(replay)), "steps") + ", the same to the byte"
}

// again reads the stream anew into an empty store, in commits of at most so many
// messages.
func (p *programme) again(t *testing.T, batch int, alerts string) {
	t.Helper()
	folder := t.TempDir()
	if err := os.CopyFS(folder, os.DirFS(".")); err != nil {
		t.Fatal(err)
	}
	if err := os.Remove(filepath.Join(folder, "data", "partition-0.store")); err != nil {
		t.Fatal(err)
	}
	t.Chdir(folder)
	setup, err := loadSetup(p.path)
	if err != nil {
		t.Fatal(err)
	}
	out := &lockedBuffer{}
	d, err := openDaemon(t.Context(), setup, daemonOptions{log: newLog(io.Discard), terminal: outlet.NewTerminal(out, 0, true), maxBatch: batch})
	if err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(t.Context())
	stopped := make(chan error, 1)
	go func() { stopped <- d.run(ctx) }()
	end, err := d.bus.EndOf(ctx, 0)
	if err == nil {
		err = d.parts.get(0).reach(ctx, end)
	}
	code, list, _ := run(t, "alert", "list", "--all", "--json")
	stop()
	if err := errors.Join(err, <-stopped, d.close()); err != nil || code != 0 {
		t.Fatal(code, err)
	}
	if diff := cmp.Diff(alerts, list); diff != "" {
		t.Errorf("other records (-first +again):\n%s", diff)
	}
	var lines []string
	for text := bufio.NewScanner(strings.NewReader(out.String())); text.Scan(); {
		lines = append(lines, text.Text()+"\n")
	}
	if diff := cmp.Diff(p.notices, lines); diff != "" {
		t.Errorf("other steps (-first +again):\n%s", diff)
	}
}
