package wire

import (
	"slices"
	"strings"

	"tailbell/monitor"
)

var allKinds = slices.Concat(monitor.ActKinds, monitor.SeriesActKinds)

// kindWords lists the kinds of act as a message may name them.
func kindWords() string {
	words := make([]string, len(allKinds))
	for i, k := range allKinds {
		words[i] = k.String()
	}
	return alternatives(words)
}

func alternatives(words []string) string {
	n := len(words)
	return strings.Join(words[:n-1], ", ") + " or " + words[n-1]
}

// readSeriesField reads a field that only acts on series have.
func readSeriesField(field field, act *monitor.Act) *fault {
	if field.name == "straddle" {
		switch string(field.value) {
		case "true", "false":
			act.Straddle = field.value[0] == 't'
			return nil
		}
		return refuse(monitor.BadAct, "straddle is %s; it must be true or false", nameOf(field.value))
	}
	if field.name == "into" {
		var w draft
		f := w.readSeries(field)
		act.Into = string(w.series)
		return f
	}
	var text string
	if f := readActText(field, MaxIDLength, &text); f != nil {
		return f
	}
	if field.name == "what" {
		act.What = monitor.ChangeKind(text)
		return oneOf(field.name, act.What, monitor.ChangeKinds)
	}
	act.Side = monitor.Side(text)
	return oneOf(field.name, act.Side, monitor.Sides)
}

func oneOf[T ~string](name string, value T, known []T) *fault {
	if slices.Contains(known, value) {
		return nil
	}
	words := make([]string, len(known))
	for i, k := range known {
		words[i] = string(k)
	}
	return refuse(monitor.BadAct, "the field %s is %q; it must be %s", name, clip(string(value)), alternatives(words))
}

// spanned are the acts on series that have an end.
func spanned(k monitor.ActKind) bool { return k == monitor.OutOfService || k == monitor.SignOff }

func checkSeriesAct(act *monitor.Act, seen map[string]bool) *fault {
	if act.Kind == monitor.SignOff && !seen["side"] {
		act.Side = monitor.BothSides
	}
	switch {
	case seen["alert"] || seen["direction"] || seen["mark"]:
		return refuse(monitor.BadAct, "alert, direction and mark belong to acts on an alert; a %s is on series", act.Kind)
	case !seen["series"]:
		return refuse(monitor.BadAct, "the field series is missing; it names a series, or is a pattern such as site/*/falls")
	case !seen["from"]:
		return refuse(monitor.BadAct, "the field from is missing; it says from when the %s holds", act.Kind)
	case seen["until"] != spanned(act.Kind):
		return refuse(monitor.BadAct, "the field until belongs to an act out of service or sign off, and to those alone")
	case spanned(act.Kind) && act.Until <= act.From:
		return refuse(monitor.BadAct, "until is not after from; exchange them?")
	case seen["what"] != (act.Kind == monitor.Change):
		return refuse(monitor.BadAct, "the field what belongs to an act change, and to it alone")
	case seen["into"] != (act.What == monitor.Renamed || act.What == monitor.Merged):
		return refuse(monitor.BadAct, "the field into belongs to what is renamed or merged, and to that alone: it names what they become")
	case seen["side"] && act.Kind != monitor.SignOff:
		return refuse(monitor.BadAct, "the field side belongs to an act sign off, and to it alone")
	case seen["straddle"] && act.What != monitor.CaseDefinition && act.What != monitor.Method:
		return refuse(monitor.BadAct, "the field straddle belongs to a change of case definition or method")
	case !seen["why"] && act.Kind != monitor.SignOff && act.Kind != monitor.BackInService:
		return refuse(monitor.BadAct, "the field why is missing; the act %s needs it", act.Kind)
	}
	return nil
}

func appendSeriesAct(dst []byte, a *monitor.Act) []byte {
	if a.Kind == monitor.Change {
		dst = AppendText(append(dst, `,"what":`...), string(a.What))
	}
	if a.Into != "" {
		dst = AppendText(append(dst, `,"into":`...), a.Into)
	}
	dst = appendTimeField(dst, `,"from":"`, a.From)
	if spanned(a.Kind) {
		dst = appendTimeField(dst, `,"until":"`, a.Until)
	}
	if a.Kind == monitor.SignOff {
		dst = AppendText(append(dst, `,"side":`...), string(a.Side))
	}
	if a.Straddle {
		dst = append(dst, `,"straddle":true`...)
	}
	return dst
}
