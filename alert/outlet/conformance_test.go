package outlet_test

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"io"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"tailbell/alert/outlet"
	"tailbell/alert/outlet/outlettest"
	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/life"
)

// inbox keeps what arrived.
type inbox struct {
	mu   sync.Mutex
	down bool
	all  []outlettest.Arrival
}

func (b *inbox) Down(down bool) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.down = down
}

func (b *inbox) Arrived() []outlettest.Arrival {
	b.mu.Lock()
	defer b.mu.Unlock()
	return append([]outlettest.Arrival(nil), b.all...)
}

// take reports whether it was taken.
func (b *inbox) take(id, body string) bool {
	b.mu.Lock()
	defer b.mu.Unlock()
	if !b.down {
		b.all = append(b.all, outlettest.Arrival{ID: id, Body: body})
	}
	return !b.down
}

// schema is the one that the CloudEvents project publishes.
func schema(t *testing.T) *jsonschema.Schema {
	t.Helper()
	s, err := jsonschema.NewCompiler().Compile("testdata/cloudevents.schema.json")
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// judge holds an event against the schema.
func judge(t *testing.T, s *jsonschema.Schema, event []byte) {
	t.Helper()
	v, err := jsonschema.UnmarshalJSON(bytes.NewReader(event))
	if err == nil {
		err = s.Validate(v)
	}
	if err != nil {
		t.Errorf("no CloudEvent: %v\n%s", err, event)
	}
}

func TestBusConforms(t *testing.T) {
	var b inbox
	s := schema(t)
	o := outlet.NewBus("quillmere", func(_ context.Context, p *outlet.Published) error {
		judge(t, s, p.Event)
		if p.Direction == "" || p.Indicator == "" {
			t.Errorf("published under %q, %q", p.Direction, p.Indicator)
		}
		if !b.take(p.Key, string(p.Event)) {
			return errors.New("the bus is away")
		}
		return nil
	})
	if err := outlettest.Check(t.Context(), o, &b); err != nil {
		t.Error(err)
	}
}

const hookSecret = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"

// hook is a webhook and its receiver over real sockets.
func hook(t *testing.T, b *inbox) *outlet.Webhook {
	t.Helper()
	s := schema(t)
	server := httptest.NewServer(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		body, err := io.ReadAll(r.Body)
		if err != nil {
			t.Error(err)
		}
		judge(t, s, body)
		w.Header().Set("Connection", "close")
		if !b.take(r.Header.Get("Webhook-Id"), string(body)) {
			w.WriteHeader(http.StatusServiceUnavailable)
		}
	}))
	t.Cleanup(server.Close)
	w, err := outlet.NewWebhook(outlet.WebhookOptions{
		Name: "hook", Deployment: "quillmere", URL: server.URL + "/?token=hunter2",
		SecretFile: writeFile(t, "secret", hookSecret, 0o600), Now: func() time.Time { return noon },
	})
	if err != nil {
		t.Fatal(err)
	}
	return w
}

func TestWebhookConforms(t *testing.T) {
	var b inbox
	if err := outlettest.Check(t.Context(), hook(t, &b), &b, "hunter2", hookSecret); err != nil {
		t.Error(err)
	}
}

// Write takes what the terminal writes.
func (b *inbox) Write(p []byte) (int, error) {
	id, _, _ := strings.Cut(string(p), "\n")
	if !b.take(id, string(p)) {
		return 0, errors.New("the terminal is gone")
	}
	return len(p), nil
}

func TestTerminalConforms(t *testing.T) {
	for _, asJSON := range []bool{false, true} {
		var b inbox
		if err := outlettest.Check(t.Context(), outlet.NewTerminal(&b, 80, asJSON), &b); err != nil {
			t.Errorf("as JSON %v: %v", asJSON, err)
		}
	}
}

// program is a command outlet whose program writes what it reads into a folder.
type program struct {
	t      *testing.T
	folder string
}

// newProgram returns an outlet of the program, which runs the text of a shell
// script; the outlet itself knows no shell.
func newProgram(t *testing.T, script string, limit time.Duration, args ...string) (*program, *outlet.Command) {
	t.Helper()
	if runtime.GOOS == "windows" {
		t.Skip("the program is a shell script")
	}
	folder := t.TempDir()
	path := filepath.Join(folder, "ring")
	if err := os.WriteFile(path, []byte("#!/bin/sh\n"+script), 0o700); err != nil { //nolint:gosec // it is a program
		t.Fatal(err)
	}
	o, err := outlet.NewCommand(config.Outlet{Name: "bell", Kind: config.Command, Command: append([]string{path}, args...), TimeLimit: limit}, "quillmere")
	if err != nil {
		t.Fatal(err)
	}
	return &program{t, folder}, o
}

// Down lets the program fail.
func (p *program) Down(down bool) {
	path := filepath.Join(p.folder, "down")
	err := os.WriteFile(path, nil, 0o600)
	if !down {
		err = os.Remove(path)
	}
	if err != nil {
		p.t.Error(err)
	}
}

// Arrived returns what the program wrote.
func (p *program) Arrived() []outlettest.Arrival {
	files, err := filepath.Glob(filepath.Join(p.folder, "got.*"))
	if err != nil {
		p.t.Fatal(err)
	}
	var all []outlettest.Arrival
	for _, f := range files {
		data, err := os.ReadFile(f)
		if err != nil {
			p.t.Fatal(err)
		}
		var e outlet.Errand
		if err := json.Unmarshal(data, &e); err != nil {
			p.t.Errorf("%v: %s", err, data)
			continue
		}
		if text := strings.Join(strings.Fields(e.Text), " "); len(e.Notices) == 0 || strings.Count(text, words.CautionOf(&e.Notices[0].Record)) != 1 {
			p.t.Errorf("the text does not have the caution once:\n%s", e.Text)
		}
		id := ""
		for _, n := range e.Notices {
			id += n.Key + " "
		}
		all = append(all, outlettest.Arrival{ID: id, Body: string(data)})
	}
	return all
}

const ringScript = `
cd "$(dirname "$0")"
if [ -e down ]; then cat >/dev/null; printf 'nobody\n  \033[31mhere\n' >&2; exit 3; fi
n=1; until mkdir "n.$n" 2>/dev/null; do n=$((n+1)); done
cat > "part.$n" && mv "part.$n" "got.$(printf %04d $n)"
`

func TestCommandConforms(t *testing.T) {
	p, o := newProgram(t, ringScript, 20*time.Second)
	if err := outlettest.Check(t.Context(), o, p); err != nil {
		t.Error(err)
	}
	for _, kind := range []life.StepKind{life.StepWorsened, life.StepReturned} {
		if err := o.Deliver(t.Context(), outlettest.Step("ward-1", kind)); err != nil {
			t.Error(err)
		}
	}
	p.Arrived()
	p.Down(true)
	if err := o.Deliver(t.Context(), outlettest.Step("ward-1", life.StepOpened)); err == nil || !strings.Contains(err.Error(), "ring: exit status 3: nobody [31mhere") {
		t.Errorf("the program's failure is told as %v", err)
	}
}

// TestCommandIsHeldShort sees that a program, and what it started, is ended
// after its time, that no shell reads its arguments, and what of the environment
// it gets.
func TestCommandIsHeldShort(t *testing.T) {
	_, slow := newProgram(t, "sleep 1000 & sleep 1000\n", time.Second)
	if err := slow.Deliver(t.Context(), outlettest.Step("ward-1", life.StepOpened)); err == nil || !strings.Contains(err.Error(), "time limit of 1s") {
		t.Errorf("a program that takes long: %v", err)
	}
	t.Setenv("TAILBELL_SECRET", "hunter2")
	p, strict := newProgram(t, `cd "$(dirname "$0")"; [ "$1" = '$(touch fooled); *' ] && ! env | grep -q hunter2`, 20*time.Second, "$(touch fooled); *")
	if err := strict.Deliver(t.Context(), outlettest.Step("ward-1", life.StepOpened)); err != nil {
		t.Error(err)
	}
	if _, err := os.Stat(filepath.Join(p.folder, "fooled")); err == nil {
		t.Error("a shell read the arguments")
	}
}

func TestCommandNeedsAProgram(t *testing.T) {
	plain := writeFile(t, "plain", "", 0o600)
	for path, want := range map[string]string{"/nowhere/ring": "no such file", plain: "make it executable", t.TempDir(): "no program"} {
		_, err := outlet.NewCommand(config.Outlet{Name: "bell", Command: []string{path}}, "quillmere")
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%s: %v", path, err)
		}
	}
}
