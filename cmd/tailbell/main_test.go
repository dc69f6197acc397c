package main

import (
	"bytes"
	"context"
	"os"
	"os/exec"
	"testing"
)

// runMain makes this test binary the program itself, so that tests can start
// and kill it as a process of its own.
const runMain = "TAILBELL_TEST_RUN_MAIN"

func TestMain(m *testing.M) {
	if os.Getenv(runMain) != "" {
		ctx, stop := signalled(context.Background())
		defer stop()
		os.Exit(execute(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr)) //nolint:forbidigo // here it is main
	}
	if order := os.Getenv(runBus); order != "" {
		os.Exit(busMain(order)) //nolint:forbidigo // here it is main
	}
	os.Exit(m.Run()) //nolint:forbidigo // here it is main
}

// program returns the command line as a process of its own, not yet started.
func program(t *testing.T, args ...string) *exec.Cmd {
	t.Helper()
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	c := exec.CommandContext(t.Context(), self, args...)
	c.Env = append(os.Environ(), runMain+"=1")
	return c
}

// run executes one command in this process and returns what it printed.
func run(t *testing.T, args ...string) (code int, stdout, stderr string) {
	t.Helper()
	var out, complaints bytes.Buffer
	code = execute(t.Context(), args, bytes.NewReader(nil), &out, &complaints)
	return code, out.String(), complaints.String()
}

// slow skips a test that takes minutes, unless everything is asked for.
func slow(t *testing.T) {
	t.Helper()
	if os.Getenv("TAILBELL_CI") == "" {
		t.Skip("takes minutes: set TAILBELL_CI=1 to run it")
	}
}
