package config

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
)

// Fault is one thing that is wrong with a set-up.
type Fault struct {
	// File as it was named to Parse or Load.
	File string
	// Line and Column count from 1; 0 means the file as a whole.
	Line   int
	Column int
	// Key is the dotted key, lists counted from 1: "indicator[2].windows[1].span".
	// Empty where the file can't be read as TOML.
	Key string
	// Problem says what is wrong, Mend what to write instead. Both are plain
	// sentences without a full stop (a question has its mark); Mend may be empty.
	Problem string
	Mend    string
}

// String returns the fault on one line: place, key, problem, mend.
func (f Fault) String() string {
	var b strings.Builder
	b.WriteString(f.File)
	if f.Line > 0 {
		fmt.Fprintf(&b, ":%d:%d", f.Line, f.Column)
	}
	if f.Key != "" {
		b.WriteString(": ")
		b.WriteString(f.Key)
	}
	b.WriteString(": ")
	b.WriteString(f.Problem)
	if f.Mend != "" {
		if strings.HasSuffix(f.Problem, "?") {
			b.WriteString(" ")
		} else {
			b.WriteString("; ")
		}
		b.WriteString(f.Mend)
	}
	return b.String()
}

// Faults is every fault of a file, in order of line.
type Faults []Fault //nolint:errname // "Faults" is the word of the set-up, and reads better than FaultsError

// Error returns one fault a line.
func (f Faults) Error() string {
	lines := make([]string, len(f))
	for i, fault := range f {
		lines[i] = fault.String()
	}
	return strings.Join(lines, "\n")
}

// collector gathers faults while a file is read.
type collector struct {
	file   string
	faults Faults
}

func (c *collector) add(n *node, key, problem, mend string) {
	f := Fault{File: c.file, Key: key, Problem: problem, Mend: mend}
	if n != nil {
		f.Line, f.Column = n.line, n.column
	}
	c.faults = append(c.faults, f)
}

// err returns the faults in order of place, nil if there are none.
func (c *collector) err() error {
	if len(c.faults) == 0 {
		return nil
	}
	slices.SortStableFunc(c.faults, func(a, b Fault) int {
		return cmp.Or(cmp.Compare(a.Line, b.Line), cmp.Compare(a.Column, b.Column))
	})
	return c.faults
}
