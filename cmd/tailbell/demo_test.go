package main

import (
	"bufio"
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/monitor/life"
)

// notices reads alert steps as the terminal outlet writes them with --json. A
// step that was delivered twice (at least once is the promise) stands once, and
// must say the same both times.
func notices(t *testing.T, text string) []string {
	t.Helper()
	var list []string
	byKey := map[string]string{}
	lines := bufio.NewScanner(strings.NewReader(text))
	lines.Buffer(nil, 16<<20)
	for lines.Scan() {
		var n life.Notice
		if err := json.Unmarshal(lines.Bytes(), &n); err != nil {
			continue // the line that a kill cut off; it comes again
		}
		if said, again := byKey[n.Key]; again {
			if said != lines.Text() {
				t.Fatalf("step %s says something else the second time", n.Key)
			}
			continue
		}
		byKey[n.Key] = lines.Text()
		list = append(list, lines.Text())
	}
	return list
}

func compareNotices(t *testing.T, what string, want, got []string) {
	t.Helper()
	if diff := cmp.Diff(want, got); diff != "" {
		t.Errorf("%s: %d steps instead of %d; the first difference (-want +got):\n%.4000s", what, len(got), len(want), diff)
	}
}

// TestDemo runs the demo through the real bus: the account must balance, and
// every kind of step must occur. Its replay, a run that is stopped ten times,
// and runs with other batch sizes must leave the same records to the byte.
func TestDemo(t *testing.T) {
	history := filepath.Join(t.TempDir(), "history.ndjson")
	code, live, account := run(t, "demo", "--json", "--export", history)
	if code != 0 || !strings.Contains(account, "The account balances") {
		t.Fatalf("exit code %d\n%s", code, account)
	}
	want := notices(t, live)
	countKinds(t, want)

	t.Run("replay", func(t *testing.T) {
		// The rubbish in the history makes the exit code 1.
		_, replayed, stderr := run(t, "replay", "--json", "--config", history+".toml", history)
		compareNotices(t, "replay", want, notices(t, replayed))
		if t.Failed() {
			t.Log(stderr)
		}
	})
	t.Run("batches of 10,000", func(t *testing.T) {
		_, text, _ := run(t, "demo", "--json", "--max-batch", "10000")
		compareNotices(t, "batches of 10,000", want, notices(t, text))
	})
	t.Run("batches of 1", func(t *testing.T) {
		slow(t)
		_, text, _ := run(t, "demo", "--json", "--max-batch", "1")
		compareNotices(t, "batches of 1", want, notices(t, text))
	})
	t.Run("stopped ten times", func(t *testing.T) {
		text := interrupted(t, 10, func(p *os.Process) error { return p.Signal(os.Interrupt) })
		compareNotices(t, "stopped ten times", want, notices(t, text))
	})
	t.Run("killed", func(t *testing.T) {
		text := interrupted(t, 6, (*os.Process).Kill)
		compareNotices(t, "killed", want, notices(t, text))
	})
}

func countKinds(t *testing.T, steps []string) {
	t.Helper()
	have := map[string]int{}
	for _, line := range steps {
		var n life.Notice
		if err := json.Unmarshal([]byte(line), &n); err != nil {
			t.Fatal(err)
		}
		have[string(n.Step.Kind)]++
		if n.Step.Kind == life.StepOpened {
			have[string(n.Record.Direction)]++
			if n.Record.Late {
				have["late"]++
			}
		}
	}
	for _, kind := range []string{"upper", "lower", "late", "worsened", "returned", "withdrawn"} {
		if have[kind] < 5 {
			t.Errorf("only %d steps or alerts %s", have[kind], kind)
		}
	}
}

// interrupted runs the demo as a process of its own, ends it so many times
// somewhere in the middle, and lets it finish at last. It returns all that was
// printed.
func interrupted(t *testing.T, times int, end func(*os.Process) error) string {
	t.Helper()
	seed := uint64(time.Now().UnixNano())
	t.Logf("seed of the moments: %d", seed)
	random := rand.New(rand.NewPCG(seed, 1))
	folder := filepath.Join(t.TempDir(), "demo")
	var all bytes.Buffer
	for range times {
		c := program(t, "demo", "--json", "--folder", folder)
		pipe, err := c.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		// The moment is given in steps printed, so that it lies in the middle
		// on any machine.
		lines := bufio.NewReader(pipe)
		for range random.IntN(60) {
			line, err := lines.ReadString('\n')
			all.WriteString(line)
			if err != nil {
				break
			}
		}
		if err := end(c.Process); err != nil {
			t.Log(err) // it had finished
		}
		if _, err := io.Copy(&all, lines); err != nil {
			t.Fatal(err)
		}
		all.WriteByte('\n')
		if err := c.Wait(); err == nil {
			t.Log("a run had come to its end")
		}
	}
	var stdout, account bytes.Buffer
	c := program(t, "demo", "--json", "--folder", folder)
	c.Stdout, c.Stderr = &stdout, &account
	if err := c.Run(); err != nil || !strings.Contains(account.String(), "The account balances") {
		t.Fatalf("the last run: %v\n%s", err, account.String())
	}
	return fmt.Sprint(all.String(), stdout.String())
}
