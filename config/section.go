package config

import (
	"errors"
	"fmt"
	"math"
	"math/big"
	"slices"
	"strconv"
	"strings"
	"time"
	"unicode/utf8"
)

// section is one table of the file, read key by key. Its getters report what
// is wrong to the collector and go on; ok says that the value (or its default)
// is sound and may be judged together with others.
type section struct {
	*collector
	node *node
	// path leads to the table, "" for the file itself.
	path string
}

// keysOf are the keys that each kind of table may have.
var keysOf = map[string][]string{
	"":             {"name", "folder", "partitions", "key_parts", "time", "bus", "limits", "page", "indicator", "outlet"},
	"[time]":       {"mode"},
	"[bus]":        {"url", "credentials", "user", "password_file", "ca", "cert", "key", "max_bytes", "max_age", "replicas", "share", "claim", "copy_every"},
	"[limits]":     {"max_series", "max_ids", "max_message", "max_observations", "memory", "archive"},
	indicatorPlace: {"name", "title", "noun", "series", "sums", "measure", "unit", "per", "expected", "every", "zone", "events", "exposure", "clock", "settle", "follow_up", "horizon", "ahead", "grain", "ids", "expires", "since", "expect", "remind", "remind_to", "retire", "windows", "looks", "tails", "p_limit", "allowance", "allowance_for", "assurance", "reserve", "quiet", "level", "alpha", "baseline"},
	"clock":        {"size", "per"},
	"a window":     {"span", "step"},
	baselinePlace:  {"series", "sums", "from", "to", "kind", "rate", "events", "exposure", "span", "gap", "refresh", "min_events", "margin", "spread", "strata", "delay", "version", "source"},
	pagePlace:      {"listen", "url", "users", "cert", "key"},
	outletPlace: {
		"name", "kind", "url", "secret_file", "server", "tls", "ca", "user", "password_file", "from", "to", "picture", "command", "time_limit",
		"indicators", "series", "tails", "p_at_most", "steps", "history",
	},
	expectPlace: {"series", "within"},
	"strata":    {"by", "factors"},
	"delay":     {"ages", "reported"},
}

const (
	indicatorPlace = "[[indicator]]"
	baselinePlace  = "[[indicator.baseline]]"
)

// key returns the full key of one of the section's keys.
func (s section) key(name string) string {
	if s.path == "" {
		return bareKey(name)
	}
	return s.path + "." + bareKey(name)
}

// bareKey quotes a key that TOML would have quoted.
func bareKey(name string) string {
	for _, c := range name {
		if !partCharacter(c) || c == '.' || c >= utf8.RuneSelf {
			return strconv.Quote(name)
		}
	}
	if name == "" {
		return `""`
	}
	return name
}

// has reports whether the key is given.
func (s section) has(name string) bool { return s.node.fields[name] != nil }

// fault reports a fault of one key; at the section's head if it isn't given.
func (s section) fault(name, problem, mend string) {
	at := s.node.fields[name]
	if at == nil {
		at = s.node
	}
	s.add(at, s.key(name), problem, mend)
}

// strict reports the keys that a table of this kind lacks.
func (s section) strict(place string) {
	known := keysOf[place]
	for _, k := range s.node.keys {
		if slices.Contains(known, k) {
			continue
		}
		s.fault(k, "is no key "+placeName(place), suggestKey(k, place))
	}
}

func placeName(place string) string {
	if place == "" {
		return "at the top of a set-up"
	}
	return "of " + place
}

func suggestKey(k, place string) string {
	for _, known := range keysOf[place] {
		if strings.EqualFold(known, k) {
			return "write " + known
		}
	}
	var others []string
	for other, keys := range keysOf {
		if slices.Contains(keys, k) {
			others = append(others, other)
		}
	}
	if len(others) > 0 {
		slices.Sort(others)
		return "it is a key " + placeName(others[0])
	}
	if best, found := nearest(k, keysOf[place]); found {
		return "did you mean " + best + "?"
	}
	return "known are: " + strings.Join(keysOf[place], ", ")
}

// get returns the value of a key if it is given and of one of the kinds.
func (s section) get(name string, kinds ...kind) (n *node, given, ok bool) {
	n = s.node.fields[name]
	if n == nil {
		return nil, false, true
	}
	if slices.Contains(kinds, n.kind) {
		return n, true, true
	}
	s.wrongKind(n, s.key(name), kinds[0])
	return n, true, false
}

func (c *collector) wrongKind(n *node, key string, want kind) {
	mend := "write " + want.String()
	switch {
	case want == textKind && n.kind != listKind && n.kind != tableKind:
		mend = `put it between quotation marks: "` + n.text + `"`
	case (want == wholeKind || want == pointKind) && n.kind == textKind:
		mend = "write the number without quotation marks"
	case want == listKind && n.kind == textKind:
		mend = fmt.Sprintf("put it into brackets: [%q]", n.text)
	}
	c.add(n, key, fmt.Sprintf("is %s where %s is wanted", n.kind, want), mend)
}

// sub returns a table below, empty if it isn't given.
func (s section) sub(name string) section {
	n, given, ok := s.get(name, tableKind)
	if !given || !ok {
		n = &node{kind: tableKind, line: s.node.line, column: s.node.column}
	}
	return section{s.collector, n, s.key(name)}
}

// text returns a text of at most 200 characters on one line.
func (s section) text(name, standard string) (string, bool) { return s.line(name, standard, 200) }

// filePath returns the path of a file or folder.
func (s section) filePath(name, standard string) string {
	path, _ := s.line(name, standard, 4000)
	return path
}

func (s section) line(name, standard string, most int) (string, bool) {
	n, given, ok := s.get(name, textKind)
	switch {
	case !ok:
		return standard, false
	case !given:
		return standard, true
	case strings.TrimSpace(n.text) == "":
		s.fault(name, "is empty", "leave the key out or give it a text")
		return standard, false
	case len([]rune(n.text)) > most || strings.ContainsFunc(n.text, func(c rune) bool { return c < ' ' || c == 0x7f }):
		s.fault(name, fmt.Sprintf("is longer than %d characters or has control characters in it", most), "write one short line")
		return standard, false
	}
	return n.text, true
}

// plainName returns a name of a-z, 0-9 and "-", which must be given.
func (s section) plainName(name string, longest int) (string, bool) {
	n, given, ok := s.get(name, textKind)
	switch {
	case !ok:
		return "", false
	case !given:
		s.fault(name, "is missing", `give a name of small letters, digits and -, e.g. name = "quillmere"`)
		return "", false
	}
	bad := strings.Trim(n.text, "abcdefghijklmnopqrstuvwxyz0123456789-") != "" || strings.HasPrefix(n.text, "-")
	if bad || n.text == "" || len(n.text) > longest {
		s.fault(name, fmt.Sprintf("%q is no name", n.text),
			fmt.Sprintf("use 1 to %d small letters a-z, digits and -, not - in front", longest))
		return "", false
	}
	return n.text, true
}

// word returns the index of one of several words.
func (s section) word(name string, standard int, words ...string) (int, bool) {
	n, given, ok := s.get(name, textKind)
	if !given || !ok {
		return standard, ok
	}
	return s.wordOf(n, s.key(name), words)
}

func (c *collector) wordOf(n *node, key string, words []string) (int, bool) {
	if i := slices.Index(words, n.text); i >= 0 {
		return i, true
	}
	mend := "write " + quoteOr(words)
	if best, found := nearest(n.text, words); found {
		mend = fmt.Sprintf("did you mean %q?", best)
	}
	c.add(n, key, fmt.Sprintf("%q is not known here", n.text), mend)
	return 0, false
}

func quoteOr(words []string) string {
	quoted := make([]string, len(words))
	for i, w := range words {
		quoted[i] = strconv.Quote(w)
	}
	if len(quoted) == 1 {
		return quoted[0]
	}
	return strings.Join(quoted[:len(quoted)-1], ", ") + " or " + quoted[len(quoted)-1]
}

// whole returns a whole number between two bounds.
func (s section) whole(name string, standard, least, most int64) (int64, bool) {
	n, given, ok := s.get(name, wholeKind, pointKind)
	if !given || !ok {
		return standard, ok
	}
	v, err := strconv.ParseInt(n.text, 0, 64)
	if n.kind == pointKind || err != nil || v < least || v > most {
		s.fault(name, n.text+" is not a whole number from "+grouped(least)+" to "+grouped(most), "")
		return standard, false
	}
	return v, true
}

// number returns a number as an exact fraction; given is false, and the value
// nil, where the key is absent or its value is not even a number.
func (s section) number(name string) (v *big.Rat, given, ok bool) {
	n, given, ok := s.get(name, wholeKind, pointKind)
	if !given || !ok {
		return nil, given, ok
	}
	v, ok = s.numberOf(n, s.key(name))
	return v, true, ok
}

// numberOf reads a number from one value.
func (c *collector) numberOf(n *node, key string) (v *big.Rat, ok bool) {
	if n.kind != wholeKind && n.kind != pointKind {
		c.wrongKind(n, key, wholeKind)
		return nil, false
	}
	text := strings.ReplaceAll(n.text, "_", "")
	f, err := strconv.ParseFloat(text, 64)
	switch {
	case n.kind == wholeKind:
		v, ok = new(big.Rat).SetString(text)
	case err != nil || math.IsInf(f, 0) || math.IsNaN(f):
		ok = false
	case f == 0:
		v = new(big.Rat)
	default:
		v, ok = new(big.Rat).SetString(text)
	}
	if !ok {
		c.add(n, key, n.text+" is not a number that can be held", "")
		return nil, false
	}
	return v, true
}

// numbers returns a list of at most n numbers, each greater than 0 and not
// less than least nor more than greatest.
func (s section) numbers(name string, n int, least, greatest float64) (all []float64, ok bool) {
	items, given := s.list(name, n)
	ok = len(items) > 0
	if !given {
		s.fault(name, "is missing", "write a list of numbers, e.g. [0.8, 1, 1.2]")
	}
	for i, item := range items {
		v, sound := s.numberOf(item, s.item(name, i))
		if !sound {
			ok = false
			continue
		}
		f, _ := v.Float64()
		if f < least || f > greatest {
			s.add(item, s.item(name, i), fmt.Sprintf("%s is not between %s and %s", item.text, number(least), number(greatest)), "")
			ok = false
		}
		all = append(all, f)
	}
	return all, ok
}

// decimal returns an exact decimal number, which may stand between quotation
// marks.
func (s section) decimal(name string) (v Decimal, given, ok bool) {
	n, given, ok := s.get(name, wholeKind, pointKind, textKind)
	if !given || !ok {
		return Decimal{}, given, ok
	}
	v, err := ParseDecimal(strings.ReplaceAll(n.text, "_", ""))
	if err != nil {
		s.fault(name, n.text+" is "+err.Error(), "")
		return Decimal{}, true, false
	}
	return v, true, true
}

// duration returns an elapsed time between two bounds.
func (s section) duration(name string, standard, least, most time.Duration) (time.Duration, bool) {
	n, given, ok := s.get(name, textKind)
	if !given || !ok {
		return standard, ok
	}
	d, ok := s.durationOf(n, s.key(name), least, most)
	if !ok {
		return standard, false
	}
	return d, true
}

// durationOf reads an elapsed time between two bounds from one value.
func (c *collector) durationOf(n *node, key string, least, most time.Duration) (time.Duration, bool) {
	if n.kind != textKind {
		c.wrongKind(n, key, textKind)
		return 0, false
	}
	d, err := ParseDuration(n.text)
	switch {
	case err != nil:
		c.add(n, key, fmt.Sprintf("%q is no elapsed time", n.text), durationMend(err))
		return 0, false
	case d < least || d > most:
		c.add(n, key, fmt.Sprintf("%q is not between %s and %s", n.text, FormatDuration(least), FormatDuration(most)), "")
		return 0, false
	}
	return d, true
}

func durationMend(err error) string {
	if errors.Is(err, ErrSpanSyntax) {
		return `write a whole number and s, m, h, d (24 hours) or w (7 days), e.g. "36h"`
	}
	return err.Error()
}

// size returns a number of bytes between two bounds.
func (s section) size(name string, standard, least, most int64) (int64, bool) {
	n, given, ok := s.get(name, textKind)
	if !given || !ok {
		return standard, ok
	}
	v, err := ParseSize(n.text)
	switch {
	case err != nil:
		s.fault(name, fmt.Sprintf("%q is %s", n.text, err), "")
		return standard, false
	case v < least || v > most:
		s.fault(name, fmt.Sprintf("%q is not between %s and %s", n.text, FormatSize(least), FormatSize(most)), "")
		return standard, false
	}
	return v, true
}

// list returns the items of a list of at most n, none of it if it is faulty.
func (s section) list(name string, most int) (items []*node, given bool) {
	n, given, ok := s.get(name, listKind)
	if !given || !ok {
		return nil, given
	}
	switch {
	case len(n.items) == 0:
		s.fault(name, "is an empty list", "")
	case len(n.items) > most:
		s.fault(name, fmt.Sprintf("has %s items, at most %s are allowed", grouped(int64(len(n.items))), grouped(int64(most))), "")
		return nil, true
	}
	return n.items, true
}

// item is the key of one item of a list, counted from 1.
func (s section) item(name string, i int) string {
	return fmt.Sprintf("%s[%d]", s.key(name), i+1)
}

// grouped writes a whole number with commas between groups of three digits.
func grouped(n int64) string {
	if n < 0 {
		return "-" + grouped(-n)
	}
	digits := strconv.FormatInt(n, 10)
	for i := len(digits) - 3; i > 0; i -= 3 {
		digits = digits[:i] + "," + digits[i:]
	}
	return digits
}
