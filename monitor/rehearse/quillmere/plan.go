package quillmere

import (
	"time"

	"tailbell/monitor/rehearse"
)

// plan is what is planted, apart from everyday mishaps.
type plan struct {
	excesses []rehearse.Excess
	mistakes []rehearse.Mistake
	outages  []outage
	// What is mistaken in what the wards send in any case.
	units      []unitError
	misfilings []misfiling
}

// outage is a time in which one side of a series was not reported.
type outage struct {
	series   string
	what     side
	from, to time.Time
	// arrives is when all of it was sent at last; zero for never.
	arrives time.Time
}

// side is what an outage holds back.
type side int

const (
	counts side = iota
	denominators
)

const (
	dayForm  = time.DateOnly
	hourForm = "2006-01-02 15:04"
)

// when reads a date, or a date and hour.
func (a *author) when(text string) time.Time {
	form := dayForm
	if len(text) > len(dayForm) {
		form = hourForm
	}
	t, err := time.ParseInLocation(form, text, a.zone)
	if err != nil {
		panic(err) // the dates are constants of this package
	}
	return t
}

func (a *author) newPlan() plan {
	p := plan{units: a.unitErrors(), misfilings: a.misfilings()}
	for _, x := range []struct {
		series   string
		from, to string
		ratio    float64
	}{
		{"quillmere-east/ward-3/line-infection", "2024-04-08", "2024-06-24", 5},
		{"quillmere-north/high-care/line-infection", "2024-09-02", "2024-11-11", 4},
		{"quillmere-quay/ward-8/line-infection", "2025-02-03", "2025-04-28", 5},
		{"quillmere-east/intensive-care/line-infection", "2025-07-07", "2025-09-15", 4},

		{"quillmere-east/ward-2/fall", "2024-03-04", "2024-05-20", 3.5},
		{"quillmere-north/ward-5/fall", "2024-11-04", "2025-01-20", 3.5},
		{"quillmere-quay/ward-7/fall", "2025-05-12", "2025-07-28", 3.5},
		{"quillmere-north/ward-4/fall", "2024-06-03", "2024-12-02", 0.1},
		{"quillmere-east/ward-1/fall", "2025-03-03", "2025-09-01", 0.1},
		{"quillmere-quay/stroke-unit/fall", "2024-08-05", "2025-02-03", 0.05},

		{"quillmere-east/theatre-a/wound-infection", "2024-05-06", "2024-09-02", 3.5},
		{"quillmere-quay/theatre-f/wound-infection", "2025-01-06", "2025-04-28", 3.5},
		{"quillmere-north/theatre-c/wound-infection", "2024-09-02", "2025-05-05", 0.15},

		{"ferrybill/harbour/card-payment/failed-request", "2024-02-14 10:00", "2024-02-14 16:00", 4},
		{"ferrybill/upland/payout/failed-request", "2024-07-01 08:00", "2024-07-04 08:00", 1.6},
		{"ferrybill/harbour/refund/failed-request", "2025-01-15 03:00", "2025-01-15 05:00", 8},
		{"ferrybill/upland/card-payment/failed-request", "2025-06-20 00:00", "2025-06-30 00:00", 1.4},
		{"ferrybill/harbour/standing-order/failed-request", "2025-10-05 12:00", "2025-10-06 12:00", 2.5},
		{"ferrybill/upland/refund/failed-request", "2024-10-01 00:00", "2024-11-15 00:00", 0.4},
		{"ferrybill/harbour/payout/failed-request", "2025-03-10 00:00", "2025-04-20 00:00", 0.5},
		{"ferrybill/upland/standing-order/failed-request", "2025-08-04 00:00", "2025-08-25 00:00", 0.3},
	} {
		direction := rehearse.Upper
		if x.ratio < 1 {
			direction = rehearse.Lower
		}
		p.excesses = append(p.excesses, rehearse.Excess{Series: x.series, Direction: direction, From: a.when(x.from), To: a.when(x.to), Ratio: x.ratio})
	}
	for _, o := range []struct {
		series            string
		what              side
		from, to, arrives string
	}{
		{"quillmere-east/ward-3/line-infection", denominators, "2024-04-15", "2024-06-03", "2024-06-07"},
		{"quillmere-quay/ward-8/line-infection", denominators, "2025-02-10", "2025-03-31", "2025-04-04"},
		{"quillmere-east/intensive-care/line-infection", counts, "2025-07-14", "2025-08-18", "2025-08-22"},
		{"quillmere-north/ward-5/fall", denominators, "2024-11-11", "2024-12-16", "2024-12-20"},
		{"quillmere-quay/ward-7/fall", counts, "2025-05-12", "2025-06-10", "2025-06-20"},
		{"quillmere-quay/theatre-f/wound-infection", denominators, "2025-01-20", "2025-03-10", "2025-03-21"},
		{"quillmere-north/theatre-c/wound-infection", denominators, "2024-11-04", "2025-01-20", "2025-02-07"},
		{"ferrybill/harbour/refund/failed-request", counts, "2025-01-15 02:00", "2025-01-15 14:00", "2025-01-16 09:00"},
		{"ferrybill/upland/payout/failed-request", counts, "2024-07-01 06:00", "2024-07-02 06:00", "2024-07-02 20:00"},
		// The silent feed: two months of bed-days that never come.
		{"quillmere-quay/ward-9/fall", denominators, "2025-04-01", "2025-06-01", ""},
		// Counts that were found when they could change nothing any more.
		{"quillmere-north/ward-6/line-infection", counts, "2025-03-10", "2025-03-14", "2025-08-01"},
		// Hours that Ferrybill lost.
		{"ferrybill/upland/refund/failed-request", counts, "2024-05-05 02:00", "2024-05-05 05:00", ""},
	} {
		out := outage{series: o.series, what: o.what, from: a.when(o.from), to: a.when(o.to)}
		if o.arrives != "" {
			out.arrives = a.when(o.arrives)
		}
		p.outages = append(p.outages, out)
	}
	return p
}

// ratio is the true rate of a series at a time, relative to the usual one.
func (p *plan) ratio(series string, t time.Time) float64 {
	for i := range p.excesses {
		x := &p.excesses[i]
		if x.Series == series && !t.Before(x.From) && t.Before(x.To) {
			return x.Ratio
		}
	}
	return 1
}

// delayed returns when a report about t is sent, if an outage holds it back.
// never says that it is not sent at all.
func (p *plan) delayed(series string, what side, t time.Time) (arrives time.Time, held, never bool) {
	for i := range p.outages {
		o := &p.outages[i]
		if o.series == series && o.what == what && !t.Before(o.from) && t.Before(o.to) {
			return o.arrives, true, o.arrives.IsZero()
		}
	}
	return time.Time{}, false, false
}
