package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"net"
	"net/http"
	"time"
)

// behind is how many messages a partition may be behind and still be ready.
const behind = 100_000

// serveHealth answers on loopback: /healthz says that the process lives,
// /readyz that the bus is connected and no partition far behind.
func serveHealth(ctx context.Context, d *daemon, address string) (closeIt func(), err error) {
	host, _, err := net.SplitHostPort(address)
	if err != nil {
		return nil, fmt.Errorf("--health %s: %w: give HOST:PORT, or off", address, err)
	}
	if ip := net.ParseIP(host); host != "localhost" && (ip == nil || !ip.IsLoopback()) {
		return nil, fmt.Errorf("--health %s: only loopback addresses are served: give 127.0.0.1:PORT", address)
	}
	var lc net.ListenConfig
	listener, err := lc.Listen(ctx, "tcp", address)
	if err != nil {
		return nil, fmt.Errorf("--health: %w: another daemon may hold it: give another port, or off", err)
	}
	mux := http.NewServeMux()
	mux.HandleFunc("GET /healthz", func(w http.ResponseWriter, _ *http.Request) { d.reply(w, http.StatusOK, "alive") })
	mux.HandleFunc("GET /readyz", d.ready)
	server := &http.Server{Handler: mux, ReadHeaderTimeout: 5 * time.Second, WriteTimeout: 10 * time.Second, MaxHeaderBytes: 8 << 10}
	done := make(chan struct{})
	go func() {
		defer close(done)
		if err := server.Serve(listener); !errors.Is(err, http.ErrServerClosed) {
			d.log.Error().Err(err).Msg("serving health")
		}
	}()
	d.log.Info().Str("address", listener.Addr().String()).Msg("health")
	return func() {
		if err := server.Close(); err != nil {
			d.log.Error().Err(err).Msg("closing health")
		}
		<-done
	}, nil
}

func (d *daemon) ready(w http.ResponseWriter, r *http.Request) {
	ctx, cancel := context.WithTimeout(r.Context(), 5*time.Second)
	defer cancel()
	s, err := d.status(ctx)
	switch {
	case err != nil:
		d.reply(w, http.StatusServiceUnavailable, "not ready: "+err.Error())
		return
	case !s.Connected:
		d.reply(w, http.StatusServiceUnavailable, "not ready: the bus is away")
		return
	}
	for _, p := range s.Partitions {
		if p.Position+behind < p.End {
			d.reply(w, http.StatusServiceUnavailable, fmt.Sprintf("not ready: partition %d is %d messages behind", p.Number, p.End-p.Position))
			return
		}
	}
	w.Header().Set("Content-Type", "application/json")
	if err := json.NewEncoder(w).Encode(s); err != nil {
		d.log.Debug().Err(err).Msg("answering a health request")
	}
}

func (d *daemon) reply(w http.ResponseWriter, code int, text string) {
	w.WriteHeader(code)
	if _, err := fmt.Fprintln(w, text); err != nil {
		d.log.Debug().Err(err).Msg("answering a health request")
	}
}
