package control_test

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/ingest/bus/bustest"
	"tailbell/ingest/control"
)

type sum struct{ A, B int }

// start serves the verbs on a new bus and returns a way to call them.
func start(t *testing.T, verbs map[string]control.Handler) func(ctx context.Context, verb string, arg, result any) error {
	t.Helper()
	b := bustest.Open(t, bustest.Setup(t))
	s, err := control.Serve(t.Context(), b, verbs)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := s.Close(); err != nil {
			t.Error(err)
		}
	})
	return func(ctx context.Context, verb string, arg, result any) error {
		return control.Call(ctx, b, verb, arg, result)
	}
}

func code(err error) control.Code {
	var e *control.Error
	if errors.As(err, &e) {
		return e.Code
	}
	return ""
}

func TestCallBringsRequestAndReply(t *testing.T) {
	call := start(t, map[string]control.Handler{
		"status": func(_ context.Context, body []byte) (any, error) {
			return map[string]string{"got": string(body)}, nil
		},
	})
	var got map[string]string
	if err := call(t.Context(), "status", sum{1, 2}, &got); err != nil || got["got"] != `{"A":1,"B":2}` {
		t.Errorf("%v, %v", got, err)
	}
	if err := call(t.Context(), "status", nil, &got); err != nil || got["got"] != "" {
		t.Errorf("%v, %v", got, err)
	}
	if err := call(t.Context(), "status", nil, nil); err != nil {
		t.Error(err)
	}
}

func TestErrorsCarryTheirCode(t *testing.T) {
	call := start(t, map[string]control.Handler{
		"coded": func(context.Context, []byte) (any, error) {
			return nil, fmt.Errorf("looking up a1: %w", control.Errorf("not_found", "no such alert"))
		},
		"plain":   func(context.Context, []byte) (any, error) { return nil, errors.New("disk on fire") },
		"channel": func(context.Context, []byte) (any, error) { return make(chan int), nil },
		"long":    func(context.Context, []byte) (any, error) { return strings.Repeat("x", 9<<20), nil },
	})
	for _, c := range []struct {
		verb string
		arg  any
		code control.Code
		text string
	}{
		{"coded", nil, "not_found", "looking up a1: no such alert"},
		{"plain", nil, control.Failed, "disk on fire"},
		{"channel", nil, control.Failed, "encoding the reply"},
		{"long", nil, control.ReplyTooLarge, "ask for less"},
		{"plain", strings.Repeat("x", 70_000), control.BadRequest, "the limit is 65536"},
		{"unheard", nil, control.NoAnswer, "no daemon answers"},
	} {
		err := call(t.Context(), c.verb, c.arg, nil)
		if code(err) != c.code || !strings.Contains(err.Error(), c.text) {
			t.Errorf("%s: code %q, %v; want %q, %q", c.verb, code(err), err, c.code, c.text)
		}
	}
	if err := call(t.Context(), "a.b", nil, nil); err == nil {
		t.Error("a verb of two tokens was accepted")
	}
}

func TestForeignRequestsAreRefused(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	s, err := control.Serve(t.Context(), b, map[string]control.Handler{
		"status": func(context.Context, []byte) (any, error) { return "fine", nil },
	})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close() //nolint:errcheck // closed again below
	for _, c := range []struct{ data, want string }{
		{`{"version":1}`, `{"version":1,"body":"fine"}`},
		{`{"version":2}`, `"code":"bad_version"`},
		{`{}`, `"code":"bad_version"`},
		{`what?`, `"code":"bad_request"`},
		{`{"version":1,"body":"` + strings.Repeat("x", 70_000) + `"}`, `"code":"bad_request"`},
	} {
		msg, err := b.Conn().RequestWithContext(t.Context(), b.ControlSubject("status"), []byte(c.data))
		if err != nil || !strings.Contains(string(msg.Data), c.want) {
			t.Errorf("%.40s: %s, %v", c.data, msg.Data, err)
		}
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
	if err := control.Call(t.Context(), b, "status", nil, nil); code(err) != control.NoAnswer {
		t.Errorf("after Close: %v", err)
	}
}

func TestHandlersEndWithTheirCaller(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		ended := make(chan time.Duration, 2)
		call := start(t, map[string]control.Handler{
			"wait": func(ctx context.Context, _ []byte) (any, error) {
				began := time.Now()
				<-ctx.Done()
				ended <- time.Since(began)
				return nil, ctx.Err()
			},
		})
		ctx, cancel := context.WithTimeout(t.Context(), 7*time.Second)
		defer cancel()
		if err := call(ctx, "wait", nil, nil); err == nil {
			t.Error("no error")
		}
		if took := <-ended; took.Round(time.Second) != 7*time.Second {
			t.Errorf("the handler ended after %s", took)
		}
		if err := call(t.Context(), "wait", nil, nil); err == nil {
			t.Error("no error")
		}
		if took := <-ended; took.Round(time.Second) != 30*time.Second {
			t.Errorf("the handler ended after %s", took)
		}
	})
}

func TestTooManyAtOnceAreToldSo(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		call := start(t, map[string]control.Handler{
			"wait": func(ctx context.Context, _ []byte) (any, error) {
				<-time.After(time.Second)
				return "done", nil
			},
		})
		var group sync.WaitGroup
		results := make(chan error, 12)
		for range 12 {
			group.Go(func() { results <- call(t.Context(), "wait", nil, nil) })
		}
		group.Wait()
		close(results)
		counts := map[control.Code]int{}
		for err := range results {
			counts[code(err)]++
		}
		if counts[""] != 8 || counts[control.Busy] != 4 {
			t.Errorf("%v", counts)
		}
	})
}

func TestCloseWaitsForHandlers(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b := bustest.Open(t, bustest.Setup(t))
		done := false
		s, err := control.Serve(t.Context(), b, map[string]control.Handler{
			"wait": func(ctx context.Context, _ []byte) (any, error) {
				<-ctx.Done()
				time.Sleep(time.Second)
				done = true
				return nil, ctx.Err()
			},
		})
		if err != nil {
			t.Fatal(err)
		}
		result := make(chan error, 1)
		go func() { result <- control.Call(t.Context(), b, "wait", nil, nil) }()
		synctest.Wait()
		if err := s.Close(); err != nil || !done {
			t.Errorf("done %v, %v", done, err)
		}
		if err := <-result; code(err) != control.TimedOut || !strings.Contains(err.Error(), "stopping") {
			t.Errorf("the caller got %v", err)
		}
	})
}
