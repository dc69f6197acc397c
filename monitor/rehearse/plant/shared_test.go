package plant

import (
	"strings"
	"testing"

	"tailbell/config"
)

// TestSharedAllowance holds that an allowance over all series is shared with
// the others of an invented history, and that a rehearsal says what one without
// others has. A tenth of the allowance, less the reserve, is 0.18 a year.
func TestSharedAllowance(t *testing.T) {
	s, err := config.Parse([]byte(strings.Replace(stanza, "p_limit = 0.001", `allowance = "2 in 1y"`+"\nallowance_for = \"indicator\"", 1)+byClock+upwards+usual), "test")
	if err != nil {
		t.Fatal(err)
	}
	rung := map[int]int64{}
	for peers, says := range map[int]string{0: "no other series is beside it", 9: "each has 9 other series beside it, which have their shares"} {
		p := plan(s)
		p.Histories, p.Length = 100, 28
		r, err := p.Invent(Invention{Years: 2, Peers: peers})
		out := report(t, r, err)
		f := out.False[0]
		if rung[peers] = f.Alerts; !strings.Contains(out.How, says) {
			t.Errorf("%d others: %q", peers, out.How)
		}
		if share := 2 * 0.9 / float64(peers+1); f.Lower > share {
			t.Errorf("%d others: %d false alerts in %g years, bounds %g to %g, are more than its share, %g", peers, f.Alerts, f.Years, f.Lower, f.Upper, share)
		}
	}
	if rung[0] <= 2*rung[9] {
		t.Errorf("%d false alerts alone, and %d among ten", rung[0], rung[9])
	}
}
