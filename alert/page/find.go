package page

import (
	"cmp"
	"slices"
	"sort"
	"strings"
)

// query is what is asked of the list of series.
type query struct {
	under string   // the leading name parts, without a slash at the end
	words []string // in lower case; all must occur in the name
	first int      // how many are passed over
	most  int      // how many are returned
}

// find returns the rows asked for, the strongest evidence first, and how many
// there are in all. What it does beside one pass over the index is bounded by
// most.
func (g *glances) find(q query) (rows []*row, total int) {
	lo, hi := g.span(q.under)
	for _, i := range g.order {
		if int(i) < lo || int(i) >= hi {
			continue
		}
		r := &g.rows[i]
		if !r.has(q.words) {
			continue
		}
		if total >= q.first && len(rows) < q.most {
			rows = append(rows, r)
		}
		total++
	}
	return rows, total
}

func (r *row) has(words []string) bool {
	for _, w := range words {
		if !strings.Contains(r.folded, w) {
			return false
		}
	}
	return true
}

// span is the run of rows under leading name parts.
func (g *glances) span(under string) (lo, hi int) {
	if under == "" {
		return 0, len(g.rows)
	}
	after := func(text string) int {
		return sort.Search(len(g.rows), func(i int) bool { return g.rows[i].name >= text })
	}
	return after(under + "/"), after(under + "0") // the byte after a slash
}

// group is all series that share their leading name parts.
type group struct {
	Under   string // the parts
	Part    string // the last of them
	Series  int
	Signals int
	Made    bool    // some look was made
	Log10P  float64 // the strongest evidence among them
}

// split rolls the series under leading name parts up by the next part, the
// strongest evidence first. Series without a further part are left out.
func (g *glances) split(under string) []group {
	if known, ok := g.groups.Load(under); ok {
		if groups, ok := known.([]group); ok {
			return groups
		}
	}
	lo, hi := g.span(under)
	cut := len(under)
	if cut > 0 {
		cut++
	}
	var groups []group
	for i := lo; i < hi; i++ {
		r := &g.rows[i]
		part, _, deeper := strings.Cut(r.name[cut:], "/")
		if !deeper {
			continue
		}
		if n := len(groups); n == 0 || groups[n-1].Part != part {
			groups = append(groups, group{Under: r.name[:cut+len(part)], Part: part})
		}
		last := &groups[len(groups)-1]
		last.Series++
		last.Made = last.Made || r.made
		last.Log10P = min(last.Log10P, r.log10p)
		if r.signals {
			last.Signals++
		}
	}
	slices.SortStableFunc(groups, func(a, b group) int {
		return cmp.Or(cmp.Compare(b.Signals, a.Signals), cmp.Compare(a.Log10P, b.Log10P))
	})
	g.groups.Store(under, groups)
	return groups
}
