package main

import (
	"path/filepath"
	"regexp"
	"strings"
	"testing"
)

// TestOperationsPageNamesEverything holds the page against the source: every
// trouble, condition and reason of the engine must be explained.
func TestOperationsPageNamesEverything(t *testing.T) {
	page := string(readAll(t, "OPERATIONS.md"))
	constant := regexp.MustCompile(`(?m)^\s+\w+\s+(?:troubleKind|ConditionKind|Reason)\s+= "([^"]+)"`)
	for file, least := range map[string]int{
		"trouble.go": 5, filepath.Join("..", "..", "monitor", "condition.go"): 5, filepath.Join("..", "..", "monitor", "input.go"): 15,
	} {
		text := string(readAll(t, file))
		if i := strings.Index(text, "// Reasons given by the engine."); i >= 0 {
			text = text[i:] // the decoder's are explained beside it
		}
		found := constant.FindAllStringSubmatch(text, -1)
		if len(found) < least {
			t.Errorf("%s: only %d names found", file, len(found))
		}
		for _, name := range found {
			if !strings.Contains(page, "`"+name[1]+"`") {
				t.Errorf("OPERATIONS.md does not explain %q of %s", name[1], file)
			}
		}
	}
}
