package outlet

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"time"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/life"
)

// commandGrace is how long a program's pipes are waited for once it was ended.
const commandGrace = 2 * time.Second

// Command delivers to a program on this machine, started once a notice, with
// JSON on its standard input (an Errand). No shell reads the arguments. Exit
// code 0 is delivery, all else is tried again; a program that takes longer than
// its limit is ended, with all that it started.
//
// The program gets PATH, HOME, LANG, LC_ALL and TZ of the daemon's environment
// and no more of it. The end of what it writes to standard error stands in
// the log, so it must write no secret there.
type Command struct {
	name, deployment string
	words            []string
	limit            time.Duration
}

// Errand is what a program reads: the sentences for people, and the steps that
// they tell of. Keys are the steps' idempotency keys: a step may come again.
type Errand struct {
	Deployment string         `json:"deployment"`
	Outlet     string         `json:"outlet"`
	Test       bool           `json:"test"`
	Subject    string         `json:"subject"`
	Text       string         `json:"text"`
	Notices    []*life.Notice `json:"notices"`
}

// NewCommand returns the outlet. It fails if there is no such program.
func NewCommand(o config.Outlet, deployment string) (*Command, error) {
	path, err := filepath.Abs(o.Command[0])
	if err != nil {
		return nil, fmt.Errorf("outlet %s: %w", o.Name, err)
	}
	info, err := os.Stat(path)
	switch {
	case err != nil:
		return nil, fmt.Errorf("outlet %s: the command: %w", o.Name, err)
	case info.IsDir() || info.Mode()&0o111 == 0:
		return nil, fmt.Errorf("outlet %s: the command %s is no program: make it executable", o.Name, path)
	}
	return &Command{o.Name, deployment, append([]string{path}, o.Command[1:]...), o.TimeLimit}, nil
}

// Name names the outlet.
func (c *Command) Name() string { return c.name }

// Deliver runs the program for one step.
func (c *Command) Deliver(ctx context.Context, n *life.Notice) error {
	text := words.Notice(n, letterWidth)
	if !cautioned(n) {
		text += words.CautionOf(&n.Record) + "\n\n"
	}
	return c.run(ctx, &Errand{
		Subject: words.Subject(n), Text: text, Notices: []*life.Notice{n},
		Test: n.Step.Kind == life.StepTest,
	})
}

// DeliverTogether runs the program once for several steps.
func (c *Command) DeliverTogether(ctx context.Context, notices []*life.Notice) error {
	return c.run(ctx, &Errand{
		Subject: words.SubjectTogether(notices), Text: words.Together(notices, letterWidth), Notices: notices,
	})
}

func (c *Command) run(ctx context.Context, e *Errand) error {
	e.Deployment, e.Outlet = c.deployment, c.name
	e.Notices = withoutSteps(e.Notices)
	input, err := json.Marshal(e)
	if err != nil {
		return fmt.Errorf("encoding step %s: %w", e.Notices[0].Key, err)
	}
	ctx, cancel := context.WithTimeout(ctx, c.limit)
	defer cancel()
	run := exec.CommandContext(ctx, c.words[0], c.words[1:]...)
	run.Stdin = bytes.NewReader(append(input, '\n'))
	said := &tail{most: 400}
	run.Stderr = said
	run.Env = environment("PATH", "HOME", "LANG", "LC_ALL", "TZ")
	run.Dir = filepath.Dir(c.words[0])
	run.WaitDelay = commandGrace
	endAll(run)
	err = run.Run()
	switch name := filepath.Base(c.words[0]); {
	case err == nil:
		return nil
	case errors.Is(ctx.Err(), context.DeadlineExceeded):
		return fmt.Errorf("the command %s was ended after its time limit of %s", name, c.limit)
	case len(said.last) > 0:
		return fmt.Errorf("the command %s: %w: %s", name, err, printable(string(said.last)))
	default:
		return fmt.Errorf("the command %s: %w", name, err)
	}
}

// withoutSteps leaves out of each record the steps before the one that is told:
// each of those was told of its own.
func withoutSteps(notices []*life.Notice) []*life.Notice {
	short := make([]*life.Notice, len(notices))
	for i, n := range notices {
		one := *n
		one.Record.Steps = []life.Step{}
		short[i] = &one
	}
	return short
}

// environment picks variables of the daemon's environment.
func environment(names ...string) []string {
	env := []string{}
	for _, name := range names {
		if value, ok := os.LookupEnv(name); ok {
			env = append(env, name+"="+value)
		}
	}
	return env
}

// tail keeps the end of what is written.
type tail struct {
	most int
	last []byte
}

// Write keeps the end of p.
func (t *tail) Write(p []byte) (int, error) {
	t.last = append(t.last, p...)
	if len(t.last) > t.most {
		t.last = []byte(strings.ToValidUTF8(string(t.last[len(t.last)-t.most:]), ""))
	}
	return len(p), nil
}
