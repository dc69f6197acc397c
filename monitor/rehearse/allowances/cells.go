package allowances

// Cells are the rows of the table. A rate is given by how many events it brings
// into a window.
func Cells() []Cell {
	cells := steady()
	cells = append(cells, proportions()...)
	cells = append(cells, changing()...)
	cells = append(cells, arriving()...)
	cells = append(cells, lastTrials()...)
	cells = append(cells, slow()...)
	return append(cells, estimated()...)
}

// upper and lower fill in the tails.
func upper(c Cell) Cell { c.Upper = true; return c }
func lower(c Cell) Cell { c.Lower = true; return c }
func both(c Cell) Cell  { return upper(lower(c)) }

// years makes the cell last so long for each seed: series of 20 years each.
func years(n int, c Cell) Cell {
	const each = 20
	c.Series, c.Slots = n/each, each*365+c.longest()
	return c
}

// steady are rates whose exposure is that of the clock.
func steady() []Cell {
	one := func(name string, mean float64, window int, allowance string, length int, tails func(Cell) Cell) Cell {
		return years(length, tails(Cell{
			Name: name, Rate: mean / float64(window), Windows: []int{window}, Allowance: allowance,
		}))
	}
	three := func(name string, mean float64, allowance string, length int, tails func(Cell) Cell) Cell {
		return years(length, tails(Cell{Name: name, Rate: mean / 28, Windows: []int{7, 28, 365}, Allowance: allowance}))
	}
	shared := one("one allowance for 50 series: 28d, mean 2", 2, 28, "75 in 1y", 20*5*together, upper)
	shared.Shared = true
	return []Cell{
		one("7d, mean 0.1", 0.1, 7, "8 in 1y", 900, upper),
		one("7d, mean 2", 2, 7, "4 in 1y", 1600, upper),
		one("7d, mean 50", 50, 7, "4 in 1y", 1200, upper),
		one("28d, mean 0.1", 0.1, 28, "2 in 1y", 3500, upper),
		one("28d, mean 2", 2, 28, "3 in 1y", 1800, upper),
		one("28d, mean 2, 1 in 5y", 2, 28, "1 in 5y", 44000, upper),
		one("28d, mean 50", 50, 28, "2 in 1y", 2200, upper),
		one("365d, mean 0.1", 0.1, 365, "1 in 1y", 38000, upper),
		one("365d, mean 2", 2, 365, "0.8 in 1y", 9600, upper),
		one("365d, mean 50", 50, 365, "0.8 in 1y", 5000, upper),
		one("7d, mean 50, lower", 50, 7, "4 in 1y", 1200, lower),
		one("28d, mean 8, lower", 8, 28, "3 in 1y", 1800, lower),
		one("365d, mean 50, lower", 50, 365, "0.8 in 1y", 6000, lower),
		one("28d, mean 20, both tails", 20, 28, "4 in 1y", 1200, both),
		three("7d, 28d, 365d; mean 2 in 28d", 2, "4 in 1y", 1400, upper),
		three("7d, 28d, 365d; mean 20 in 28d, both tails", 20, "6 in 1y", 900, both),
		shared,
		closed(one("28d, mean 2, closed by hand", 2, 28, "3 in 1y", 1800, upper)),
		short(one("series of 60d: 7d, mean 2", 2, 7, "0.5 in 60d", 20, upper), 7),
		short(one("series of 60d: 28d, mean 2", 2, 28, "0.5 in 60d", 20, upper), 28),
	}
}

func closed(c Cell) Cell { c.Closed = true; return c }

// short makes series of 60 days that are counted from their first.
func short(c Cell, window int) Cell {
	c.Whole, c.Slots, c.Series = true, 60, 7000+520*window
	return c
}

func proportions() []Cell {
	one := func(name string, mean float64, trials [2]int, windows []int, allowance string, length int, tails func(Cell) Cell) Cell {
		usual := float64(trials[0]+trials[1]) / 2
		return years(length, tails(Cell{
			Name: name, Proportion: true, Exposure: trials, Rate: mean / 28 / usual, Windows: windows, Allowance: allowance,
		}))
	}
	ten, some := [2]int{10, 10}, [2]int{1, 40}
	brief := one("proportion in series of 60d: 28d, mean 5", 5, ten, []int{28}, "0.5 in 60d", 20, upper)
	return []Cell{
		one("proportion, 10 a day: 28d, mean 2", 2, ten, []int{28}, "3 in 1y", 1800, upper),
		one("proportion, 10 a day: 28d, mean 50, both tails", 50, ten, []int{28}, "4 in 1y", 1200, both),
		one("proportion, 10 a day: 7d, 28d, 365d; mean 20 in 28d", 20, ten, []int{7, 28, 365}, "4 in 1y", 1200, both),
		one("proportion, 1 to 40 a day: 28d, mean 5", 5, some, []int{28}, "4 in 1y", 3600, upper),
		one("proportion, 1 to 40 a day: 7d, 28d, 365d; mean 20 in 28d", 20, some, []int{7, 28, 365}, "6 in 1y", 3400, both),
		short(brief, 28),
	}
}

// changing are rates whose expectations change from slot to slot.
func changing() []Cell {
	week := []float64{1.3, 1.2, 1.1, 1, 1, 0.8, 0.6}
	year := []float64{1.4, 1.3, 1.2, 1, 0.9, 0.8, 0.7, 0.7, 0.8, 0.9, 1.1, 1.2}
	one := func(name string, mean float64, windows []int, factors []float64, length int, tails func(Cell) Cell) Cell {
		return years(length, tails(Cell{
			Name: name, Rate: mean / float64(windows[0]), Windows: windows, Factors: factors, Allowance: "4 in 1y",
		}))
	}
	weekly := one("proportion, by weekday: 10d, mean 5", 5, []int{10}, week, 1600, upper)
	weekly.Proportion, weekly.Exposure, weekly.Rate = true, [2]int{10, 10}, 0.05
	drawn := one("exposure 1 to 40 a day: 28d, mean 5", 5./20.5, []int{28}, nil, 3600, upper)
	drawn.Exposure = [2]int{1, 40}
	more := one("exposure 1 to 40 a day: 7d, 28d, 365d; mean 5 in 7d, both tails", 5./20.5, []int{7, 28, 365}, nil, 5200, both)
	more.Exposure = drawn.Exposure
	return []Cell{
		one("by weekday: 10d, mean 5", 5, []int{10}, week, 1600, upper),
		one("by weekday: 7d, 28d, 365d; mean 5 in 7d, both tails", 5, []int{7, 28, 365}, week, 1200, both),
		one("by month: 28d, mean 5", 5, []int{28}, year, 2400, both),
		Nights("by hour of the week: 7h, mean 3, upper", 7, true, false),
		Nights("by hour of the week: 28h, mean 12, lower", 28, false, true),
		drawn, more,
	}
}

// Nights is a cell of hourly slots whose nights are quiet: its critical counts
// fall every evening.
func Nights(name string, window int, upper, lower bool) Cell {
	factors := make([]float64, 168)
	sum := 0.0
	for h := range factors {
		switch hour := h % 24; {
		case hour >= 8 && hour < 20:
			factors[h] = 2
		case hour < 6:
			factors[h] = 0.1
		default:
			factors[h] = 0.6
		}
		sum += factors[h] / 168
	}
	for h := range factors {
		factors[h] /= sum
	}
	return Cell{
		Name: name, Hourly: true, Rate: 3. / 7, Factors: factors, Windows: []int{window}, Upper: upper, Lower: lower,
		Allowance: "40 in 1y", Series: 40, Slots: 24*365*3 + window,
	}
}

// arriving are rates whose events are looked at when they come.
func arriving() []Cell {
	one := func(name string, mean float64, windows []int, allowance string, length int, alone bool) Cell {
		c := Cell{Name: name, Rate: mean / float64(windows[0]), Windows: windows, Allowance: allowance, Arrival: true, Alone: alone}
		return years(length, upper(c))
	}
	return []Cell{
		one("at arrivals: 28d, mean 2", 2, []int{28}, "3 in 1y", 1800, true),
		one("at arrivals: 7d, mean 0.1", 0.1, []int{7}, "2 in 1y", 7200, true),
		one("at slots and arrivals: 28d, mean 2", 2, []int{28}, "4 in 1y", 1600, false),
		one("at slots and arrivals: 7d, 28d; mean 2 in 7d", 2, []int{7, 28}, "5 in 1y", 1200, false),
		closed(one("at arrivals, closed by hand: 28d, mean 2", 2, []int{28}, "3 in 1y", 1800, true)),
	}
}

// slow are rates whose reports come late.
func slow() []Cell {
	known := &Delay{[]float64{0.4, 0.6, 0.8, 0.9, 1}}
	late := Cell{Rate: 4. / 28, Windows: []int{28}, Allowance: "3 in 1y"}
	delayed := late
	delayed.Name, delayed.Delay = "delay of 0 to 4d: 28d, mean 4", known
	three := late
	three.Name, three.Delay, three.Windows, three.Allowance = "delay of 0 to 4d: 7d, 28d, 365d; mean 4 in 28d", known, []int{7, 28, 365}, "4 in 1y"
	late.Name, late.Late, late.LateBy, late.Promise = "a fifth comes 5d late, unknown to the monitor: 28d, mean 4", 0.2, 5, Nothing
	false1 := late
	false1.Name, false1.Late, false1.False = "a tenth more is taken back after 5d: 28d, mean 4", 0, 0.1
	return []Cell{years(1600, upper(delayed)), years(1200, upper(three)), years(1600, upper(late)), years(1200, upper(false1))}
}

// estimated are baselines counted from few events.
func estimated() []Cell {
	one := func(name string, events int64, drawn bool, p Promise) Cell {
		rate := 2. / 28
		c := upper(Cell{
			Name: name, Promise: p, Rate: rate, Windows: []int{28}, Allowance: "2 in 1y",
			Reference: &Reference{Events: events, Exposure: float64(int(float64(events) / rate)), Drawn: drawn},
		})
		c.Series, c.Slots = 600, 6*365+28 // rates differ much: many series tell more than long ones
		if p == Assured {
			c.Series, c.Slots = 350, 20*365+28 // each must tell its own rate
		}
		return c
	}
	assured := one("reference of 20 events, assurance 0.9: 28d", 20, false, Assured)
	assured.Assurance = 0.9
	few := one("reference of 5 events, assurance 0.9: 28d", 5, false, Assured)
	few.Assurance = 0.9
	share := one("reference of 20 events in 2800 trials: 28d", 20, false, OnAverage)
	share.Proportion, share.Exposure, share.Rate, share.Reference.Exposure = true, [2]int{10, 10}, 2./280, 2800
	low := one("reference of 20 events: 28d, lower", 20, false, OnAverage)
	low.Upper, low.Lower = false, true
	low.Reference.Exposure = 280 / 4 // more events a window: fewer can be told from few
	many := one("reference of 100 events: 28d", 100, false, OnAverage)
	many.Series = 640 // it rings least
	return []Cell{
		one("reference of 5 events: 28d", 5, false, OnAverage),
		one("reference of 20 events: 28d", 20, false, OnAverage),
		many,
		low, share,
		one("references drawn anew, 5 events on average: 28d, mean 2", 5, true, Nothing),
		one("references drawn anew, 20 events on average: 28d, mean 2", 20, true, Nothing),
		assured, few,
	}
}
