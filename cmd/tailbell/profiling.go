package main

import (
	"context"
	"errors"
	"fmt"
	"net"
	"net/http"
	"net/http/pprof"
	"runtime"
	"time"

	"github.com/rs/zerolog"
)

// noProfiling is the address that stands for no listener.
const noProfiling = "off"

const (
	// blockRate is the number of nanoseconds of waiting of which one sample is
	// taken while profiles are offered, mutexRate one in how many contended
	// locks: seldom enough to cost nothing that could be measured.
	blockRate = 100_000
	mutexRate = 100
)

// checkProfiling says why an address can't be that of the listener for profiles.
func checkProfiling(address string) error {
	if address == noProfiling {
		return nil
	}
	host, _, err := net.SplitHostPort(address)
	if err != nil {
		return fmt.Errorf("--profiling %q is no address: give HOST:PORT, or %s", address, noProfiling)
	}
	if ip := net.ParseIP(host); host != "localhost" && (ip == nil || !ip.IsLoopback()) {
		return fmt.Errorf("--profiling %q: profiles hold what is in memory, so only loopback addresses are served: give 127.0.0.1:PORT, or %s", address, noProfiling)
	}
	return nil
}

// profiling offers Go's profiles of the running process on loopback.
type profiling struct {
	address string // at which it listens
	server  *http.Server
	done    chan struct{}
}

// startProfiling begins to listen; address is one that checkProfiling lets pass.
func startProfiling(ctx context.Context, address string, log zerolog.Logger) (*profiling, error) {
	p := &profiling{done: make(chan struct{})}
	if address == noProfiling {
		close(p.done)
		return p, nil
	}
	var lc net.ListenConfig
	listener, err := lc.Listen(ctx, "tcp", address)
	if err != nil {
		return nil, fmt.Errorf("--profiling %s: %w: give another port, or %s", address, err, noProfiling)
	}
	mux := http.NewServeMux()
	mux.HandleFunc("GET /debug/pprof/", pprof.Index)
	mux.HandleFunc("GET /debug/pprof/profile", pprof.Profile)
	mux.HandleFunc("GET /debug/pprof/symbol", pprof.Symbol)
	mux.HandleFunc("GET /debug/pprof/trace", pprof.Trace)
	runtime.SetBlockProfileRate(blockRate)
	runtime.SetMutexProfileFraction(mutexRate)
	p.server = &http.Server{Handler: local(mux), ReadHeaderTimeout: 5 * time.Second, WriteTimeout: 10 * time.Minute, MaxHeaderBytes: 8 << 10}
	go func() {
		defer close(p.done)
		if err := p.server.Serve(listener); !errors.Is(err, http.ErrServerClosed) {
			log.Error().Err(err).Msg("serving profiles")
		}
	}()
	p.address = listener.Addr().String()
	log.Warn().Str("address", p.address).Msg("profiles: anyone on this machine can read them")
	return p, nil
}

// local refuses what a page of another site makes a browser ask for.
func local(next http.Handler) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		host, _, err := net.SplitHostPort(r.Host)
		if err != nil {
			host = r.Host
		}
		if ip := net.ParseIP(host); host != "localhost" && (ip == nil || !ip.IsLoopback()) {
			http.Error(w, "ask for it by a loopback address", http.StatusForbidden)
			return
		}
		next.ServeHTTP(w, r)
	})
}

func (p *profiling) close() error {
	var err error
	if p.server != nil {
		err = p.server.Close()
		runtime.SetBlockProfileRate(0)
		runtime.SetMutexProfileFraction(0)
	}
	<-p.done
	return err
}
