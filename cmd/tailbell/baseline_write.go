package main

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"tailbell/config"
	"tailbell/monitor/estimate"
)

// baselineEdit is a set-up's text with a new baseline.
type baselineEdit struct {
	stanza string
	text   []byte
	// why says why the text can't be had, nil if it can.
	why error
}

const (
	baselineHeader    = "[[indicator.baseline]]"
	oneBaselineHeader = "[indicator.baseline]"
)

// errByHand is returned for a set-up whose text has another form than can be
// edited safely.
var errByHand = errors.New("the set-up's baselines are not written as tables [[indicator.baseline]], so paste the stanza by hand")

// addBaseline makes the stanza and the text of the set-up with it. A baseline
// for all series takes the place of the last one, which becomes a comment; one
// for some series is put before all others. Keys that the set-up refuses are
// written as comments with the reason.
func addBaseline(setup *config.Setup, in *config.Indicator, r *estimate.Report, pattern string) (*baselineEdit, error) {
	refused := map[string]string{}
	for {
		e := &baselineEdit{stanza: r.Stanza.Text(baselineHeader, func(key string) string { return refused[key] })}
		var text []byte
		if text, e.why = insertBaseline(setup.Text, in, e.stanza, pattern); e.why != nil {
			return e, nil //nolint:nilerr // the stanza can be printed all the same; write tells why
		}
		next, err := config.Parse(text, "the set-up with the new baseline")
		var faults config.Faults
		switch {
		case err == nil:
			e.text, e.why = text, checkEdit(setup.Text, next, in)
			return e, nil
		case !errors.As(err, &faults):
			return nil, err
		case !noteRefused(faults, &r.Stanza, refused):
			e.why = fmt.Errorf("with the new baseline the set-up would not be valid:\n%w", err)
			return e, nil
		}
	}
}

// noteRefused notes the optional keys that the faults are about, and reports
// whether there was a new one.
func noteRefused(faults config.Faults, s *estimate.Stanza, refused map[string]string) bool {
	found := false
	for _, o := range s.Optional {
		key := o.Key()
		for _, f := range faults {
			inIt := strings.Contains(f.Key, ".baseline") && (strings.HasSuffix(f.Key, "."+key) || strings.Contains(f.Key, "."+key+"."))
			if inIt && refused[key] == "" {
				refused[key] = f.Problem
				found = true
			}
		}
	}
	return found
}

// checkEdit makes sure that only the indicator's baselines have changed.
func checkEdit(text []byte, next *config.Setup, in *config.Indicator) error {
	old, err := config.Parse(text, "the set-up") // with its paths as written, as in next
	if err != nil {
		return err
	}
	for _, c := range config.Compare(old, next) {
		if !strings.HasPrefix(c.Key, "indicator["+in.Name+"].baseline") {
			return fmt.Errorf("%w: %s would change", errByHand, c.Key)
		}
	}
	return nil
}

// insertBaseline puts the stanza into the text of a set-up.
func insertBaseline(text []byte, in *config.Indicator, stanza, pattern string) ([]byte, error) {
	lines := bytes.SplitAfter(text, []byte("\n"))
	tables, end := baselineTables(lines, in)
	if len(tables) == 0 || len(tables) != len(in.Baselines) {
		return nil, errByHand
	}
	for _, at := range tables {
		if headerOf(lines[at]) == oneBaselineHeader {
			lines[at] = bytes.Replace(lines[at], []byte(oneBaselineHeader), []byte(baselineHeader), 1)
		}
	}
	var out bytes.Buffer
	write := func(from, to int, prefix string) {
		for _, l := range lines[from:to] {
			if prefix != "" && len(bytes.TrimSpace(l)) == 0 {
				prefix = "" // what follows is no longer the table
			}
			out.WriteString(prefix)
			out.Write(l)
		}
	}
	if pattern != "" {
		write(0, tables[0], "")
		out.WriteString(stanza + "\n")
		write(tables[0], len(lines), "")
		return out.Bytes(), nil
	}
	last := tables[len(tables)-1]
	write(0, last, "")
	out.WriteString(stanza + "\n# Until then:\n")
	write(last, end, "# ")
	if end == len(lines) && out.Bytes()[out.Len()-1] != '\n' {
		out.WriteByte('\n')
	}
	write(end, len(lines), "")
	return out.Bytes(), nil
}

// baselineTables returns the lines at which the indicator's baseline tables
// begin, and the one after the last table's last.
func baselineTables(lines [][]byte, in *config.Indicator) (tables []int, end int) {
	end = len(lines)
	for i := in.Line; i < len(lines); i++ { // the line after the indicator's header
		switch h := headerOf(lines[i]); h {
		case "":
			continue
		case baselineHeader, oneBaselineHeader:
			tables = append(tables, i)
			end = len(lines)
		default:
			if len(tables) > 0 && end == len(lines) {
				end = i
			}
			if !strings.HasPrefix(strings.TrimLeft(h, "["), "indicator.") {
				return tables, end
			}
		}
	}
	return tables, end
}

// headerOf returns the header of a table, without blanks and comments, or "".
func headerOf(line []byte) string {
	s := strings.TrimSpace(string(line))
	if !strings.HasPrefix(s, "[") {
		return ""
	}
	s, _, _ = strings.Cut(s, "#")
	return strings.ReplaceAll(strings.ReplaceAll(s, " ", ""), "\t", "")
}

// write puts the text into a file, whole or not at all. It replaces no other
// file than the set-up itself, and that only if it is still what was read.
func (e *baselineEdit) write(path, setupPath string) (err error) {
	if e.why != nil {
		return fmt.Errorf("%s was not written: %w", path, e.why)
	}
	mode := fs.FileMode(0o600)
	old, err := os.Stat(path)
	switch {
	case err == nil:
		setup, err := os.Stat(setupPath)
		if err != nil {
			return err
		}
		if !os.SameFile(old, setup) {
			return fmt.Errorf("%s exists and is not the set-up: name a new file, or %s itself", path, setupPath)
		}
		mode = old.Mode().Perm()
		if path, err = filepath.EvalSymlinks(path); err != nil {
			return err
		}
	case !errors.Is(err, fs.ErrNotExist):
		return err
	}
	f, err := os.CreateTemp(filepath.Dir(path), ".tailbell-baseline-*")
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(f.Name()))
		}
	}()
	_, err = f.Write(e.text)
	if err = errors.Join(err, f.Chmod(mode), f.Sync(), f.Close()); err != nil {
		return err
	}
	return os.Rename(f.Name(), path)
}
