package main

import (
	"time"

	"tailbell/alert/words"
	"tailbell/monitor/store"
)

// archiveRow says what is kept of the slots that no look needs any more: all but
// those that began before From, of which LetGo were let go, from First on.
type archiveRow struct {
	Slots uint64     `json:"slots"`
	From  *time.Time `json:"from,omitempty"`
	LetGo uint64     `json:"let_go"`
	First *time.Time `json:"first_let_go,omitempty"`
}

func archiveRowOf(a *store.Archive) archiveRow {
	row := archiveRow{Slots: a.Slots, LetGo: a.LetGo}
	if a.From != nil {
		from := a.From.Time()
		row.From = &from
	}
	if a.LetGo > 0 {
		first := a.First.Time()
		row.First = &first
	}
	return row
}

// String says it in words.
func (a *archiveRow) String() string {
	var first, from time.Time
	if a.From != nil {
		from = *a.From
	}
	if a.First != nil {
		first = *a.First
	}
	return words.Archive(a.Slots, a.LetGo, first, from)
}

// archiveBegins says from when on a store has slots, "" where it has all that there
// were.
func archiveBegins(st *store.Store) (string, error) {
	a, err := st.Archive()
	if err != nil || a.LetGo == 0 {
		return "", err
	}
	row := archiveRowOf(&a)
	return "The store's archive has " + row.String() + " (limits.archive).", nil
}
