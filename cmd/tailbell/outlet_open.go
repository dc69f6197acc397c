package main

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"net/http"
	"time"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// busPatience is how long the bus may take to store a step before the try is
// said to have failed.
const busPatience = 15 * time.Second

// openOutlets registers the partition's ways out and makes their queues. c is the
// claim by which it is owned, nil for an embedded bus.
func (d *daemon) openOutlets(p *part, epoch uint64, c *claim.Holding) error {
	header := map[string][]string{bus.EpochHeader: {fmt.Sprint(epoch)}}
	toBus := outlet.NewBus(d.setup.Name, func(ctx context.Context, s *outlet.Published) error {
		ctx, cancel := context.WithTimeout(ctx, busPatience)
		defer cancel()
		if p.fence != nil {
			return d.publishOwned(ctx, p, s)
		}
		_, err := d.bus.PublishAlert(ctx, p.number, s.Direction, s.Indicator, s.Key, s.Event, header)
		return err
	})
	if err := d.openQueue(p, toBus, nil, c); err != nil {
		return err
	}
	if d.o.terminal != nil {
		if err := d.openQueue(p, d.o.terminal, d.o.onTerminal, c); err != nil {
			return err
		}
	}
	for i := range d.setup.Outlets {
		way := &d.setup.Outlets[i]
		out, err := newOutlet(d.setup, way, http.Header(header))
		if err != nil {
			return err
		}
		if err := d.openQueue(p, out, outlet.Wants(way), c); err != nil {
			return err
		}
	}
	return nil
}

// publishOwned publishes a step behind the fence. An owner whom another one has
// followed gives the partition up.
func (d *daemon) publishOwned(ctx context.Context, p *part, s *outlet.Published) error {
	err := p.fence.Publish(ctx, &claim.Step{Row: s.Number, Key: s.Key, Direction: s.Direction, Indicator: s.Indicator, Event: s.Event})
	if errors.Is(err, claim.ErrStale) {
		p.staled.Do(func() { close(p.stale) })
	}
	return err
}

// newOutlet makes an outlet of the set-up.
func newOutlet(setup *config.Setup, o *config.Outlet, header http.Header) (outlet.Outlet, error) {
	switch o.Kind {
	case config.Webhook:
		return outlet.NewWebhook(outlet.WebhookOptions{
			Name: o.Name, Deployment: setup.Name, URL: o.URL, SecretFile: o.SecretFile, Header: header, Now: time.Now,
		})
	case config.Mail:
		return outlet.NewMail(outlet.MailOptions{Outlet: *o, Deployment: setup.Name, Page: setup.Page.Address(), Now: time.Now})
	case config.Command:
		return outlet.NewCommand(*o, setup.Name)
	}
	return nil, fmt.Errorf("outlet %s: there is no way out of the kind %s", o.Name, o.Kind)
}

func (d *daemon) openQueue(p *part, out outlet.Outlet, wants func(*life.Notice) bool, c *claim.Holding) error {
	if err := p.store.Outlets(store.FromOldest, out.Name()); err != nil {
		return err
	}
	o := outlet.QueueOptions{
		Random: rand.New(rand.NewPCG(rand.Uint64(), rand.Uint64())), Wants: wants, Now: time.Now,
		Failed: func(err error, pause time.Duration) {
			d.log.Error().Err(err).Str("outlet", out.Name()).Int("partition", p.number).Dur("again_in", pause).Msg("delivering")
		},
	}
	if d.setup.Bus.Share { // what another process has told already, and may be telling now
		if c.Origin == p.origin && out.Name() != outlet.BusName {
			o.Through = c.Told[out.Name()]
		}
		o.May = func() error { return d.member.may(p.number) }
	}
	p.queues = append(p.queues, outlet.NewQueue(p.store, out, o))
	return nil
}

// queue returns the queue of an outlet, nil if it is not in use.
func (p *part) queue(name string) *outlet.Queue {
	for _, q := range p.queues {
		if q.Name() == name {
			return q
		}
	}
	return nil
}

// forPeople says which steps the terminal shows in sentences: none of alerts on
// the shelf, and no reminder that is meant for another outlet.
func forPeople(n *life.Notice) bool {
	return !n.Quiet() && (n.To == "" || n.To == "terminal")
}
