package page

import (
	"context"
	"errors"
	"net/http"
	"net/url"
	"slices"
	"strings"
	"sync"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

// actForm is one act as the screen of an alert offers it.
type actForm struct {
	Kind  string
	Title string
	Hint  string
	// NeedsWhy says that a reason must be given, Marks that a mark is chosen,
	// Shelf how long it is shelved.
	NeedsWhy, Marks, Shelf bool
}

// shelfTimes are how long an alert may be shelved from here.
var shelfTimes = []shelfTime{
	{"8h", "8 hours", 8 * time.Hour},
	{"1d", "1 day", 24 * time.Hour},
	{"3d", "3 days", 3 * 24 * time.Hour},
	{"7d", "7 days", 7 * 24 * time.Hour},
	{"28d", "28 days", 28 * 24 * time.Hour},
}

type shelfTime struct {
	Name, Text string
	long       time.Duration
}

// actsOn are the acts that the condition of an alert allows.
func actsOn(r *life.Record) []actForm {
	var all []actForm
	offer := func(step life.StepKind, kind monitor.ActKind, f actForm) {
		if r.Allows(step) && (step != life.StepAcknowledged || !r.Acknowledged()) {
			f.Kind = kind.String()
			all = append(all, f)
		}
	}
	signals := r.Condition != life.Returned
	hint := "Says that you have seen it and look after it. It goes on being watched."
	if !signals {
		hint = "Says that you have seen it. It has returned, so it will be closed."
	}
	offer(life.StepAcknowledged, monitor.Acknowledge, actForm{Title: "Acknowledge", Hint: hint})
	offer(life.StepUnshelved, monitor.Unshelve, actForm{Title: "Take off the shelf", Hint: "It calls again if it still signals."})
	offer(life.StepNote, monitor.Note, actForm{Title: "Note", Hint: "Kept with the alert for good.", NeedsWhy: true})
	offer(life.StepMarked, monitor.Mark, actForm{Title: "Mark", Hint: "Says what it turned out to be. It can be changed and taken back.", NeedsWhy: true, Marks: true})
	offer(life.StepShelved, monitor.Shelve, actForm{Title: "Shelve", Hint: "Keeps it quiet for a while. It goes on being watched, and calls again if it still signals then.", NeedsWhy: true, Shelf: true})
	hint = "Ends it by hand."
	if signals {
		hint = "Ends it by hand while it signals. None opens in this direction before it was quiet again."
	}
	offer(life.StepClosed, monitor.Close, actForm{Title: "Close", Hint: hint, NeedsWhy: true})
	return all
}

// act takes an act and shows the alert again.
func (p *Page) act(w http.ResponseWriter, r *http.Request) {
	id := r.PathValue("id")
	who := p.o.Who(r.Context())
	again := func(status int, wrong string, given url.Values) {
		p.answer(w, r, func(r *http.Request) (*screen, error) {
			s, err := p.alertScreen(r, id, wrong, given)
			if err == nil {
				s.status = status
			}
			return s, err
		})
	}
	if !who.MayAct {
		again(http.StatusForbidden, "You may look, but not act.", nil)
		return
	}
	r.Body = http.MaxBytesReader(w, r.Body, 64<<10)
	if err := r.ParseForm(); err != nil {
		again(http.StatusBadRequest, "What was sent can't be read.", nil)
		return
	}
	act, wrong := actOf(r.PostForm, id, who)
	if wrong != "" {
		again(http.StatusUnprocessableEntity, wrong, r.PostForm)
		return
	}
	once := r.PostForm.Get("once")
	if !p.sent.first(once) { // sent twice, as by a second click
		http.Redirect(w, r, "/alerts/"+url.PathEscape(id)+"#history", http.StatusSeeOther)
		return
	}
	err := p.shelfUntil(r.Context(), act, r.PostForm.Get("for"))
	if err == nil {
		err = p.o.Act(r.Context(), act)
	}
	var refused *RefusedError
	switch {
	case errors.As(err, &refused):
		p.sent.forget(once)
		again(http.StatusConflict, refused.Why, r.PostForm)
		return
	case err != nil:
		p.o.Failed(err)
		again(http.StatusInternalServerError, "It could not be taken; look at the history before you try again.", r.PostForm)
		return
	}
	p.forget()
	if who.Name == "" {
		http.SetCookie(w, &http.Cookie{
			Name: nameCookie, Value: url.QueryEscape(act.By), Path: "/alerts", MaxAge: 180 * 24 * 3600,
			HttpOnly: true, SameSite: http.SameSiteStrictMode, Secure: r.TLS != nil,
		})
	}
	http.Redirect(w, r, "/alerts/"+url.PathEscape(id)+"#history", http.StatusSeeOther)
}

// sent knows the forms that were sent of late, so that none is taken twice. The
// zero value knows none.
type sent struct {
	mu    sync.Mutex
	forms []string
}

// maxSent is how many forms are known.
const maxSent = 1000

// first notes a form and reports whether it is sent for the first time.
func (s *sent) first(form string) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	if form == "" {
		return true
	}
	if slices.Contains(s.forms, form) {
		return false
	}
	if len(s.forms) == maxSent {
		s.forms = slices.Delete(s.forms, 0, maxSent/2)
	}
	s.forms = append(s.forms, form)
	return true
}

// forget lets a form be sent again, as it was not taken.
func (s *sent) forget(form string) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.forms = slices.DeleteFunc(s.forms, func(old string) bool { return old == form })
}

// shelfUntil completes an act that shelves: by the clock of the alert's
// partition, which in history time is not ours.
func (p *Page) shelfUntil(ctx context.Context, act *monitor.Act, long string) error {
	if act.Kind != monitor.Shelve {
		return nil
	}
	i := slices.IndexFunc(shelfTimes, func(t shelfTime) bool { return t.Name == long })
	if i < 0 {
		return &RefusedError{"Choose for how long."}
	}
	record, err := p.find(ctx, act.Alert)
	if err != nil {
		return err
	}
	from := monitor.InstantOf(p.o.Now())
	s, err := p.o.Parts[p.o.PartOf(record.Series)].See(ctx, &Sight{Series: record.Series})
	if err != nil {
		return err
	}
	if s.History {
		from = s.Clock
	}
	act.Until = from.Add(shelfTimes[i].long)
	return nil
}

// Bounds of what is filled in, in characters, as those of an act.
const (
	maxBy  = 200
	maxWhy = 2000
)

// actOf reads an act, or says what is wrong with it.
func actOf(form url.Values, id string, who Person) (act *monitor.Act, wrong string) {
	act = &monitor.Act{Alert: id, By: who.Name, Why: strings.TrimSpace(strings.ReplaceAll(form.Get("why"), "\r\n", "\n"))}
	if act.By == "" {
		act.By = strings.TrimSpace(form.Get("by"))
	}
	found := false
	for _, kind := range monitor.ActKinds {
		if form.Get("act") == kind.String() {
			act.Kind, found = kind, true
		}
	}
	switch {
	case !found:
		return nil, "Which act is meant?"
	case act.By == "":
		return nil, "Your name is missing: it is kept with the act."
	case act.Why == "" && act.Kind != monitor.Acknowledge && act.Kind != monitor.Unshelve:
		return nil, "The reason is missing: a " + act.Kind.String() + " needs it."
	case len([]rune(act.By)) > maxBy:
		return nil, "The name is too long."
	case len([]rune(act.Why)) > maxWhy:
		return nil, "The text is too long: 2,000 characters are kept."
	}
	if act.Kind == monitor.Mark {
		mark, known := markOf(form.Get("mark"))
		if !known {
			return nil, "Choose what it turned out to be."
		}
		act.Mark = mark
	}
	return act, ""
}

// takeBack is how the form names a mark taken back.
const takeBack = "none"

func markOf(text string) (life.Mark, bool) {
	if text == takeBack {
		return life.NotMarked, true
	}
	for _, m := range life.Marks {
		if text == string(m) {
			return m, true
		}
	}
	return life.NotMarked, false
}
