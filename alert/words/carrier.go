package words

import (
	"strings"

	"tailbell/monitor/life"
)

// mostNamed is how many members of a sum a sentence names.
const mostNamed = 5

// together is said of a sum where a series would name its place.
const together = "all together"

func isSum(series string) bool { return strings.Contains(series, "*") }

// carriers says which members of a sum had the events, those with the most
// first; "" for a series that is no sum.
func carriers(r *life.Record, e *life.Evidence) string {
	if len(e.Carriers) == 0 {
		return ""
	}
	if c := &e.Carriers[0]; len(e.Carriers) == 1 && e.MoreCarriers == 0 && c.Events == e.Events && c.Exposure == e.Exposure {
		return " All that was counted is " + member(r, c.Series) + "'s: it is the same finding as in that series itself."
	}
	var names []string
	for _, c := range e.Carriers[:min(mostNamed, len(e.Carriers))] {
		names = append(names, member(r, c.Series)+" ("+whole(c.Events)+")")
	}
	if more := int64(len(e.Carriers)-len(names)) + int64(e.MoreCarriers); more == 1 {
		names = append(names, "1 other")
	} else if more > 1 {
		names = append(names, whole(more)+" others")
	}
	return " Carried by " + listed(names) + "."
}

func listed(names []string) string {
	if n := len(names); n > 1 {
		return strings.Join(names[:n-1], ", ") + " and " + names[n-1]
	}
	return names[0]
}

// member names a member of a sum by what tells it from the others: the parts
// over which was summed.
func member(r *life.Record, series string) string {
	of, parts := strings.Split(r.Series, "/"), strings.Split(series, "/")
	var words []string
	for i := len(parts) - 1; i >= 0; i-- {
		same := i < len(of) && of[i] == parts[i]
		fromEnd := len(of) - len(parts) + i
		if strings.Contains(r.Series, "**") {
			same = fromEnd >= 0 && fromEnd < len(of) && of[fromEnd] == parts[i]
		}
		if !same {
			words = append(words, titled(clean(parts[i])))
		}
	}
	if len(words) == 0 {
		return clean(series)
	}
	return strings.Join(words, ", ")
}
