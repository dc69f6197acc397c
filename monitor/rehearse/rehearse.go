// Package rehearse plants excesses in invented histories, so that a set-up can
// be tried before anybody relies on it.
//
// A scenario is a history as its publishers sent it: messages in the order of
// their history time, with what goes wrong between people and machines (late
// data, corrections, moves, retractions, repeats, refused rubbish), and the
// excesses that were planted. Beside it stands the publishers' own ledger:
// what should become of every element that was published, and how many events
// in how much exposure every series should hold in every slot. The ledger is
// kept by a plain book that knows nothing of the engine, so that the two can
// be compared.
//
// Everything is drawn from a given seed: the same seed gives the same
// messages to the byte.
//
// # Caveats
//
// The data are invented and say nothing of any real place. Counts are drawn
// from Poisson and binomial distributions at a constant rate outside the
// planted spans; real rates drift and clump, so what a scenario finds is an
// upper bound of what can be hoped for.
package rehearse

import (
	"bufio"
	"bytes"
	"fmt"
	"io"
	"strings"
	"time"
)

// Direction is the side on which a planted rate departs from the usual one.
type Direction string

// The directions, spelled as in alert records.
const (
	Upper Direction = "upper"
	Lower Direction = "lower"
)

// Excess is a span in which the true rate of a series was not the usual one.
type Excess struct {
	Series    string
	Direction Direction
	// From and To bound the span (half-open).
	From, To time.Time
	// Ratio of the true rate to the usual one.
	Ratio float64
}

// Mistake is an error of reporting that looks like an excess until it is
// mended: an alert that it opens should be withdrawn.
type Mistake struct {
	Series    string
	Direction Direction
	// From and To bound the time that the wrong data speak of; Mended is when
	// the last of the corrections was sent.
	From, To, Mended time.Time
	// What went wrong, in plain words.
	What string
}

// Kind is the kind of a message, as its subject names it.
type Kind string

// The kinds of message.
const (
	Observations Kind = "obs"
	Act          Kind = "act"
)

// Message is one message as published.
type Message struct {
	Partition int
	Kind      Kind
	// Data as published: an observation, an array or lines of them, an act, or
	// rubbish.
	Data []byte
	// Time at which it was published, in history. No header needs to carry
	// it: the observations' reported times (an act's at) say the same.
	Time time.Time
	// Lines are the elements of Data, for an export by lines.
	Lines [][]byte
}

// Scenario is a rehearsed history.
type Scenario struct {
	Name string
	Seed uint64
	// Setup is the text of a set-up that monitors it.
	Setup    []byte
	Messages []Message
	Ledger   Ledger
	Planted  []Excess
	Mistakes []Mistake
}

// Known returns the planted excesses as a file of known episodes: CSV with the
// columns series, start, end, direction and note.
func (s *Scenario) Known() string {
	var b strings.Builder
	b.WriteString("series,start,end,direction,note\n")
	for _, x := range s.Planted {
		fmt.Fprintf(&b, "%s,%s,%s,%s,planted at %g times the usual rate\n", x.Series, x.From.Format(time.RFC3339), x.To.Format(time.RFC3339), x.Direction, x.Ratio)
	}
	return b.String()
}

// WriteNDJSON writes the messages as newline-delimited JSON: a line for every
// element and every act, in publishing order, rubbish included as far as a
// line can hold it.
func (s *Scenario) WriteNDJSON(w io.Writer) error {
	out := bufio.NewWriter(w)
	for i := range s.Messages {
		for _, line := range s.Messages[i].Lines {
			line = bytes.ReplaceAll(line, []byte{'\n'}, []byte{' '})
			if _, err := out.Write(append(line, '\n')); err != nil {
				return fmt.Errorf("writing message %d as lines: %w", i+1, err)
			}
		}
	}
	if err := out.Flush(); err != nil {
		return fmt.Errorf("writing the scenario as lines: %w", err)
	}
	return nil
}
