package main

import (
	"bytes"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/ingest/wire"
)

// runConfig runs "tailbell config ARGS" and returns what it printed.
func runConfig(args ...string) (stdout, stderr string, err error) {
	var out, errOut bytes.Buffer
	c := newConfigCommand()
	c.SilenceUsage, c.SilenceErrors = true, true
	c.SetOut(&out)
	c.SetErr(&errOut)
	c.SetArgs(args)
	err = c.Execute()
	return out.String(), errOut.String(), err
}

func writeSetup(t *testing.T, text string) string {
	t.Helper()
	file := filepath.Join(t.TempDir(), "setup.toml")
	if err := os.WriteFile(file, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return file
}

func TestConfigSampleChecks(t *testing.T) {
	sample, stderr, err := runConfig("sample")
	if err != nil || stderr != "" || sample != string(config.Sample()) {
		t.Fatalf("sample: %v, %q", err, stderr)
	}
	stdout, stderr, err := runConfig("check", writeSetup(t, sample))
	if err != nil || stderr != "" || !strings.HasPrefix(stdout, "Set-up quillmere: 3 indicators.\n") {
		t.Errorf("check: %v, %q, %q", err, stderr, stdout)
	}
}

func TestConfigCheckFaults(t *testing.T) {
	file := writeSetup(t, "name = 3\nfoldr = \"x\"\n")
	stdout, _, err := runConfig("check", file)
	var faults config.Faults
	if !errors.As(err, &faults) || len(faults) != 3 || stdout != "" {
		t.Fatalf("%v, %q", err, stdout)
	}
	if want := "3 faults in the set-up:\n" + file + ":1:1: "; !strings.HasPrefix(err.Error(), want) {
		t.Errorf("got %s", err)
	}
	if _, _, err := runConfig("check", filepath.Join(t.TempDir(), "absent.toml")); err == nil {
		t.Error("an absent file passes")
	}
}

func TestConfigCheckAgainst(t *testing.T) {
	old := writeSetup(t, string(config.Sample()))
	next := writeSetup(t, strings.Replace(string(config.Sample()), "quiet = 7", "quiet = 14", 1))
	stdout, _, err := runConfig("check", next, "--against", old)
	if err != nil || !strings.Contains(stdout, "indicator[line-infection].quiet: 7 -> 14 (next look)\n") {
		t.Errorf("%v, %s", err, stdout)
	}
	// The folders differ only because the files lie in different ones.
	if !strings.Contains(stdout, "folder: ") {
		t.Errorf("the folder is not compared:\n%s", stdout)
	}
	stdout, _, err = runConfig("check", old, "--against", old)
	if err != nil || !strings.HasSuffix(stdout, "\nNothing changes.\n") {
		t.Errorf("%v, %s", err, stdout)
	}
}

func TestConfigCheckDoubts(t *testing.T) {
	file := writeSetup(t, strings.Replace(string(config.Sample()), "expect = \"14d\" ", "expect = \"1h\" ", 1))
	_, stderr, err := runConfig("check", file)
	if err != nil || !strings.HasPrefix(stderr, "doubtful: "+file+":14:1: indicator[1].expect: ") {
		t.Errorf("%v, %q", err, stderr)
	}
}

func TestConfigSchema(t *testing.T) {
	stdout, _, err := runConfig("schema")
	if err != nil || stdout != string(wire.Schema()) {
		t.Errorf("%v, %q", err, stdout)
	}
}
