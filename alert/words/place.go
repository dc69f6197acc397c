package words

import (
	"strings"
	"unicode"

	"tailbell/monitor/life"
)

// place turns a series name into words by its parts, the narrowest first:
// "quillmere-east/ward-3/line-infection" is "Ward 3, Quillmere East". A last
// part that only names the indicator or its events is left out. Of a sum the
// parts over which was summed are left out: "Quillmere East, all together".
func place(r *life.Record) string {
	parts := strings.Split(r.Series, "/")
	if n := len(parts); n > 1 && namesEvents(parts[n-1], r) {
		parts = parts[:n-1]
	}
	words := make([]string, 0, len(parts))
	for i := len(parts) - 1; i >= 0; i-- {
		if isSum(parts[i]) && strings.Trim(parts[i], "*") == "" {
			continue
		}
		words = append(words, titled(clean(parts[i])))
	}
	if isSum(r.Series) {
		words = append(words, together)
	}
	if len(words) == 1 && words[0] == together {
		return "All together" // it begins a sentence
	}
	return strings.Join(words, ", ")
}

func namesEvents(part string, r *life.Record) bool {
	key := plain(part)
	for _, name := range []string{r.Indicator, r.Title, r.Opening.EventNoun} {
		if key == plain(name) {
			return true
		}
	}
	return false
}

// plain is a name without case, punctuation and plural.
func plain(name string) string {
	spaced := strings.Join(strings.FieldsFunc(strings.ToLower(name), separates), " ")
	return singular(spaced)
}

func separates(c rune) bool { return c == '-' || c == '_' || unicode.IsSpace(c) }

// titled capitalises each word of a name part that has no capitals yet.
func titled(part string) string {
	words := strings.FieldsFunc(part, separates)
	for i, w := range words {
		if w == strings.ToLower(w) {
			words[i] = capital(w)
		}
	}
	return strings.Join(words, " ")
}

func capital(s string) string {
	for i, c := range s {
		return string(unicode.ToUpper(c)) + s[i+len(string(c)):]
	}
	return s
}

// singular turns an English plural into its singular: of the word before
// "of" or "per", else of the last word, else of the first ("hours worked").
func singular(noun string) string {
	for _, joint := range []string{" of ", " per "} {
		if head, tail, ok := strings.Cut(noun, joint); ok {
			return singular(head) + joint + tail
		}
	}
	head, last := "", noun
	if i := strings.LastIndexByte(noun, ' '); i >= 0 {
		head, last = noun[:i+1], noun[i+1:]
	}
	if one := singularWord(last); one != last {
		return head + one
	}
	if first, rest, ok := strings.Cut(noun, " "); ok {
		return singularWord(first) + " " + rest
	}
	return noun
}

func singularWord(w string) string {
	switch {
	case w == "series":
		return w
	case len(w) > 4 && strings.HasSuffix(w, "ies"):
		return w[:len(w)-3] + "y"
	case hasAnySuffix(w, "sses", "shes", "ches", "xes"):
		return w[:len(w)-2]
	case len(w) > 2 && strings.HasSuffix(w, "s") && !hasAnySuffix(w, "ss", "us", "is"):
		return w[:len(w)-1]
	}
	return w
}

func hasAnySuffix(w string, suffixes ...string) bool {
	for _, s := range suffixes {
		if strings.HasSuffix(w, s) {
			return true
		}
	}
	return false
}
