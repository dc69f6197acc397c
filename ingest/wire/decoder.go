// Package wire turns messages of the bus into inputs of the engine, and
// observations and acts into the canonical JSON that is published.
//
// The model:
//   - A Raw is one message as the bus stored it. The last token of its subject
//     says what it holds: obs (observations), act, set (a set-up as TOML text),
//     tick (nothing but its time) or sum (what another partition has to tell to
//     sums over several).
//   - Observations come as one JSON object, a JSON array of them, or one a
//     line; bare, or as the data of a CloudEvent 1.0 in structured or binary
//     mode.
//   - Whatever can't be understood is refused, never dropped: with a stable
//     reason code, a sentence that says what is wrong and how to mend it, and
//     the original bytes. A bad element refuses itself alone. Only a message
//     that can't be split into elements is refused as a whole.
//
// Decoding is a pure function of the message and the limits. It is strict:
// duplicate and unknown fields, text that is not UTF-8, lone surrogates,
// numbers in quotes, null, and times that RFC 3339 does not allow are refused.
// Two ways lead through it: elements written plainly take a quick one; all
// others take a careful one that also says what is wrong. Tests hold both
// against a third, slow decoder built on another JSON library.
//
// Caveats: a Decoder is for one goroutine. It takes ownership of Raw.Data,
// which must not be changed afterwards: Item.Raw of an understood element
// points into it (so that the engine, should it refuse the element, still has
// its bytes), and must be copied to be kept. Strings are copied.
package wire

import (
	"strings"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

// Raw is one message as the bus stored it.
type Raw struct {
	// Position is the message's sequence in the stream, from 1.
	Position uint64
	// Stored is when the bus stored it.
	Stored time.Time
	// Subject ends in obs, act, set, tick or sum.
	Subject string
	Header  map[string][]string
	// Data is handed over to the decoder.
	Data []byte
}

// Limits bound what is decoded. A zero field means its default.
type Limits struct {
	// MessageBytes is the longest message: 1 MiB by default.
	MessageBytes int
	// Observations is the largest number of elements in a message: 10,000 by
	// default.
	Observations int
	// Depth is the deepest nesting of an element or an envelope; an
	// observation itself has depth 1. 16 by default, at most 1,000.
	Depth int
	// ElementBytes is the longest element: 16 KiB by default.
	ElementBytes int
}

// The default limits.
const (
	DefaultMessageBytes = 1 << 20
	DefaultObservations = 10_000
	DefaultDepth        = 16
	DefaultElementBytes = 16 << 10

	deepest = 1000
)

func (l Limits) withDefaults() Limits {
	fill := func(field *int, value int) {
		if *field <= 0 {
			*field = value
		}
	}
	fill(&l.MessageBytes, DefaultMessageBytes)
	fill(&l.Observations, DefaultObservations)
	fill(&l.Depth, DefaultDepth)
	fill(&l.ElementBytes, DefaultElementBytes)
	l.Depth = min(l.Depth, deepest)
	return l
}

// Decoder decodes messages, one goroutine at a time.
type Decoder struct {
	limits Limits
	// spare is a stock of items for messages of one observation.
	spare []monitor.Item
}

// NewDecoder returns a decoder with these limits.
func NewDecoder(l Limits) *Decoder {
	return &Decoder{limits: l.withDefaults()}
}

// Decode turns one message into an input of the engine. It never fails: what
// it can't understand is a refusal in the result. The details of refusals quote
// nothing of the message, since they are kept longer than its bytes; those that
// Observation and Act return do.
func (d *Decoder) Decode(r Raw) monitor.Message {
	m := d.decode(r)
	makeDiscreet(&m)
	return m
}

// isCarried reports whether a message stands on a subject of those that a division
// carries over.
func isCarried(subject string) bool {
	_, rest, _ := strings.Cut(subject, ".")
	return strings.HasPrefix(rest, CarriedToken+".")
}

// CarriedToken is the second token of the subjects of messages that a division of the
// stream carried over.
const CarriedToken = "divided"

func (d *Decoder) decode(r Raw) monitor.Message {
	m := monitor.Message{Position: r.Position, Stored: monitor.InstantOf(r.Stored), Carried: isCarried(r.Subject)}
	live, f := readHeader(r.Header, &m)
	if f != nil {
		return rejected(m, f, r.Data)
	}
	kind := r.Subject[strings.LastIndexByte(r.Subject, '.')+1:]
	if live && kind != "tick" {
		return rejected(m, refuse(monitor.BadHeader,
			"the header %s ends history time and belongs on a tick, not on %q", LiveHeader, kind), r.Data)
	}
	if kind == "sum" {
		return summary(m, r)
	}
	if len(r.Data) > d.limits.MessageBytes {
		return rejected(m, refuse(monitor.TooLarge,
			"the message has %d bytes, the limit is %d; send it in parts", len(r.Data), d.limits.MessageBytes), r.Data)
	}
	switch kind {
	case "obs":
		return d.observations(m, r)
	case "act":
		return d.act(m, r)
	case "set":
		return setting(m, r)
	case "tick":
		return tick(m, r, live)
	}
	return rejected(m, refuse(monitor.BadSubject,
		"the subject ends in %q; it must end in obs, act, set, tick or sum", clip(kind)), r.Data)
}

func (d *Decoder) observations(m monitor.Message, r Raw) monitor.Message {
	p, f := d.unwrap(r)
	if f != nil {
		return rejected(m, f, r.Data)
	}
	items, f := d.split(p)
	if f == nil && len(items) == 1 && items[0].Reason != "" && !p.enveloped && isEnvelope(r.Data) {
		if p, f = d.unwrapJSON(r.Data); f == nil {
			items, f = d.split(p)
		}
	}
	if f != nil {
		return rejected(m, f, r.Data)
	}
	m.Kind, m.Items = monitor.Observations, items
	return m
}

func (d *Decoder) act(m monitor.Message, r Raw) monitor.Message {
	p, f := d.unwrap(r)
	if f != nil {
		return rejected(m, f, r.Data)
	}
	act, f := d.readAct(p.data)
	if f != nil {
		return rejected(m, f, r.Data)
	}
	m.Kind, m.Act = monitor.ActMessage, act
	return m
}

func setting(m monitor.Message, r Raw) monitor.Message {
	setup, err := config.Parse(r.Data, "setting")
	if err != nil {
		return rejected(m, refuse(monitor.BadSetting, "%s", shorten(err.Error())), r.Data)
	}
	m.Kind, m.Setting = monitor.SettingMessage, monitor.Setting{Setup: setup}
	return m
}

// shorten cuts a list of faults at a line's end.
func shorten(faults string) string {
	const most = 4096
	if len(faults) <= most {
		return faults
	}
	return faults[:strings.LastIndexByte(faults[:most], '\n')+1] + "and more"
}

func tick(m monitor.Message, r Raw, live bool) monitor.Message {
	if len(r.Data) > 0 {
		return rejected(m, refuse(monitor.BadSubject,
			"a tick carries no data; observations go to the subject that ends in obs"), r.Data)
	}
	m.Kind = monitor.Tick
	if live {
		m.Kind = monitor.Live
	}
	return m
}

func summary(m monitor.Message, r Raw) monitor.Message {
	s, err := monitor.DecodeSummary(r.Data)
	if err != nil {
		return rejected(m, refuse(monitor.BadSummary, "%v; only the daemons of the deployment publish summaries", err), r.Data)
	}
	m.Kind, m.Summary = monitor.SummaryMessage, s
	return m
}

// rejected makes the message one refusal with all its bytes.
func rejected(m monitor.Message, f *fault, data []byte) monitor.Message {
	m.Kind = monitor.Rejected
	m.Items = []monitor.Item{f.item(data)}
	return m
}
