package wire

import (
	"bytes"
	"flag"
	"fmt"
	"math/rand/v2"
	"runtime"
	"strings"
	"testing"
	"time"

	"tailbell/monitor"
)

// The long form of TestFlood is run by hand:
//
//	go test ./ingest/wire -run TestFlood -wire.flood 10000000 -timeout 0
var (
	floodMessages = flag.Int("wire.flood", 20_000, "how many random messages TestFlood decodes")
	floodSeed     = flag.Uint64("wire.flood-seed", 0, "the seed of TestFlood; 0 takes one from the clock")
)

// piece is an element made up, with what is known of how it was made.
type piece struct {
	text string
	// loose: its quotes or brackets need not match, so that it stands alone.
	loose bool
}

// flood makes up messages: half of them without a fault, the others with
// every kind of it.
type flood struct{ r *rand.Rand }

func pick[T any](f flood, list []T) T { return list[f.r.IntN(len(list))] }

func (f flood) odds(n int) bool { return f.r.IntN(n) == 0 }

// The texts from which wrong elements are made.
var (
	wrongNumbers = []string{
		"-1", "1.5", "01", "1.", ".5", "1e", "1e400", "-0.5", "9007199254740993", "18446744073709551616", "0.0000000000000000001", "1E-19",
		"NaN", "Infinity", "0x10", `"1"`, "null", "true", "[]", "{}", "1_000", "٣", "+1", "--1", "9" + strings.Repeat("0", 400), "1e-400", "4e18",
	}
	wrongTimes = []string{
		"2026-03-02", "2026-03-02T24:00:00Z", "2026-02-30T00:00:00Z", "2026-03-02T00:00:00", "2026-03-02 00:00:00Z", "2026-03-02T00:00:60Z",
		"2026-03-02T00:00:00+24:00", "0000-01-01T00:00:00Z", "9999-12-31T23:59:59Z", "2100-02-29T00:00:00Z", "10000-01-01T00:00:00Z",
		"-001-01-01T00:00:00Z", "2026-03-02T00:00:00.Z", "2026-W10-1T00:00:00Z", "２０２６-03-02T00:00:00Z", "2016-12-31T23:59:61Z", "",
		"2017-01-01T00:59:60+02:00", "2026-03-02T00:00:00+01", "2026-03-02T00:00:00−01:00",
	}
	wrongNames = []string{
		"a//b", "/a", "a/", "a b", "a/b/c/d/e/f/g/h/i/j/k/l/m", strings.Repeat("x", 65), "", "ward\\u0000", "ward\\n3", "ward\\u007f", "ward\\u0085",
		"ward\\u202e3", "ward\x01", "ward\x1f/falls", "\\ud800", "\xff\xfe", "ward\\x", "a/\\u0007", "a\\u2028b", "ward*", "ward>", "a\\\\b",
	}
	names = []string{
		"quillmere-east/ward-3/line-infection", "quillmere-west/ward-11/falls", "ferrybill/payments_eu.1/failures", "Ωmega/ward", `a\/b`,
		`\u0061/b`, "a",
	}
)

func (f flood) time() (text string, at time.Time) {
	at = time.Date(1+f.r.IntN(9997), time.Month(1+f.r.IntN(12)), 1+f.r.IntN(28), f.r.IntN(24), f.r.IntN(60), f.r.IntN(60), 0, time.UTC)
	if f.odds(2) {
		at = time.Unix(f.r.Int64N(2_000_000_000), f.r.Int64N(1e9)).UTC()
	}
	zone := time.FixedZone("", (f.r.IntN(27*4)-13*4)*900)
	if y := at.In(zone).Year(); y < 1 || y > 9998 {
		zone = time.UTC
	}
	return at.In(zone).Format(pick(f, []string{time.RFC3339, time.RFC3339Nano})), at
}

func (f flood) whole() string {
	n := f.r.Int64N(1 << f.r.IntN(54))
	return pick(f, []string{fmt.Sprint(n), fmt.Sprint(n), fmt.Sprint(n), fmt.Sprintf("%d.0", n), fmt.Sprintf("%de0", n), "9007199254740992", "-0"})
}

func (f flood) decimal() string {
	whole, part := f.r.Uint64()>>f.r.IntN(64), ""
	if whole < 1e9 && f.odds(2) {
		part = fmt.Sprintf(".%0*d", 1+f.r.IntN(9), f.r.IntN(10))
	}
	return pick(f, []string{fmt.Sprint(whole) + part, fmt.Sprint(whole) + part, "0", "1e-6", "22.50", "18446744073709551615", "0.000000000000000001"})
}

// fields returns the fields of an element without a fault.
func (f flood) fields() []string {
	list := []string{`"series":"` + pick(f, names) + `"`}
	if !f.odds(3) {
		list = append(list, fmt.Sprintf(`"id":"lab-%d"`, f.r.IntN(1000)))
		if f.odds(2) {
			list = append(list, fmt.Sprintf(`"revision":%d`, f.r.IntN(5)))
		}
	}
	text, at := f.time()
	if f.odds(3) {
		list = append(list, `"at":"`+text+`"`, `"events":`+f.whole())
	} else {
		end := at.Add(time.Duration(1+f.r.IntN(1_000_000)) * time.Second)
		if end.Year() > 9998 {
			at, end = at.AddDate(-2, 0, 0), end.AddDate(-2, 0, 0)
		}
		list = append(list, `"start":"`+at.Format(time.RFC3339Nano)+`"`, `"end":"`+end.UTC().Format(time.RFC3339Nano)+`"`)
		switch f.r.IntN(3) {
		case 0:
			list = append(list, `"events":`+f.whole())
		case 1:
			list = append(list, `"exposure":`+f.decimal())
		default:
			list = append(list, `"events":`+f.whole(), `"exposure":`+f.decimal())
		}
	}
	if f.odds(4) {
		text, _ := f.time()
		list = append(list, `"reported":"`+text+`"`)
	}
	f.r.Shuffle(len(list), func(i, j int) { list[i], list[j] = list[j], list[i] })
	return list
}

func (f flood) good() piece {
	if f.odds(20) {
		return piece{text: fmt.Sprintf(`{"id":"lab-%d","series":"a/b","revision":%d,"retracted":true}`, f.r.IntN(1000), 1+f.r.IntN(9))}
	}
	return piece{text: "{" + strings.Join(f.fields(), f.between()) + "}"}
}

func (f flood) between() string { return pick(f, []string{",", ",", ",", ", ", " ,\t", ",\r\n "}) }

// bad returns an element that is most often wrong.
func (f flood) bad() piece {
	list := f.fields()
	i := f.r.IntN(len(list))
	name, _, _ := strings.Cut(list[i], ":")
	wrong := func(value string) { list[i] = name + ":" + value }
	switch f.r.IntN(12) {
	case 0, 1:
		wrong(pick(f, wrongNumbers))
	case 2, 3:
		wrong(`"` + pick(f, wrongTimes) + `"`)
	case 4, 5:
		wrong(`"` + pick(f, wrongNames) + `"`)
	case 6:
		list = append(list, list[i]) // twice
	case 7:
		list = append(list[:i], list[i+1:]...)
	case 8:
		list = append(list, `"patient":"`+strings.Repeat("x", f.r.IntN(30))+`"`)
	case 9:
		depth := f.r.IntN(40)
		wrong(strings.Repeat(`{"a":[`, depth) + strings.Repeat("]}", depth))
	case 10:
		wrong(`"` + strings.Repeat("y", f.r.IntN(600)) + `"`)
	case 11:
		return piece{text: pick(f, []string{"null", "17", `"text"`, "true", "{}", "[[]]", "{]", `{"series":}`, "\x00", "\ufeff{}", `{"a"}`, `{,}`}), loose: true}
	}
	p := piece{text: "{" + strings.Join(list, f.between()) + "}"}
	if f.odds(3) {
		return f.damaged(p)
	}
	return p
}

// damaged changes, drops or adds bytes, or cuts the end off.
func (f flood) damaged(p piece) piece {
	b := []byte(strings.NewReplacer("\r", " ", "\n", " ").Replace(p.text))
	const marks = "\"\\{}[],:0123eE+-. nt\x00\xff\xc3\x7f"
	for range 1 + f.r.IntN(3) {
		if len(b) == 0 {
			break
		}
		at := f.r.IntN(len(b))
		switch f.r.IntN(4) {
		case 0:
			b[at] = marks[f.r.IntN(len(marks))]
		case 1:
			b = append(b[:at], b[at+1:]...)
		case 2:
			b = append(b[:at], append([]byte{marks[f.r.IntN(len(marks))]}, b[at:]...)...)
		case 3:
			b = b[:at]
		}
	}
	return piece{text: string(b), loose: true}
}

// message makes up the elements of one message. At most one of them is loose.
func (f flood) message() []piece {
	n := 1
	if f.odds(4) {
		n = 1 + f.r.IntN(12)
	}
	list := make([]piece, n)
	for i := range list {
		list[i] = f.good()
	}
	if f.odds(2) {
		return list
	}
	for range 1 + f.r.IntN(n) {
		i := f.r.IntN(n)
		list[i] = f.bad()
	}
	loose := 0
	for i := range list {
		if list[i].loose {
			if loose++; loose > 1 {
				list[i] = f.good()
			}
		}
	}
	return list
}

// form is how the elements of a message are put together.
type form int

const (
	alone form = iota
	array
	lines
	inEvent
	inHeaders
)

// wrap puts the elements together, in a form that they can stand in.
func (f flood) wrap(list []piece) (Raw, form) {
	loose := false
	texts := make([]string, len(list))
	for i, p := range list {
		texts[i], loose = p.text, loose || p.loose
	}
	r := Raw{Position: 1, Subject: "quillmere.in.0.obs"}
	how := pick(f, []form{array, lines, inEvent, inHeaders})
	if len(list) == 1 && !f.odds(8) {
		how = alone
	}
	if loose && how != alone {
		how = lines
	}
	if loose && (strings.HasPrefix(strings.TrimLeft(texts[0], " \t"), "[") || strings.TrimSpace(texts[0]) == "") {
		how = alone
	}
	switch how {
	case alone:
		r.Data = []byte(texts[0])
	case array:
		r.Data = []byte("[" + strings.Join(texts, f.between()) + "]")
	case lines:
		r.Data = []byte(strings.Join(texts, pick(f, []string{"\n", "\r\n", "\n\n", "\n \t\n"})))
	case inEvent:
		r.Header = map[string][]string{"Content-Type": {"application/cloudevents+json"}}
		r.Data = []byte(`{"specversion":"1.0","id":"7f1c","source":"/quillmere/lab","type":"org.example.count","data":[` + strings.Join(texts, ",") + `]}`)
	case inHeaders:
		r.Header = map[string][]string{"ce-specversion": {"1.0"}, "ce-id": {"7f1c"}, "ce-source": {"/q"}, "ce-type": {"t"}}
		r.Data = []byte("[" + strings.Join(texts, ",") + "]")
	}
	return r, how
}

// judge compares what the decoder made of a message with what the reference
// makes of each element. It says what is wrong, "" for nothing.
func judge(limits Limits, list []piece, how form, m *monitor.Message) (fault string, valid int) {
	if how == alone && strings.HasPrefix(strings.TrimLeft(list[0].text, " \t"), "[") {
		return "", 0 // one element that damage made an array
	}
	if how == alone && len(m.Items) != 1 {
		return fmt.Sprintf("%d items of one element", len(m.Items)), 0
	}
	texts := list[:0:0]
	for _, p := range list {
		if how == lines && strings.TrimSpace(p.text) == "" {
			continue // an empty line is no element
		}
		texts = append(texts, p)
	}
	if m.Kind == monitor.Rejected {
		if how == alone && list[0].loose {
			return "", 0 // an array that can't be split, or nothing at all
		}
		return fmt.Sprintf("refused as a whole: %s, %s", m.Items[0].Reason, m.Items[0].Detail), 0
	}
	if len(m.Items) != len(texts) {
		return fmt.Sprintf("%d items of %d elements", len(m.Items), len(texts)), 0
	}
	for i, p := range texts {
		item := &m.Items[i]
		want, reason := refDecode([]byte(p.text), limits.Depth)
		switch {
		case len(strings.Trim(p.text, " \t\r\n")) > limits.ElementBytes:
			reason = monitor.TooLarge
		case reason == syntaxFault && isSyntax(item.Reason):
			reason = item.Reason
		}
		if reason != item.Reason || (reason == "") != (item.Detail == "") {
			return fmt.Sprintf("element %d: the reference says %q, the decoder %q (%s)", i, reason, item.Reason, item.Detail), valid
		}
		if reason == "" {
			valid++
			if want != item.Observation {
				return fmt.Sprintf("element %d: the reference reads %+v, the decoder %+v", i, want, item.Observation), valid
			}
		}
		if string(item.Raw) != strings.Trim(p.text, " \t\r\n") {
			return fmt.Sprintf("element %d: its bytes are %q", i, item.Raw), valid
		}
	}
	return "", valid
}

// floodCount is what a flood held.
type floodCount struct {
	messages, sound, elements, valid int
	refused                          map[monitor.Reason]int
	forms                            map[form]int
}

// TestFlood decodes random messages in every form, half of them without a
// fault, and holds every element's verdict against the reference's. No good
// neighbour may be lost, and nothing may be kept.
func TestFlood(t *testing.T) {
	seed := *floodSeed
	if seed == 0 {
		seed = uint64(time.Now().UnixNano())
	}
	t.Logf("seed %d", seed)
	f := flood{rand.New(rand.NewPCG(seed, 1))}
	limits := Limits{ElementBytes: 512}.withDefaults()
	d := NewDecoder(limits)
	count := floodCount{refused: map[monitor.Reason]int{}, forms: map[form]int{}}
	before, routines := heap(), runtime.NumGoroutine()
	for n := range *floodMessages {
		list := f.message()
		raw, how := f.wrap(list)
		kept := bytes.Clone(raw.Data)
		m := d.Decode(raw)
		fault, valid := judge(limits, list, how, &m)
		if fault == "" && !bytes.Equal(kept, raw.Data) {
			fault = "the decoder changed its input"
		}
		if fault != "" {
			t.Fatalf("seed %d, message %d (form %d): %s\n%q", seed, n, how, fault, kept)
		}
		count.add(&m, how, valid)
		if n > 0 && n%1_000_000 == 0 {
			t.Logf("%d messages, heap %d KiB", n, heap()>>10)
		}
	}
	after := heap()
	t.Logf("%d messages, %d of them sound; %d elements, %d of them valid; refused %v; forms %v; heap %d KiB before, %d KiB after",
		count.messages, count.sound, count.elements, count.valid, count.refused, count.forms, before>>10, after>>10)
	if grown := int64(after) - int64(before); grown > 8<<20 {
		t.Errorf("the heap has grown by %d KiB", grown>>10)
	}
	if now := runtime.NumGoroutine(); now > routines {
		t.Errorf("%d goroutines, %d before", now, routines)
	}
	if count.sound*100 < count.messages*49 || len(count.refused) < 15 || len(count.forms) < 5 {
		t.Errorf("the flood no longer reaches everything: %d of %d sound, %d reasons, %d forms",
			count.sound, count.messages, len(count.refused), len(count.forms))
	}
}

func (c *floodCount) add(m *monitor.Message, how form, valid int) {
	c.messages++
	c.forms[how]++
	c.elements += len(m.Items)
	c.valid += valid
	if valid == len(m.Items) {
		c.sound++
	}
	for i := range m.Items {
		if reason := m.Items[i].Reason; reason != "" {
			c.refused[reason]++
		}
	}
}

func heap() uint64 {
	runtime.GC()
	var s runtime.MemStats
	runtime.ReadMemStats(&s)
	return s.HeapAlloc
}

// TestFloodOfRubbish feeds bytes without any order, whole and cut messages and
// every kind of subject and header: whatever it is, it is refused with a reason
// or understood, and of what is refused the bytes are kept.
func TestFloodOfRubbish(t *testing.T) {
	seed := *floodSeed
	if seed == 0 {
		seed = uint64(time.Now().UnixNano())
	}
	f := flood{rand.New(rand.NewPCG(seed, 2))}
	d := NewDecoder(Limits{Observations: 20, ElementBytes: 300, MessageBytes: 4000, Depth: 5})
	subjects := []string{"q.in.0.obs", "q.in.0.obs", "q.in.0.act", "q.in.0.set", "q.in.0.tick", "q.in.0.", "", "q.in.0.else"}
	headers := []string{"Tailbell-Time", "Tailbell-Live", "Content-Type", "ce-id", "ce-specversion", "ce-time", "CE-ID", "ce-ä", "Nats-Msg-Id"}
	values := []string{"", "1", "1.0", "application/cloudevents+json", "application/cloudevents-batch+json", "2026-03-02T00:00:00Z", "text/html", "%zz", "\x00"}
	for n := range max(*floodMessages/10, 1000) {
		raw := Raw{Position: uint64(n), Subject: pick(f, subjects)}
		for range f.r.IntN(3) {
			if raw.Header == nil {
				raw.Header = map[string][]string{}
			}
			raw.Header[pick(f, headers)] = []string{pick(f, values)}
		}
		if f.odds(2) {
			list := f.message()
			sound, _ := f.wrap(list)
			raw.Data = []byte(f.damaged(piece{text: string(sound.Data)}).text)
		} else {
			raw.Data = make([]byte, f.r.IntN(200))
			for i := range raw.Data {
				raw.Data[i] = byte(f.r.Uint32())
			}
		}
		kept := bytes.Clone(raw.Data)
		m := d.Decode(raw)
		if m.Kind == monitor.Rejected && (len(m.Items) != 1 || m.Items[0].Reason == "" || !bytes.Equal(m.Items[0].Raw, kept)) {
			t.Fatalf("seed %d, message %d: %+v of %q", seed, n, m.Items, kept)
		}
		for i := range m.Items {
			if it := &m.Items[i]; (it.Reason == "") != (it.Detail == "") || !bytes.Contains(kept, it.Raw) && raw.Header == nil && it.Reason != "" && !bytes.Contains(kept, []byte("data_base64")) {
				t.Fatalf("seed %d, message %d: item %+v of %q", seed, n, it, kept)
			}
		}
	}
}
