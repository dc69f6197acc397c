package main

import (
	"context"
	"errors"
	"net/http"
	"sync/atomic"
	"time"

	"github.com/rs/zerolog"

	"tailbell/alert/page"
	"tailbell/alert/page/gate"
	"tailbell/config"
	"tailbell/ingest/control"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// pageServer serves the page of whichever daemon runs, behind the gate.
type pageServer struct {
	page   atomic.Pointer[page.Page]
	server *gate.Server
}

// startPage begins to listen where the set-up says; nothing is served if it
// says nothing.
func startPage(ctx context.Context, setup *config.Setup, log zerolog.Logger) (*pageServer, error) {
	s := &pageServer{}
	if !setup.Page.Served() {
		return s, nil
	}
	g, err := gate.New(gate.Options{Name: setup.Name, Page: setup.Page, Now: time.Now, Log: log})
	if err != nil {
		return nil, err
	}
	s.server, err = g.Listen(ctx, s)
	return s, err
}

func (s *pageServer) close() error {
	if s.server == nil {
		return nil
	}
	return s.server.Close()
}

// ServeHTTP answers with the page of the daemon, if there is one.
func (s *pageServer) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	if p := s.page.Load(); p != nil {
		p.ServeHTTP(w, r)
		return
	}
	w.Header().Set("Retry-After", "2")
	http.Error(w, "The daemon is starting or stopping: load the page again in a moment.", http.StatusServiceUnavailable)
}

// openPage gives the daemon its page, if the set-up names one.
func (d *daemon) openPage() error {
	if !d.setup.Page.Served() {
		return nil
	}
	o := page.Options{
		Name: d.setup.Name, Act: d.actFromPage, State: d.stateForPage, Now: time.Now,
		PartOf: d.numberOf,
		Who: func(ctx context.Context) page.Person {
			p := gate.Of(ctx)
			return page.Person{Name: p.Name, MayAct: p.MayAct(), SignedIn: p.Named()}
		},
		Failed: func(err error) { d.log.Error().Err(err).Msg("serving the page") },
	}
	for n := range d.setup.Partitions {
		o.Parts = append(o.Parts, d.pagePart(n))
	}
	var err error
	d.page, err = page.New(o)
	return err
}

// pagePatience is how long the page waits for an engine.
const pagePatience = 3 * time.Second

// actFromPage takes an act as if a command had sent it.
func (d *daemon) actFromPage(ctx context.Context, act *monitor.Act) error {
	req := actRequest{wire.EncodeAct(nil, act)}
	var err error
	if d.setup.Bus.Share { // the owner takes it
		_, err = (&front{d}).act(ctx, req)
	} else {
		_, err = d.act(ctx, req)
	}
	var refused *control.Error
	if errors.As(err, &refused) {
		return &page.RefusedError{Why: refused.Text}
	}
	return err
}

// statusOfAll is how all partitions are doing, those of other processes too.
func (d *daemon) statusOfAll(ctx context.Context) (*statusReply, error) {
	if !d.setup.Bus.Share {
		return d.status(ctx)
	}
	all, err := (&front{d}).status(ctx, nil)
	if err != nil {
		return nil, err
	}
	r, ok := all.(*statusReply)
	if !ok {
		return nil, errors.New("the status is none")
	}
	return r, nil
}

// stateForPage says how the daemon is doing.
func (d *daemon) stateForPage(ctx context.Context) (*page.State, error) {
	asked, cancel := context.WithTimeout(ctx, pagePatience)
	defer cancel()
	r, err := d.statusOfAll(asked)
	if err != nil && ctx.Err() == nil { // an engine is held up: what is known without it
		r = &statusReply{Setup: d.setup.Digest, Connected: d.bus.Connected()}
		r.Troubles, err = d.standing()
	}
	if err != nil {
		return nil, err
	}
	s := &page.State{Connected: r.Connected, Embedded: d.bus.Embedded(), Setup: r.Setup}
	for _, t := range r.Troubles {
		s.Troubles = append(s.Troubles, page.Trouble{Kind: string(t.Kind), Text: t.Text, Since: t.Since, Stops: t.Kind.stops()})
	}
	for _, p := range r.Partitions {
		part := page.PartState{
			Number: p.Number, Position: p.Position, End: p.End, Clock: p.Clock, History: p.History, Version: p.Version, Account: p.Account,
		}
		if d.setup.Bus.Share {
			part.Owner, part.Here = p.Owner, p.Owner == d.member.keeper.Name()
			if p.Copy != nil {
				part.CopyMade, part.CopyPosition = &p.Copy.Made, p.Copy.Position
			}
		}
		if p.Archive.From != nil {
			part.Archive = p.Archive.String()
		}
		here := d.parts.get(p.Number)
		for _, o := range p.Outlets {
			state := page.OutletState{Name: o.Name, Delivered: o.Delivered, PassedOver: o.PassedOver, Waiting: o.Waiting}
			if here != nil { // what hinders one elsewhere is among the troubles
				state.Trouble = here.undelivered(store.Outlet{Name: o.Name, Depth: o.Waiting})
			}
			part.Outlets = append(part.Outlets, state)
		}
		s.Parts = append(s.Parts, part)
	}
	return s, nil
}
