package main

import (
	"context"
	"fmt"
	"math/rand/v2"
	"net/http"
	"time"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// busPatience is how long the bus may take to store a step before the try is
// said to have failed.
const busPatience = 15 * time.Second

// openOutlets registers the partition's ways out and makes their queues.
func (d *daemon) openOutlets(p *part, o daemonOptions, epoch uint64) error {
	header := map[string][]string{"Tailbell-Owner-Epoch": {fmt.Sprint(epoch)}}
	toBus := outlet.NewBus(d.setup.Name, func(ctx context.Context, direction, indicator, key string, event []byte) error {
		ctx, cancel := context.WithTimeout(ctx, busPatience)
		defer cancel()
		_, err := d.bus.PublishAlert(ctx, p.number, direction, indicator, key, event, header)
		return err
	})
	if err := d.openQueue(p, toBus, nil); err != nil {
		return err
	}
	if o.terminal != nil {
		if err := d.openQueue(p, o.terminal, o.onTerminal); err != nil {
			return err
		}
	}
	for i := range d.setup.Outlets {
		way := &d.setup.Outlets[i]
		out, err := newOutlet(d.setup, way, http.Header(header))
		if err != nil {
			return err
		}
		if err := d.openQueue(p, out, outlet.Wants(way)); err != nil {
			return err
		}
	}
	return nil
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

func (d *daemon) openQueue(p *part, out outlet.Outlet, wants func(*life.Notice) bool) error {
	if err := p.store.Outlets(store.FromOldest, out.Name()); err != nil {
		return err
	}
	p.queues = append(p.queues, outlet.NewQueue(p.store, out, outlet.QueueOptions{
		Random: rand.New(rand.NewPCG(rand.Uint64(), rand.Uint64())), Wants: wants, Now: time.Now,
		Failed: func(err error, pause time.Duration) {
			d.log.Error().Err(err).Str("outlet", out.Name()).Dur("again_in", pause).Msg("delivering")
		},
	}))
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
