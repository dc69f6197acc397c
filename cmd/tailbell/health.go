package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"net"
	"net/http"
	"sync/atomic"
	"time"

	"github.com/rs/zerolog"
)

// behind is how many messages a partition may be behind and still be ready.
const behind = 100_000

// noHealth is the address that stands for no listener.
const noHealth = "off"

// checkHealth says why an address can't be that of the health listener.
func checkHealth(address string) error {
	if address == noHealth {
		return nil
	}
	host, _, err := net.SplitHostPort(address)
	if err != nil {
		return fmt.Errorf("--health %q is no address: give HOST:PORT, or %s", address, noHealth)
	}
	if ip := net.ParseIP(host); host != "localhost" && (ip == nil || !ip.IsLoopback()) {
		return fmt.Errorf("--health %q: only loopback addresses are served: give 127.0.0.1:PORT, or %s", address, noHealth)
	}
	return nil
}

// health answers on loopback: /healthz says that the process lives, /readyz
// that the bus is connected and no partition far behind. It answers from its
// start on, and is not ready before it is given a daemon.
type health struct {
	daemon atomic.Pointer[daemon]
	log    zerolog.Logger
	server *http.Server
	done   chan struct{}
}

// startHealth begins to listen; address is one that checkHealth lets pass.
func startHealth(ctx context.Context, address string, log zerolog.Logger) (*health, error) {
	h := &health{log: log, done: make(chan struct{})}
	if address == noHealth {
		close(h.done)
		return h, nil
	}
	var lc net.ListenConfig
	listener, err := lc.Listen(ctx, "tcp", address)
	if err != nil {
		return nil, fmt.Errorf("--health %s: %w: another daemon may hold it; give another port, or %s", address, err, noHealth)
	}
	mux := http.NewServeMux()
	mux.HandleFunc("GET /healthz", func(w http.ResponseWriter, _ *http.Request) { h.reply(w, http.StatusOK, "alive") })
	mux.HandleFunc("GET /readyz", h.ready)
	h.server = &http.Server{Handler: mux, ReadHeaderTimeout: 5 * time.Second, WriteTimeout: 10 * time.Second, MaxHeaderBytes: 8 << 10}
	go func() {
		defer close(h.done)
		if err := h.server.Serve(listener); !errors.Is(err, http.ErrServerClosed) {
			log.Error().Err(err).Msg("serving health")
		}
	}()
	log.Info().Str("address", listener.Addr().String()).Msg("health")
	return h, nil
}

func (h *health) close() error {
	var err error
	if h.server != nil {
		err = h.server.Close()
	}
	<-h.done
	return err
}

func (h *health) ready(w http.ResponseWriter, r *http.Request) {
	d := h.daemon.Load()
	if d == nil {
		h.reply(w, http.StatusServiceUnavailable, "not ready: the daemon is starting or stopping")
		return
	}
	ctx, cancel := context.WithTimeout(r.Context(), 5*time.Second)
	defer cancel()
	s, err := d.status(ctx)
	switch {
	case err != nil:
		h.reply(w, http.StatusServiceUnavailable, "not ready: "+err.Error())
		return
	case !s.Connected && len(s.Troubles) == 0:
		h.reply(w, http.StatusServiceUnavailable, "not ready: the bus is away")
		return
	}
	for _, t := range s.Troubles {
		if t.Kind.stops() {
			h.reply(w, http.StatusServiceUnavailable, "not ready: "+t.Text)
			return
		}
	}
	for _, p := range s.Partitions {
		if p.Position+behind < p.End {
			h.reply(w, http.StatusServiceUnavailable, fmt.Sprintf("not ready: partition %d is %d messages behind", p.Number, p.End-p.Position))
			return
		}
	}
	w.Header().Set("Content-Type", "application/json")
	if err := json.NewEncoder(w).Encode(s); err != nil {
		h.log.Debug().Err(err).Msg("answering a health request")
	}
}

func (h *health) reply(w http.ResponseWriter, code int, text string) {
	w.WriteHeader(code)
	if _, err := fmt.Fprintln(w, text); err != nil {
		h.log.Debug().Err(err).Msg("answering a health request")
	}
}
