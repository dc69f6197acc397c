package rehearse

import (
	"bytes"
	"encoding/json"
	"math/rand/v2"
	"slices"
	"strings"
	"time"
)

// Publisher collects what is to be sent and packs it into messages.
type Publisher struct {
	elements []Element
	acts     []act
}

type act struct {
	at     time.Time
	data   []byte
	reason string
}

// Send adds an element.
func (p *Publisher) Send(e Element) { p.elements = append(p.elements, e) }

// PersonActs adds an act, or if reason is not "" something that is refused as
// an act for that reason.
func (p *Publisher) PersonActs(at time.Time, fields map[string]string, reason string) error {
	fields["at"] = at.Format(time.RFC3339)
	data, err := json.Marshal(fields)
	if err != nil {
		return err
	}
	p.acts = append(p.acts, act{at: at, data: data, reason: reason})
	return nil
}

// pack is a message with the elements in it.
type pack struct {
	Message
	elements []Element
	reason   string // of an act
}

// packs puts all into messages in the order of sending. Elements of one sender
// that follow one another share messages of random size and form; a few
// messages with ids are sent twice, as after a lost acknowledgement.
func (p *Publisher) packs(r *rand.Rand, noIDs string) []pack {
	slices.SortStableFunc(p.elements, func(a, b Element) int { return a.Sent.Compare(b.Sent) })
	slices.SortStableFunc(p.acts, func(a, b act) int { return a.at.Compare(b.at) })
	var packs []pack
	acts := p.acts
	for i := 0; i < len(p.elements); {
		for len(acts) > 0 && !acts[0].at.After(p.elements[i].Sent) {
			packs = append(packs, acts[0].pack())
			acts = acts[1:]
		}
		until := time.Time{}
		if len(acts) > 0 {
			until = acts[0].at
		}
		n := run(p.elements[i:], size(r), until)
		m := newPack(r, p.elements[i:i+n])
		packs = append(packs, m)
		if sender(&m.elements[0]) != noIDs && r.IntN(400) == 0 {
			packs = append(packs, m.again())
		}
		i += n
	}
	for _, a := range acts {
		packs = append(packs, a.pack())
	}
	return packs
}

func (a *act) pack() pack {
	return pack{Message: Message{Kind: Act, Data: a.data, Time: a.at, Lines: [][]byte{a.data}}, reason: a.reason}
}

// size draws how many elements a message may hold.
func size(r *rand.Rand) int {
	switch r.IntN(10) {
	case 0:
		return 1
	case 1, 2, 3:
		return Between(r, 2, 40)
	}
	return Between(r, 100, 300)
}

// run is how many of the first elements may share a message.
func run(elements []Element, most int, until time.Time) int {
	n := 1
	if elements[0].Alone {
		return n
	}
	for n < min(most, len(elements)) {
		e := &elements[n]
		if e.Alone || sender(e) != sender(&elements[0]) || (!until.IsZero() && !e.Sent.Before(until)) {
			break
		}
		n++
	}
	return n
}

func sender(e *Element) string {
	site, _, _ := strings.Cut(e.Series, "/")
	return site
}

func newPack(r *rand.Rand, elements []Element) pack {
	lines := make([][]byte, len(elements))
	for i := range elements {
		lines[i] = elements[i].JSON()
	}
	m := pack{elements: elements}
	m.Kind, m.Lines, m.Time = Observations, lines, elements[len(elements)-1].Sent
	switch {
	case len(lines) == 1:
		m.Data = lines[0]
	case r.IntN(5) < 3:
		m.Data = slices.Concat([]byte{'['}, bytes.Join(lines, []byte{','}), []byte{']'})
	default:
		m.Data = append(bytes.Join(lines, []byte{'\n'}), '\n')
	}
	return m
}

// again is the message sent a second time at once.
func (m *pack) again() pack {
	twin := *m
	twin.elements = slices.Clone(m.elements)
	for i := range twin.elements {
		if e := &twin.elements[i]; e.Meant == Counted {
			e.Meant = Repeat
		}
	}
	return twin
}

// Publish packs all that was sent and keeps the ledger by the rules of the
// indicators. Messages of the sender noIDs are never sent twice.
func (p *Publisher) Publish(r *rand.Rand, rules []Rule, noIDs string) ([]Message, Ledger, error) {
	book := newBook(rules)
	var messages []Message
	var acts []ActEntry
	for _, m := range p.packs(r, noIDs) {
		if m.Kind == Act {
			acts = append(acts, ActEntry{Message: len(messages), Reason: m.reason})
		}
		for i := range m.elements {
			if err := book.enter(&m.elements[i], len(messages), i); err != nil {
				return nil, Ledger{}, err
			}
		}
		messages = append(messages, m.Message)
	}
	ledger := book.close()
	ledger.Acts = acts
	return messages, ledger, nil
}
