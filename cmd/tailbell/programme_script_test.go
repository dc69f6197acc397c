package main

import (
	"fmt"
	"os"
	"strings"
	"testing"
	"time"
)

// A script is a text of steps, each a line, and below it, indented, what is
// printed then. Lines that begin with # are comments, with * the heading of a
// chapter. The steps are:
//
//	daemon FILE          the daemon is started with the set-up, or started again
//	daily SERIES E [N]   from the next night on a ward reports E of exposure each day,
//	                     and every N days one event (0: none); without N exposure alone
//	stop SERIES          it reports no more
//	extra SERIES DATE K  the report of that day holds K events more
//	hold SERIES          its reports are not sent for now
//	release SERIES       those held back are sent with the next night's
//	nights DATE          all days before the date are reported, each on the next morning
//	{...}                lines of JSON: published as one message
//	replayed             tailbell replay --stream tells the steps told so far, to the byte
//	heard                what the outlet "lead" was told
//	$ COMMAND            a command as its user types it; also cp and mv
type script struct {
	lines []scriptLine
}

// scriptLine is a step with what it prints, or a line that is only read.
type scriptLine struct {
	number int
	text   string
	step   bool
	prints string
}

// indent begins the lines of what is printed.
const indent = "    "

func readScript(t *testing.T, path string) *script {
	t.Helper()
	s := &script{}
	for n, line := range strings.Split(strings.TrimRight(readText(t, path), "\n"), "\n") {
		switch last := len(s.lines) - 1; {
		case strings.HasPrefix(line, indent) || strings.TrimSpace(line) == "" && last >= 0 && s.lines[last].step && s.lines[last].prints != "":
			s.lines[last].prints += strings.TrimPrefix(line, indent) + "\n"
		case strings.HasPrefix(line, "{") && strings.HasPrefix(s.lines[last].text, "{") && s.lines[last].prints == "":
			s.lines[last].text += "\n" + line
		default:
			s.lines = append(s.lines, scriptLine{number: n + 1, text: line, step: line != "" && !strings.ContainsRune("#*", rune(line[0]))})
		}
	}
	for i := range s.lines {
		s.lines[i].prints = strings.TrimRight(s.lines[i].prints, "\n")
	}
	return s
}

// write writes the script with what was printed.
func (s *script) write(t *testing.T, path string) {
	t.Helper()
	var b strings.Builder
	for i := range s.lines {
		l := &s.lines[i]
		b.WriteString(l.text + "\n")
		if l.prints == "" {
			continue
		}
		for line := range strings.SplitSeq(l.prints, "\n") {
			b.WriteString(strings.TrimRight(indent+line, " ") + "\n")
		}
		if i+1 < len(s.lines) && s.lines[i+1].text != "" {
			b.WriteByte('\n')
		}
	}
	if err := os.WriteFile(path, []byte(b.String()), 0o600); err != nil {
		t.Fatal(err)
	}
}

// words splits a command line; single and double quotes hold words together.
func commandWords(line string) []string {
	var all []string
	word, quote, begun := "", rune(0), false
	for _, c := range line {
		switch {
		case quote == 0 && (c == '\'' || c == '"'):
			quote, begun = c, true
		case c == quote:
			quote = 0
		case quote == 0 && c == ' ':
			if begun {
				all = append(all, word)
			}
			word, begun = "", false
		default:
			word, begun = word+string(c), true
		}
	}
	if begun {
		all = append(all, word)
	}
	return all
}

// reporter is a series of the script that reports each night.
type reporter struct {
	series   string
	exposure string
	every    int // days from one event to the next, 0 for none, -1 for no count of events
	held     bool
	stopped  bool
	waiting  []string // reports that are held back
}

// nights makes the reports of the sites.
type nights struct {
	zone      *time.Location
	day       time.Time // the next to be reported
	reporters []*reporter
	extra     map[string]int // by series and date
}

func newNights(t *testing.T, first string) *nights {
	t.Helper()
	zone, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	day, err := time.ParseInLocation(time.DateOnly, first, zone)
	if err != nil {
		t.Fatal(err)
	}
	return &nights{zone: zone, day: day, extra: map[string]int{}}
}

// find returns the reporter of a series that has not stopped.
func (n *nights) find(t *testing.T, series string) *reporter {
	t.Helper()
	for _, r := range n.reporters {
		if r.series == series && !r.stopped {
			return r
		}
	}
	t.Fatalf("nobody reports %s", series)
	return nil
}

// site is the part of a name by which reports go together.
func site(series string) string {
	first, _, _ := strings.Cut(series, "/")
	return first
}

// next returns the messages of the next night, one a site, in the order in which
// the sites were first named.
func (n *nights) next() []string {
	var sites []string
	of := map[string][]string{}
	reported := n.day.AddDate(0, 0, 1).Add(6 * time.Hour).Format(time.RFC3339)
	for number, r := range n.reporters {
		at := site(r.series)
		if _, known := of[at]; !known {
			sites, of[at] = append(sites, at), nil
		}
		if !r.stopped {
			r.waiting = append(r.waiting, n.report(number, r))
		}
		if r.held {
			continue
		}
		for _, report := range r.waiting {
			of[at] = append(of[at], strings.ReplaceAll(report, "REPORTED", reported))
		}
		r.waiting = nil
	}
	n.day = n.day.AddDate(0, 0, 1)
	var messages []string
	for _, at := range sites {
		if len(of[at]) > 0 {
			messages = append(messages, strings.Join(of[at], "\n"))
		}
	}
	return messages
}

// report is one series' report of the day.
func (n *nights) report(number int, r *reporter) string {
	date := n.day.Format(time.DateOnly)
	_, name, _ := strings.Cut(r.series, "/")
	counted := ""
	if r.every >= 0 {
		events := n.extra[r.series+" "+date]
		if r.every > 0 && (n.day.YearDay()+3*number)%r.every == 0 {
			events++
		}
		counted = fmt.Sprintf(`,"events":%d`, events)
	}
	return fmt.Sprintf(`{"id":"%s/%s","series":%q,"start":%q,"end":%q%s,"exposure":%s,"reported":"REPORTED"}`,
		name, date, r.series, n.day.Format(time.RFC3339), n.day.AddDate(0, 0, 1).Format(time.RFC3339), counted, r.exposure)
}
