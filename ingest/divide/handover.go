package divide

import (
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// Handover says what the outlets of new stores need no more.
type Handover struct {
	// pending are the keys of the steps that wait in the old stores, by outlet.
	pending map[string]map[string]bool
}

// most is how many rows are read at once.
const most = 256

// HandoverOf reads which steps wait for which outlet in the old stores.
func HandoverOf(old []*store.Store) (*Handover, error) {
	h := &Handover{pending: map[string]map[string]bool{}}
	for _, st := range old {
		outlets, err := st.OutletState()
		if err != nil {
			return nil, err
		}
		for _, o := range outlets {
			if h.pending[o.Name] == nil {
				h.pending[o.Name] = map[string]bool{}
			}
			err := eachPending(st, o.Name, func(row *store.Row) bool {
				h.pending[o.Name][row.Notice.Key] = true
				return true
			})
			if err != nil {
				return nil, err
			}
		}
	}
	return h, nil
}

// eachPending shows the steps that wait for an outlet, until show returns false.
func eachPending(st *store.Store, outlet string, show func(*store.Row) bool) error {
	for after := uint64(0); ; {
		rows, err := st.PendingAfter(outlet, after, most)
		if err != nil || len(rows) == 0 {
			return err
		}
		for i := range rows {
			if !show(&rows[i]) {
				return nil
			}
			after = rows[i].Number
		}
	}
}

// Register enters the outlets into a new store, before it is filled.
func (h *Handover) Register(st *store.Store) error {
	for name := range h.pending {
		if err := st.Outlets(store.FromOldest, name); err != nil {
			return err
		}
	}
	return nil
}

// Settle lets a new store's outlets begin with the first step that the old ones
// have yet to deliver. Wants says which steps an outlet is told; the others
// count as passed over.
func (h *Handover) Settle(st *store.Store, wants func(outlet string, n *life.Notice) bool) error {
	for name, pending := range h.pending {
		through, passed := uint64(0), uint64(0)
		err := eachPending(st, name, func(row *store.Row) bool {
			if pending[row.Notice.Key] {
				return false
			}
			through = row.Number
			if !wants(name, &row.Notice) {
				passed++
			}
			return true
		})
		if err != nil {
			return err
		}
		if through == 0 {
			continue
		}
		if err := st.Delivered(name, through, passed); err != nil {
			return err
		}
	}
	return nil
}
