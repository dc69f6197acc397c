package main

import (
	"context"
	"encoding/json"
	"time"

	"tailbell/config"
	"tailbell/ingest/control"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// codeNotFound is the control error for what is not there, codeRefused for an
// act that was refused.
const (
	codeNotFound control.Code = "not_found"
	codeRefused  control.Code = "refused"
	// codeElsewhere is that for a partition that another process owns, or nobody
	// at this moment.
	codeElsewhere control.Code = "elsewhere"
)

// The verbs that a running daemon answers, with what they take and give.
const (
	verbStatus     = "status"       // -> statusReply
	verbAlerts     = "alerts"       // alertsRequest -> []life.Record
	verbAlert      = "alert"        // id -> life.Record
	verbAct        = "act"          // actRequest -> life.Record
	verbRefused    = "refused"      // refusedRequest -> []refusedRow
	verbClock      = "accept-clock" // -> []heldRow
	verbOutlets    = "outlets"      // -> []outletState
	verbTryOutlet  = "try-outlet"   // name -> key of the test
	verbSkipStep   = "skip-step"    // skipRequest ->
	verbDropOutlet = "drop-outlet"  // name -> steps that waited
	verbExport     = "export"       // exportRequest -> []exportRow
	verbCopy       = "copy"         // name of a request -> whether it is done
	verbResend     = "resend"       // resendRequest -> resendReply
	verbTrim       = "trim"         // position -> trimReply
	verbSeries     = "series"       // seriesRequest -> seriesReply
	verbSetting    = "setting"      // -> settingsReply
	verbLook       = "look"         // lookRequest -> page.Reply
)

type alertsRequest struct {
	All    bool   `json:"all"`
	Series string `json:"series,omitempty"` // a name or a pattern; "" for all
	Max    int    `json:"max"`
}

// actRequest is an act in the contract's form; Partition 0 unless named.
type actRequest struct {
	Act json.RawMessage `json:"act"`
}

type refusedRequest struct {
	Partition int    `json:"partition"`
	After     uint64 `json:"after"`
	Max       int    `json:"max"`
}

// statusReply is how a daemon is doing.
type statusReply struct {
	Name       string       `json:"name"`
	Setup      string       `json:"setup_digest"`
	Connected  bool         `json:"bus_connected"`
	Troubles   []trouble    `json:"troubles"` // of the daemon itself
	Partitions []partStatus `json:"partitions"`
}

type partStatus struct {
	Number   int        `json:"partition"`
	Position uint64     `json:"position"` // up to which all is committed
	End      uint64     `json:"stream_end"`
	Clock    *time.Time `json:"clock"` // null before the first message that tells a time
	History  bool       `json:"history_time"`
	// WaitsFor are the partitions that it waits for until they have told what they
	// count: with the next message in history time, else with what is in force.
	WaitsFor   []int           `json:"waits_for_partitions,omitempty"`
	Version    int             `json:"setup_version"`
	Series     int             `json:"series"` // that are monitored, sums among them
	Account    monitor.Account `json:"account"`
	Conditions []conditionRow  `json:"conditions"`
	// MoreConditions counts those beyond the ones told: a reply has to find room in a
	// message of the bus. Series that are silent are all told.
	MoreConditions int         `json:"more_conditions,omitempty"`
	Outlets        []outletRow `json:"outlets"`
	OpenAlerts     int         `json:"open_alerts"`
	Archive        archiveRow  `json:"archive"`
	// Owner is the process that owns the partition, Epoch its own. Copy is the last
	// copy of the store on the bus, nil for none.
	Owner string   `json:"owner"`
	Epoch uint64   `json:"epoch"`
	Copy  *copyRow `json:"last_copy,omitempty"`
}

// conditionRow is a condition with its time as people and programs read it.
type conditionRow struct {
	Series    string                `json:"series"`
	Indicator string                `json:"indicator"`
	Kind      monitor.ConditionKind `json:"kind"`
	Window    string                `json:"window,omitempty"`
	Since     time.Time             `json:"since"`
	Text      string                `json:"text"`
}

// mostConditions is about how many conditions a status tells, over all partitions.
const mostConditions = 1000

// addConditions adds conditions, but of others than silence only so many, twenty at
// least.
func (s *partStatus) addConditions(all []monitor.Condition, most int) {
	named := 0
	for _, c := range all {
		if c.Kind != monitor.Silent {
			if named++; named > max(20, most) {
				s.MoreConditions++
				continue
			}
		}
		s.Conditions = append(s.Conditions, conditionRowOf(c))
	}
}

func conditionRowOf(c monitor.Condition) conditionRow {
	return conditionRow{c.Series, c.Indicator, c.Kind, c.Window, c.Since.Time(), c.Text}
}

// outletRow is how far an outlet has come: how many steps it was told, how many
// were passed over since the set-up does not tell it of them, and how many wait.
type outletRow struct {
	Name       string `json:"name"`
	Delivered  uint64 `json:"delivered"`
	PassedOver uint64 `json:"passed_over"`
	Waiting    uint64 `json:"waiting"`
}

func (d *daemon) verbs() map[string]control.Handler {
	return map[string]control.Handler{
		verbStatus:  func(ctx context.Context, _ []byte) (any, error) { return d.status(ctx) },
		verbAlerts:  answer(d.alerts),
		verbAlert:   answer(func(_ context.Context, id string) (any, error) { r, _, err := d.find(id); return r, err }),
		verbAct:     answer(d.act),
		verbRefused: answer(d.refused),

		verbClock:      d.acceptClock,
		verbDropOutlet: answer(d.dropOutlet),
		verbOutlets:    func(context.Context, []byte) (any, error) { return d.outlets() },
		verbTryOutlet:  answer(d.tryOutlet),
		verbSkipStep:   answer(d.skipStep),
		verbExport:     answer(d.export),

		verbCopy:   answer(d.copyStore),
		verbResend: answer(d.resend),
		verbTrim:   answer(d.trim),
		verbSeries: answer(d.series),

		verbSetting: d.setting,
		verbLook:    answer(d.look),
	}
}

// answer decodes a verb's argument.
func answer[T any](f func(context.Context, T) (any, error)) control.Handler {
	return func(ctx context.Context, body []byte) (any, error) {
		var arg T
		if err := json.Unmarshal(body, &arg); err != nil {
			return nil, control.Errorf(control.BadRequest, "the request can't be read: %v", err)
		}
		return f(ctx, arg)
	}
}

func (d *daemon) status(ctx context.Context) (*statusReply, error) {
	r := &statusReply{Name: d.setup.Name, Setup: d.setup.Digest, Connected: d.bus.Connected()}
	var err error
	if r.Troubles, err = d.standing(); err != nil {
		return nil, err
	}
	if r.Troubles == nil {
		r.Troubles = []trouble{}
	}
	for _, p := range d.parts.all() {
		s := partStatus{Number: p.number, Conditions: []conditionRow{}, Outlets: []outletRow{}, Owner: ownerAlone, Copy: copyRowOf(p.lastCopy.Load())}
		if d.member != nil {
			s.Owner = d.member.keeper.Name()
		}
		if s.Epoch, err = p.store.Epoch(); err != nil {
			return nil, err
		}
		archive, err := p.store.Archive()
		if err != nil {
			return nil, err
		}
		s.Archive = archiveRowOf(&archive)
		if r.Connected {
			if s.End, err = d.endOf(ctx, p); err != nil {
				r.Connected = false
				r.Troubles = append(r.Troubles, trouble{Kind: troubleBus, Partition: p.number, Text: "the bus does not answer: " + err.Error()})
			}
		}
		err = p.do(ctx, func(e *monitor.Engine) {
			s.History = e.InHistory()
			if clock := e.Clock(); clock != monitor.Beginning {
				at := clock.Time()
				s.Clock = &at
			}
			_, s.Version = e.Setup()
			s.Account, s.Series = e.Account(), e.SeriesCount()
			s.addConditions(e.Conditions(), mostConditions/d.setup.Partitions)
			s.OpenAlerts, s.WaitsFor = openAlerts(e), e.WaitsFor()
		})
		if err != nil {
			return nil, err
		}
		p.mu.Lock()
		s.Position = p.mu.position
		p.mu.Unlock()
		outlets, err := p.store.OutletState()
		if err != nil {
			return nil, err
		}
		for _, o := range outlets {
			s.Outlets = append(s.Outlets, outletRow{o.Name, o.Told, o.Passed, o.Depth})
		}
		r.Partitions = append(r.Partitions, s)
	}
	return r, nil
}

func (d *daemon) alerts(_ context.Context, req alertsRequest) (any, error) {
	records := []life.Record{}
	for _, p := range d.parts.all() {
		rows, err := listAlerts(p.store, req)
		if err != nil {
			return nil, err
		}
		records = append(records, rows...)
	}
	return records, nil
}

// listAlerts returns the newest alerts that the request wants, without their
// steps.
func listAlerts(st *store.Store, req alertsRequest) ([]life.Record, error) {
	filter := store.AlertFilter{NotDone: !req.All, NewestFirst: true}
	if req.Series != "" {
		if err := config.CheckPattern(req.Series); err != nil {
			return nil, control.Errorf(control.BadRequest, "%q: %v", req.Series, err)
		}
		filter.SeriesLike = config.NewPattern(req.Series).Match
	}
	rows, err := st.Alerts(filter, 0, req.Max)
	if err != nil {
		return nil, err
	}
	records := make([]life.Record, len(rows))
	for i := range rows {
		records[i] = rows[i].Record
		if steps := records[i].Steps; len(steps) > 0 {
			opening := steps[0] // which says when it opened
			opening.Evidence = nil
			records[i].Steps = []life.Step{opening}
		}
	}
	return records, nil
}

// act publishes an act, waits until it is committed, and tells what came of
// it: the record, or why it was refused.
func (d *daemon) act(ctx context.Context, req actRequest) (any, error) {
	act, reason, detail := wire.NewDecoder(wire.Limits{}).Act(req.Act)
	if reason != "" {
		return nil, control.Errorf(codeRefused, "%s", detail)
	}
	if act.Kind.OnSeries() {
		return d.actOnSeries(ctx, &act, req.Act)
	}
	var p *part
	if act.Alert != "" {
		var err error
		if _, p, err = d.find(act.Alert); err != nil {
			return nil, err
		}
	} else {
		var err error
		if p, err = d.partOf(act.Series); err != nil {
			return nil, err
		}
	}
	switch why, err := d.publishAct(ctx, p, req.Act); {
	case err != nil:
		return nil, err
	case why != "":
		return nil, control.Errorf(codeRefused, "%s", why)
	}
	if act.Alert == "" {
		return nil, nil
	}
	r, _, err := d.find(act.Alert)
	return r, err
}

// refusedAt returns why the message at a position was refused, "" if it was
// not.
func refusedAt(st *store.Store, position uint64) (string, error) {
	rows, err := st.RefusedAt(position)
	if err != nil || len(rows) == 0 {
		return "", err
	}
	r := &rows[0].Refusal
	return string(r.Reason) + ": " + r.Detail, nil
}

// refusedRow is a refusal as listed.
type refusedRow struct {
	Number  uint64          `json:"number"`
	Refusal monitor.Refusal `json:"refusal"`
	Expired bool            `json:"expired"`
}

func (d *daemon) refused(_ context.Context, req refusedRequest) (any, error) {
	p, err := d.part(req.Partition)
	if err != nil {
		return nil, err
	}
	return listRefused(p.store, req)
}

func listRefused(st *store.Store, req refusedRequest) ([]refusedRow, error) {
	rows, err := st.Refused(req.After, req.Max)
	if err != nil {
		return nil, err
	}
	list := make([]refusedRow, len(rows))
	for i, r := range rows {
		list[i] = refusedRow{Number: r.Number, Refusal: r.Refusal, Expired: r.Expired}
	}
	return list, nil
}
