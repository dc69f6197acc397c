package words

import (
	"fmt"
	"time"

	"tailbell/monitor/life"
)

// shelf tells of an alert that was put aside, or is back.
func shelf(n *life.Notice, zone *time.Location) []string {
	r, s := &n.Record, &n.Step
	if s.Kind == life.StepShelved {
		text := subject(r) + ": shelved" + byWhom(s)
		if s.Until != nil {
			text += " until " + moment(s.Until.In(zone))
		}
		return nonEmpty(stop(text+reason(s)) + " (" + capital(story(r, zone)) + ".) It goes on being watched; " +
			"nobody is told of it until it comes off the shelf.")
	}
	why := "as the time is over"
	if s.By != "" {
		why = "taken off" + byWhom(s) + reason(s)
	}
	text := subject(r) + ": off the shelf, " + stop(why)
	if s.Condition == life.Returned {
		return nonEmpty(text + " No window signals any more (" + story(r, zone) + ")." + afterwards(r, zone) +
			" A return is no proof that the cause is gone.")
	}
	return nonEmpty(text+" It still signals, and waits for somebody to acknowledge it.",
		"At its strongest: "+finding(r, &r.Worst)+afterwards(r, zone), caution(r))
}

// reminder says that nobody has acknowledged an alert, and for how long.
func reminder(n *life.Notice, zone *time.Location) []string {
	r := &n.Record
	text := subject(r) + ": nobody has acknowledged it"
	if since, ok := r.Unheeded(); ok {
		text += " for " + Elapsed(n.Step.At.Sub(since))
	}
	return nonEmpty(text+" ("+story(r, zone)+"). It still signals.",
		"At its strongest: "+finding(r, &r.Worst)+afterwards(r, zone), caution(r))
}

func byWhom(s *life.Step) string {
	if s.By == "" {
		return ""
	}
	return " by " + clean(s.By)
}

func reason(s *life.Step) string {
	if s.Why == "" {
		return ""
	}
	return ": \u201c" + clean(s.Why) + "\u201d"
}

// Elapsed writes an elapsed time in its two largest units: "4 hours", "2 days 6
// hours".
func Elapsed(d time.Duration) string {
	units := []struct {
		name   string
		length time.Duration
	}{{"days", 24 * time.Hour}, {"hours", time.Hour}, {"minutes", time.Minute}, {"seconds", time.Second}}
	for i, u := range units {
		if d < u.length {
			continue
		}
		text := Amount(int64(d/u.length), u.name)
		if i+1 < len(units) && d%u.length >= units[i+1].length {
			text += " " + Amount(int64(d%u.length/units[i+1].length), units[i+1].name)
		}
		return text
	}
	return fmt.Sprint(d)
}
