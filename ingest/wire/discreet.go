package wire

import (
	"regexp"
	"slices"
	"strings"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

// quoted is a text as %q writes it.
var quoted = regexp.MustCompile(`"(?:[^"\\]|\\.)*"`)

// elided stands for what a message said.
const elided = `"..."`

// ownWords are those of the contract, which a detail may quote.
var ownWords = append([]string{
	"id", "series", "start", "end", "at", "events", "exposure", "revision", "reported", "retracted",
	"act", "alert", "direction", "mark", "until", "by", "why", "obs", "set", "tick",
}, markWords()...)

func markWords() []string {
	var words []string
	for _, m := range life.Marks {
		words = append(words, string(m))
	}
	return words
}

// discreet takes out of a detail what it quotes from the message. A refusal's
// bytes expire, its detail stays: whatever a publisher put where the contract
// has no place for it (a name, say) must not stay with it. Every text of a
// message stands in quotes in a detail.
func discreet(detail string) string {
	if !strings.Contains(detail, `"`) {
		return detail
	}
	return quoted.ReplaceAllStringFunc(detail, func(q string) string {
		if slices.Contains(ownWords, q[1:len(q)-1]) {
			return q
		}
		return elided
	})
}

// makeDiscreet does so for all refusals of a message. A refused set-up is none
// of a publisher's: its faults stay whole.
func makeDiscreet(m *monitor.Message) {
	for i := range m.Items {
		if it := &m.Items[i]; it.Reason != "" && it.Reason != monitor.BadSetting {
			it.Detail = discreet(it.Detail)
		}
	}
}
