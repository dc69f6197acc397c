package wire

import (
	"bytes"
	"slices"
	"unicode"
	"unicode/utf8"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// Bounds of an act's texts, in characters.
const (
	MaxByLength  = 200
	MaxWhyLength = 2000
)

// Act decodes an act. If it is refused, reason and detail say why. Raw of an
// act that is understood is data itself.
func (d *Decoder) Act(data []byte) (act monitor.Act, reason monitor.Reason, detail string) {
	act, f := d.readAct(data)
	if f != nil {
		return monitor.Act{Raw: bytes.Clone(data)}, f.reason, f.detail
	}
	return act, "", ""
}

// IsAct reports whether data look like an act rather than an observation: a
// JSON object with a field act.
func IsAct(data []byte) bool {
	if !bytes.Contains(data, []byte(`"act"`)) {
		return false
	}
	members, f := envelopeMembers(data)
	if f != nil {
		return false
	}
	for _, m := range members {
		if m.name == "act" {
			return true
		}
	}
	return false
}

func (d *Decoder) readAct(data []byte) (monitor.Act, *fault) {
	if len(data) > d.limits.ElementBytes {
		return monitor.Act{}, refuse(monitor.TooLarge, "the act has %d bytes, the limit is %d", len(data), d.limits.ElementBytes)
	}
	if f := checkSyntax(data, d.limits.Depth); f != nil {
		return monitor.Act{}, f
	}
	if data[skipSpace(data, 0)] != '{' {
		return monitor.Act{}, refuse(monitor.NotObject, "the message is %s; an act is one JSON object", nameOf(data))
	}
	act := monitor.Act{Raw: data[:len(data):len(data)]}
	seen := make(map[string]bool)
	for _, field := range fields(data) {
		if seen[field.name] {
			return monitor.Act{}, refuse(monitor.DuplicateField, "the field %q is given twice; give it once", clip(field.name))
		}
		seen[field.name] = true
		if f := readActField(field, &act); f != nil {
			return monitor.Act{}, f
		}
	}
	return act, checkAct(&act, seen)
}

func readActField(field field, act *monitor.Act) *fault {
	switch field.name {
	case "act":
		return readActKind(field, act)
	case "alert":
		return readActText(field, MaxIDLength, &act.Alert)
	case "series":
		return readActSeries(field, act)
	case "direction":
		var text string
		if f := readActText(field, MaxIDLength, &text); f != nil {
			return f
		}
		act.Direction = life.Direction(text)
		switch act.Direction {
		case life.Upper, life.Lower, life.Silence:
			return nil
		}
		return refuse(monitor.BadAct, "direction is %q; it must be upper, lower or silence", clip(text))
	case "by":
		return readActText(field, MaxByLength, &act.By)
	case "why":
		return readActText(field, MaxWhyLength, &act.Why)
	case "mark":
		return readMark(field, act)
	case "until":
		return readTime(field, &act.Until)
	case "from":
		return readTime(field, &act.From)
	case "what", "into", "side", "straddle":
		return readSeriesField(field, act)
	case "at":
		act.HasAt = true
		return readTime(field, &act.At)
	}
	return refuse(monitor.UnknownField, "an act has no field %q; leave it out", clip(field.name))
}

// readActSeries reads the name of a series or of a sum, or a pattern.
func readActSeries(field field, act *monitor.Act) *fault {
	if f := isText(field, monitor.BadSeries); f != nil {
		return f
	}
	act.Series = string(unquote(field.value))
	if err := config.CheckPattern(act.Series); err != nil {
		return refuse(monitor.BadSeries, "series %q: %v; write it like site/ward-3/falls", clip(act.Series), err)
	}
	return nil
}

func readActKind(field field, act *monitor.Act) *fault {
	var text string
	if f := readActText(field, MaxIDLength, &text); f != nil {
		return f
	}
	for _, kind := range allKinds {
		if text == kind.String() {
			act.Kind = kind
			return nil
		}
	}
	return refuse(monitor.BadAct, "act is %q; it must be %s", clip(text), kindWords())
}

// unmarked takes a mark back.
const unmarked = "none"

func readMark(field field, act *monitor.Act) *fault {
	var text string
	if f := readActText(field, MaxIDLength, &text); f != nil {
		return f
	}
	if act.Mark = life.Mark(text); text == unmarked {
		act.Mark = life.NotMarked
		return nil
	}
	if !slices.Contains(life.Marks, act.Mark) {
		return refuse(monitor.BadAct, "mark is %q; it must be one of %s, or %s", clip(text), life.MarkNames, unmarked)
	}
	return nil
}

// readActText reads a text that says something: of at most so many
// characters, none of them a control character but tab and line feed.
func readActText(field field, most int, text *string) *fault {
	if f := isText(field, monitor.BadAct); f != nil {
		return f
	}
	*text = string(unquote(field.value))
	control := func(c rune) bool { return unicode.IsControl(c) && c != '\n' && c != '\t' }
	switch n := utf8.RuneCountInString(*text); {
	case n == 0:
		return refuse(monitor.BadAct, "%s is empty; fill it in", field.name)
	case n > most:
		return refuse(monitor.BadAct, "%s has %d characters, the limit is %d; shorten it", field.name, n, most)
	case bytes.ContainsFunc([]byte(*text), control):
		return refuse(monitor.BadAct, "%s has a control character; leave it out", field.name)
	}
	return nil
}

func checkAct(act *monitor.Act, seen map[string]bool) *fault {
	switch {
	case !seen["act"]:
		return refuse(monitor.BadAct, "the field act is missing; it must be %s", kindWords())
	case !seen["by"]:
		return refuse(monitor.BadAct, "the field by is missing; it says who acts")
	case act.Kind.OnSeries():
		return checkSeriesAct(act, seen)
	case seen["from"] || seen["what"] || seen["into"] || seen["side"] || seen["straddle"]:
		return refuse(monitor.BadAct, "from, what, into, side and straddle belong to acts on series; a %s is on an alert", act.Kind)
	case seen["alert"] && (seen["series"] || seen["direction"]):
		return refuse(monitor.BadAct, "the alert is named twice; give alert, or series and direction")
	case !seen["alert"] && (!seen["series"] || !seen["direction"]):
		return refuse(monitor.BadAct, "no alert is named; give alert, or series and direction")
	case seen["mark"] != (act.Kind == monitor.Mark):
		return refuse(monitor.BadAct, "the field mark belongs to an act mark, and to it alone")
	case seen["until"] != (act.Kind == monitor.Shelve):
		return refuse(monitor.BadAct, "the field until belongs to an act shelve, and to it alone")
	case !seen["why"] && act.Kind != monitor.Acknowledge && act.Kind != monitor.Unshelve:
		return refuse(monitor.BadAct, "the field why is missing; a %s needs it", act.Kind)
	}
	return nil
}
