package gate

import (
	"bufio"
	"errors"
	"io"
	"net"
	"net/http"
	"net/netip"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/config"
)

// pipes is a listener without sockets, for time that is not real.
type pipes struct {
	conns  chan net.Conn
	closed chan struct{}
}

func (p pipes) Accept() (net.Conn, error) {
	select {
	case c := <-p.conns:
		return c, nil
	case <-p.closed:
		return nil, net.ErrClosed
	}
}

func (p pipes) Close() error { close(p.closed); return nil }

func (p pipes) Addr() net.Addr {
	return net.TCPAddrFromAddrPort(netip.MustParseAddrPort("127.0.0.1:1"))
}

// TestSlowRequestsEnd sends requests that take their time, and waits for more
// than may be waited for.
func TestSlowRequestsEnd(t *testing.T) {
	for name, c := range map[string]struct {
		head  string
		drip  bool // a byte a second goes on coming
		lasts time.Duration
		says  string
	}{
		"head":   {"GET / HTTP/1.1\r\nHost: localhost\r\nX: ", true, headerTime, ""},
		"body":   {"POST / HTTP/1.1\r\nHost: localhost\r\nContent-Length: 1000\r\n\r\n", true, bodyTime, "body ended"},
		"answer": {"GET / HTTP/1.1\r\nHost: localhost\r\n\r\n", false, requestTime, "context deadline exceeded"},
		"stream": {"GET / HTTP/1.1\r\nHost: localhost\r\nAccept: text/event-stream\r\n\r\n", false, StreamTime, "context deadline exceeded"},
	} {
		t.Run(name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				g, err := New(Options{Name: "quillmere", Page: config.Page{Listen: "127.0.0.1:1"}, Now: time.Now})
				if err != nil {
					t.Fatal(err)
				}
				p := pipes{make(chan net.Conn), make(chan struct{})}
				server := g.start(t.Context(), p, http.HandlerFunc(waitForTheEnd), nil)
				client, other := net.Pipe()
				began := time.Now()
				p.conns <- other
				if _, err := io.WriteString(client, c.head); err != nil {
					t.Error(err)
				}
				var dripping sync.WaitGroup
				if c.drip {
					dripping.Go(func() { drip(client) })
				}
				line := readAnswer(client)
				if took := time.Since(began); took < c.lasts || took > c.lasts+2*time.Second || !strings.Contains(line, c.says) {
					t.Errorf("ended after %v with %q, want %v and %q", took, line, c.lasts, c.says)
				}
				if err := errors.Join(client.Close(), server.Close()); err != nil {
					t.Error(err)
				}
				dripping.Wait()
			})
		})
	}
}

func TestStreamsEndWithTheServer(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		g, err := New(Options{Name: "quillmere", Page: config.Page{Listen: "127.0.0.1:1"}, Now: time.Now})
		if err != nil {
			t.Fatal(err)
		}
		p := pipes{make(chan net.Conn), make(chan struct{})}
		server := g.start(t.Context(), p, http.HandlerFunc(waitForTheEnd), nil)
		client, other := net.Pipe()
		p.conns <- other
		if _, err := io.WriteString(client, "GET / HTTP/1.1\r\nHost: localhost\r\nAccept: text/event-stream\r\n\r\n"); err != nil {
			t.Error(err)
		}
		synctest.Wait()
		began, says := time.Now(), make(chan string)
		go func() { says <- readAnswer(client) }()
		if err := server.Close(); err != nil {
			t.Error(err)
		}
		if took, line := time.Since(began), <-says; took > time.Second || !strings.Contains(line, "context canceled") {
			t.Errorf("a stream went on for %v, and ended with %q", took, line)
		}
		if err := client.Close(); err != nil {
			t.Error(err)
		}
	})
}

// drip sends a byte a second until nobody reads.
func drip(w io.Writer) {
	for {
		time.Sleep(time.Second)
		if _, err := io.WriteString(w, "x"); err != nil {
			return
		}
	}
}

// readAnswer reads the last line of an answer, "" if there is none.
func readAnswer(r io.Reader) (last string) {
	lines := bufio.NewScanner(r)
	for lines.Scan() {
		if last = lines.Text(); strings.HasSuffix(last, "ended") || strings.Contains(last, "context ") {
			break
		}
	}
	return last
}

// waitForTheEnd reads the body, then waits until it may no longer.
func waitForTheEnd(w http.ResponseWriter, r *http.Request) {
	if _, err := io.ReadAll(r.Body); err != nil {
		io.WriteString(w, "body ended\n") //nolint:errcheck // the test reads it
		return
	}
	<-r.Context().Done()
	io.WriteString(w, r.Context().Err().Error()+"\n") //nolint:errcheck // the test reads it
}
