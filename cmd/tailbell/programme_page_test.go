package main

import (
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

// TestProgrammePage holds what PROGRAMME.md shows against the scripted year: each
// step of a block is one of the year, and each line below it is printed there, in
// that order. A line ... stands for some that are left out.
func TestProgrammePage(t *testing.T) {
	year := readScript(t, filepath.Join(programmeFiles, "year.txt"))
	shown := 0
	for i, block := range strings.Split(readText(t, "PROGRAMME.md"), "```\n") {
		if i%2 == 0 {
			continue // between blocks
		}
		var printed []string
		for line := range strings.SplitSeq(strings.TrimRight(block, "\n"), "\n") {
			if at := slices.IndexFunc(year.lines, func(l scriptLine) bool { return l.step && l.text == line }); at >= 0 {
				printed = afterStep(year, at)
				shown++
				continue
			}
			if line == "..." {
				continue
			}
			at := slices.Index(printed, line)
			if at < 0 {
				t.Errorf("block %d: the year does not print %q there", i/2+1, line)
				continue
			}
			printed = printed[at+1:]
		}
	}
	if shown < 20 {
		t.Errorf("only %d steps are shown", shown)
	}
}

// afterStep are the lines printed by a step, and by those that follow up to the
// next command.
func afterStep(s *script, at int) (printed []string) {
	for i := at; i < len(s.lines) && (i == at || !strings.HasPrefix(s.lines[i].text, "$ ")); i++ {
		printed = append(printed, strings.Split(s.lines[i].prints, "\n")...)
	}
	return printed
}
