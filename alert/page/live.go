package page

import (
	"errors"
	"fmt"
	"net/http"
	"sync"
	"time"
)

const (
	// newsApart is the least time between two events of a stream.
	newsApart = 2 * time.Second
	// newsAlive is how often a silent stream says what stands: that the machine
	// is hindered comes without a commit.
	newsAlive = 20 * time.Second
	// maxStreams is how many streams are open at a time.
	maxStreams = 256
)

// news wakes the streams when something was committed. The zero value has no
// stream.
type news struct {
	mu      sync.Mutex
	streams map[chan struct{}]struct{}
}

// tell wakes every stream; one that is awake already needs nothing.
func (n *news) tell() {
	n.mu.Lock()
	defer n.mu.Unlock()
	for s := range n.streams {
		select {
		case s <- struct{}{}:
		default:
		}
	}
}

// join opens a stream, nil if there are too many.
func (n *news) join() chan struct{} {
	n.mu.Lock()
	defer n.mu.Unlock()
	if len(n.streams) >= maxStreams {
		return nil
	}
	if n.streams == nil {
		n.streams = map[chan struct{}]struct{}{}
	}
	s := make(chan struct{}, 1)
	n.streams[s] = struct{}{}
	return s
}

func (n *news) leave(s chan struct{}) {
	n.mu.Lock()
	defer n.mu.Unlock()
	delete(n.streams, s)
}

// live tells a browser when there is something new, and what stands now in a
// few words, until it or the page goes away.
func (p *Page) live(w http.ResponseWriter, r *http.Request) {
	stream := p.news.join()
	if stream == nil {
		w.Header().Set("Retry-After", "30")
		http.Error(w, "Too many people are looking on; load the page again to see what is new.", http.StatusServiceUnavailable)
		return
	}
	defer p.news.leave(stream)
	h := w.Header()
	h.Set("Content-Type", "text/event-stream")
	h.Set("X-Accel-Buffering", "no")
	out := http.NewResponseController(w)
	seen := p.changes.Load()
	send := func(text string) bool {
		// A server without deadlines needs none to be moved.
		if err := out.SetWriteDeadline(time.Now().Add(newsAlive * 2)); err != nil && !errors.Is(err, http.ErrNotSupported) {
			return false
		}
		if _, err := fmt.Fprint(w, text); err != nil {
			return false
		}
		return out.Flush() == nil
	}
	if !send("retry: 3000\n\n") {
		return
	}
	alive := time.NewTicker(newsAlive)
	defer alive.Stop()
	for {
		select {
		case <-stream:
		case <-alive.C:
			seen--
		case <-r.Context().Done():
			return
		case <-p.ctx.Done():
			return
		}
		changes := p.changes.Load()
		if changes == seen {
			continue
		}
		seen = changes
		text, err := p.inBrief(r.Context())
		if err != nil {
			p.o.Failed(err)
			return
		}
		if !send("event: news\ndata: " + text + "\n\n") {
			return
		}
		pause := time.NewTimer(newsApart)
		select {
		case <-pause.C:
		case <-r.Context().Done():
			pause.Stop()
			return
		case <-p.ctx.Done():
			pause.Stop()
			return
		}
	}
}
