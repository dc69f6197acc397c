package page

import (
	"bytes"
	"context"
	"crypto/sha256"
	"embed"
	"encoding/hex"
	"errors"
	"fmt"
	"html/template"
	"io/fs"
	"math"
	"net/http"
	"path"
	"strings"
	"sync"
	"time"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

//go:embed text/*.html
var texts embed.FS

//go:embed own/*
var ownFiles embed.FS

// screen is one answer: a template with what it shows.
type screen struct {
	name   string // of the template
	Title  string
	Here   string // the link of the menu that it stands under
	Data   any
	status int
}

// frame is what stands around every screen.
type frame struct {
	*screen
	Name      string
	Person    Person
	Own       string // the folder of our own files
	Waiting   int    // alerts that nobody has acknowledged
	Brief     string
	Now       time.Time
	Caution   string
	NoScreens bool
}

// problem is an error that a person is told.
type problem struct {
	status int
	what   string
	mend   string
}

func (e *problem) Error() string { return e.what }

func isNotFound(err error) bool { return errors.Is(err, store.ErrNotFound) }

// templates are parsed once; a fault in them is a fault of the program.
var templates = sync.OnceValue(func() map[string]*template.Template {
	all := map[string]*template.Template{}
	base := template.Must(template.New("base.html").Funcs(functions).ParseFS(texts, "text/base.html", "text/parts.html"))
	names, err := fs.Glob(texts, "text/*.html")
	if err != nil {
		panic(err)
	}
	for _, name := range names {
		short := strings.TrimSuffix(path.Base(name), ".html")
		all[short] = template.Must(template.Must(base.Clone()).ParseFS(texts, name))
	}
	return all
})

var functions = template.FuncMap{
	"whole":     func(n any) string { return words.Whole(toInt(n)) },
	"amount":    func(n any, nouns string) string { return amount(toInt(n), nouns) },
	"number":    number,
	"odds":      words.Odds,
	"pvalue":    words.PValue,
	"length":    words.Length,
	"day":       words.Day,
	"moment":    words.Moment,
	"last":      words.Last,
	"clock":     func(t time.Time) string { return t.Format("2 Jan 2006 15:04:05 MST") },
	"stamp":     func(t time.Time) string { return t.Format("2006-01-02T15:04:05Z07:00") },
	"mark":      mark,
	"condition": func(c life.Condition) string { return string(c) },
	"title":     title,
	"link":      seriesLink,
	"opened":    func(r *life.Record) time.Time { return r.OpenedAt().In(words.Zone(r)) },
	"dict":      dict,
}

// amount writes a number of things; one series is a series.
func amount(n int64, nouns string) string {
	if nouns == "series" {
		return words.Whole(n) + " series"
	}
	return words.Amount(n, nouns)
}

func toInt(n any) int64 {
	switch n := n.(type) {
	case int:
		return int64(n)
	case int64:
		return n
	case uint64:
		return int64(min(n, math.MaxInt64)) //nolint:gosec // bounded
	}
	return 0
}

func number(x float64) string {
	if math.IsNaN(x) {
		return "none"
	}
	return words.Number(x)
}

// dict makes the argument of a part that takes several.
func dict(pairs ...any) map[string]any {
	m := map[string]any{}
	for i := 0; i+1 < len(pairs); i += 2 {
		m[fmt.Sprint(pairs[i])] = pairs[i+1]
	}
	return m
}

// mark is the shape of an alert: its direction, filled while nobody has
// acknowledged that it signals. The word always stands beside it.
func mark(r *life.Record) string {
	switch r.Condition {
	case life.Unacknowledged:
		return map[life.Direction]string{life.Upper: "\u25b2", life.Lower: "\u25bc", life.Silence: "\u25c6"}[r.Direction]
	case life.Acknowledged:
		return map[life.Direction]string{life.Upper: "\u25b3", life.Lower: "\u25bd", life.Silence: "\u25c7"}[r.Direction]
	case life.Returned:
		return "\u25cb"
	case life.Closed:
		return "\u25cf"
	case life.Withdrawn:
		return "\u00d7"
	case life.Shelved:
		return "\u25a1"
	}
	return "?"
}

// title is an alert in a few words.
func title(r *life.Record) string {
	if r.Silence != nil {
		return words.Place(r) + ": nothing heard"
	}
	how := "more "
	if r.Direction == life.Lower {
		how = "fewer "
	}
	return words.Place(r) + ": " + how + words.Noun(&r.Opening) + " than usual"
}

// answer renders a screen, or what went wrong.
func (p *Page) answer(w http.ResponseWriter, r *http.Request, make func(*http.Request) (*screen, error)) {
	s, err := make(r)
	if err != nil {
		s = p.trouble(r, err)
	}
	p.show(w, r, s)
}

func (p *Page) trouble(r *http.Request, err error) *screen {
	var told *problem
	if errors.Is(err, context.DeadlineExceeded) {
		told = &problem{http.StatusServiceUnavailable, "The engine does not answer in time.", "It may be held up: the screen Now says what hinders it. Try again in a moment."}
	}
	if told == nil && !errors.As(err, &told) {
		if r.Context().Err() == nil {
			p.o.Failed(fmt.Errorf("page: %s: %w", r.URL.Path, err))
		}
		told = &problem{http.StatusInternalServerError, "This could not be read.", "Try again; if it stays so, the log of the daemon says why."}
	}
	return &screen{name: "problem", Title: told.what, Data: told.mend, status: told.status}
}

func (p *Page) show(w http.ResponseWriter, r *http.Request, s *screen) {
	f := frame{screen: s, Name: p.o.Name, Person: p.o.Who(r.Context()), Own: "/own/" + ownVersion(), Now: p.o.Now(), Caution: caution}
	records, _, err := p.standing(r.Context())
	if err != nil {
		p.o.Failed(err)
	}
	for i := range records {
		if waits(&records[i]) {
			f.Waiting++
		}
	}
	f.Brief = brief(records)
	var b bytes.Buffer
	if err := templates()[s.name].ExecuteTemplate(&b, "base.html", &f); err != nil {
		p.o.Failed(fmt.Errorf("page: %s: %w", s.name, err))
		http.Error(w, "This could not be shown; the log of the daemon says why.", http.StatusInternalServerError)
		return
	}
	w.Header().Set("Content-Type", "text/html; charset=utf-8")
	if s.status != 0 {
		w.WriteHeader(s.status)
	}
	if _, err := w.Write(b.Bytes()); err != nil {
		return // nobody waits for it any more
	}
}

const caution = words.Caution + " Local codes and licensed practice stand above what is written here."

// waits reports whether somebody has yet to acknowledge the alert.
func waits(r *life.Record) bool {
	return r.Condition == life.Unacknowledged || r.Condition == life.Returned
}

// inBrief says what stands in a few words, for those who can't see it.
func (p *Page) inBrief(ctx context.Context) (string, error) {
	records, _, err := p.standing(ctx)
	return brief(records), err
}

func brief(records []life.Record) string {
	n := 0
	for i := range records {
		if waits(&records[i]) {
			n++
		}
	}
	switch n {
	case 0:
		return "No alert waits to be acknowledged."
	case 1:
		return "1 alert waits to be acknowledged."
	}
	return words.Whole(int64(n)) + " alerts wait to be acknowledged."
}

// own are our own files as they are served.
var own = sync.OnceValue(func() map[string][]byte {
	files := map[string][]byte{}
	entries, err := ownFiles.ReadDir("own")
	if err != nil {
		panic(err)
	}
	for _, e := range entries {
		data, err := ownFiles.ReadFile("own/" + e.Name())
		if err != nil {
			panic(err)
		}
		files[e.Name()] = data
	}
	files["page.css"] = append(append([]byte{}, figure.Style...), files["page.css"]...)
	return files
})

// ownVersion changes when one of our own files does.
var ownVersion = sync.OnceValue(func() string {
	h := sha256.New()
	for _, name := range []string{"page.css", "page.js", "mark.svg"} {
		h.Write(own()[name])
	}
	return hex.EncodeToString(h.Sum(nil))[:12]
})

// serveOwn serves a style sheet, a script or the mark: under the version of
// today for good, else not at all.
func serveOwn(w http.ResponseWriter, r *http.Request) {
	name := r.PathValue("file")
	data, known := own()[name]
	if !known || r.PathValue("version") != ownVersion() {
		http.NotFound(w, r)
		return
	}
	w.Header().Set("Cache-Control", "private, max-age=31536000, immutable")
	http.ServeContent(w, r, name, time.Time{}, bytes.NewReader(data))
}
