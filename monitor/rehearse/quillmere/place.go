package quillmere

// site is one of the three invented hospitals.
type site struct {
	name     string
	wards    []ward
	theatres []theatre
}

// ward has so many beds and, on a usual day, so many devices in use.
type ward struct {
	name    string
	beds    int
	devices int
	// halfWeekly: bed-days are reported for Monday to Wednesday and for
	// Thursday to Sunday in one sum each.
	halfWeekly bool
}

// theatre has so many procedures in a usual week.
type theatre struct {
	name       string
	procedures int
}

var sites = []site{
	{"quillmere-east", []ward{
		{"ward-1", 26, 38, false}, {"ward-2", 24, 34, false}, {"ward-3", 28, 44, false}, {"intensive-care", 18, 60, false},
	}, []theatre{{"theatre-a", 44}, {"theatre-b", 38}}},
	{"quillmere-north", []ward{
		{"ward-4", 27, 40, false}, {"ward-5", 25, 36, false}, {"ward-6", 26, 30, false}, {"high-care", 20, 56, false},
	}, []theatre{{"theatre-c", 42}, {"theatre-d", 36}}},
	{"quillmere-quay", []ward{
		{"ward-7", 24, 32, false}, {"ward-8", 28, 42, true}, {"ward-9", 26, 36, false}, {"stroke-unit", 22, 40, false},
	}, []theatre{{"theatre-e", 40}, {"theatre-f", 46}}},
}

// The usual rates, as the set-up states them.
const (
	usualLineInfections  = 1.8 / 1000
	usualFalls           = 6.0 / 1000
	usualWoundInfections = 308.0 / 12320
	usualFailedRequests  = 40.0 / 1e6
)

const ferrybill = "ferrybill"

var (
	regions  = []string{"harbour", "upland"}
	services = []string{"card-payment", "refund", "payout", "standing-order"}
)

func seriesOf(parts ...string) string {
	name := parts[0]
	for _, p := range parts[1:] {
		name += "/" + p
	}
	return name
}
