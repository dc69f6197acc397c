package main

import (
	"net/http"
	"strings"
	"testing"

	"github.com/rs/zerolog"
)

func TestCheckProfiling(t *testing.T) {
	for address, want := range map[string]string{
		"off": "", "127.0.0.1:0": "", "[::1]:4871": "", "localhost:4871": "",
		"4871": "is no address", "0.0.0.0:4871": "only loopback", ":4871": "only loopback", "192.0.2.1:4871": "only loopback",
	} {
		if err := checkProfiling(address); (err == nil) != (want == "") || err != nil && !strings.Contains(err.Error(), want) {
			t.Errorf("%q: %v, want %q", address, err, want)
		}
	}
}

// TestProfiling reads a profile, and is refused it under a name that is not the
// machine's own.
func TestProfiling(t *testing.T) {
	p, err := startProfiling(t.Context(), "127.0.0.1:0", zerolog.Nop())
	if err != nil {
		t.Fatal(err)
	}
	for host, want := range map[string]int{"": http.StatusOK, "localhost": http.StatusOK, "tailbell.example": http.StatusForbidden} {
		r, err := http.NewRequestWithContext(t.Context(), http.MethodGet, "http://"+p.address+"/debug/pprof/goroutine?debug=1", nil)
		if err != nil {
			t.Fatal(err)
		}
		r.Host = host
		answer, err := http.DefaultClient.Do(r)
		if err != nil {
			t.Fatal(err)
		}
		if err := answer.Body.Close(); err != nil {
			t.Error(err)
		}
		if answer.StatusCode != want {
			t.Errorf("host %q: %s", host, answer.Status)
		}
	}
	if _, err := startProfiling(t.Context(), p.address, zerolog.Nop()); err == nil {
		t.Error("two listen at one address")
	}
	if err := p.close(); err != nil {
		t.Error(err)
	}
	off, err := startProfiling(t.Context(), noProfiling, zerolog.Nop())
	if err != nil {
		t.Fatal(err)
	}
	if err := off.close(); err != nil || off.address != "" {
		t.Error(err, off.address)
	}
}
