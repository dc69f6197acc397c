package monitor

import (
	"math/big"
	"testing"
)

// TestLostTellings loses what partition 1 tells before what comes: nobody may take it
// that it had nothing to count then.
func TestLostTellings(t *testing.T) {
	tell := func(after, through int64, part int, more, begins bool, series int64, pools ...int64) *Summary {
		x := &count{Series: series}
		for _, id := range pools {
			x.Pools = append(x.Pools, poolCount{ID: id, Period: 1, Units: 2, Events: series, Index: new(big.Int)})
		}
		return &Summary{after: after, through: through, part: part, more: more, begins: begins, count: x}
	}
	for name, of1 := range map[string][]*Summary{
		"the first of all":    {tell(10, 11, 0, false, false, 5, 7, 8)},
		"the first part":      {tell(never, 9, 0, false, true, 5), tell(9, 10, 1, false, false, 0, 8), tell(10, 11, 0, false, false, 5, 7, 8)},
		"the first two parts": {tell(never, 10, 2, false, true, 0, 8), tell(10, 11, 0, false, false, 5, 7, 8)},
		"all of that day":     {tell(never, 9, 0, false, true, 5), tell(10, 11, 0, false, false, 5, 7, 8)},
	} {
		k := &counting{lanes: make([]countLane, 3)}
		k.lanes[0].receive(tell(never, 10, 0, false, true, 3, 7, 8))
		k.lanes[0].receive(tell(10, 11, 0, false, false, 3, 7, 8))
		gaps := 0
		for _, s := range of1 {
			if _, gap := k.lanes[1].receive(s); gap {
				gaps++
			}
		}
		if gaps == 0 {
			t.Errorf("%s: no gap was seen", name)
		}
		in := newCounted()
		in.Series = 8
		k.bring(&in, 10)
		if in.Series != 8 || len(in.Pools) > 0 {
			t.Errorf("%s: of that day %d series and %d pools are in force", name, in.Series, len(in.Pools))
		}
		if k.bring(&in, 11); in.Series != 8 || in.Pools[7] == nil || in.Pools[7].Events != 8 || in.Pools[8] == nil {
			t.Errorf("%s: of the day after it %+v is in force", name, in)
		}
	}
}
