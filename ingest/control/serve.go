package control

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"slices"
	"sync"
	"time"

	"tailbell/ingest/bus"

	"github.com/nats-io/nats.go"
)

// Handler answers one verb. The body is the request's JSON, nil if it had none;
// what it returns is encoded as JSON. An *Error reaches the caller with its
// code, any other error as Failed. ctx ends when the caller no longer waits or
// the server is closed; a handler must return soon after.
type Handler func(ctx context.Context, body []byte) (any, error)

// Server answers requests until it is closed.
type Server struct {
	conn     *nats.Conn
	cancel   context.CancelFunc
	subs     []*nats.Subscription
	slots    chan struct{}
	handling sync.WaitGroup
	mu       struct {
		sync.Mutex
		closed bool
		unsent error // the last reply that could not be sent
	}
}

// Serve answers the verbs on the daemon's bus, each with its handler, from the
// moment it returns until Close is called. Handlers of different requests run
// at the same time. When ctx ends, so do the contexts of the handlers.
func Serve(ctx context.Context, b *bus.Bus, verbs map[string]Handler) (*Server, error) {
	return serve(ctx, b.Conn(), verbs, b.ControlSubject, func() bool { return true })
}

// ServeShared is Serve for one of several processes, which all get each request:
// only that answers for which mine is true at that moment.
func ServeShared(ctx context.Context, b *bus.Bus, verbs map[string]Handler, mine func() bool) (*Server, error) {
	return serve(ctx, b.Conn(), verbs, b.ControlSubject, mine)
}

// ServeMember answers what the other processes ask this one, see CallMember.
func ServeMember(ctx context.Context, b *bus.Bus, member string, verbs map[string]Handler) (*Server, error) {
	return serve(ctx, b.Conn(), verbs, func(verb string) string { return b.MemberSubject(member, verb) }, func() bool { return true })
}

func serve(ctx context.Context, conn *nats.Conn, verbs map[string]Handler, subject func(verb string) string, mine func() bool) (*Server, error) {
	for verb := range verbs {
		if err := checkVerb(verb); err != nil {
			return nil, err
		}
	}
	ctx, cancel := context.WithCancel(ctx)
	s := &Server{conn: conn, cancel: cancel, slots: make(chan struct{}, atOnce)}
	for _, verb := range slices.Sorted(maps.Keys(verbs)) {
		handler := verbs[verb]
		sub, err := s.conn.Subscribe(subject(verb), func(msg *nats.Msg) {
			if mine() {
				s.receive(ctx, handler, msg)
			}
		})
		if err != nil {
			return nil, errors.Join(fmt.Errorf("answering %q: %w", verb, err), s.Close())
		}
		s.subs = append(s.subs, sub)
	}
	flush, done := context.WithTimeout(ctx, longest)
	defer done()
	if err := s.conn.FlushWithContext(flush); err != nil {
		return nil, errors.Join(fmt.Errorf("answering commands: %w", err), s.Close())
	}
	return s, nil
}

// Close stops answering and waits for the requests under way, whose contexts it
// ends. It returns the last error of sending a reply, if there was one.
func (s *Server) Close() error {
	s.mu.Lock()
	s.mu.closed = true
	s.mu.Unlock()
	s.cancel()
	var errs []error
	for _, sub := range s.subs {
		err := sub.Unsubscribe()
		if err != nil && !errors.Is(err, nats.ErrConnectionClosed) && !errors.Is(err, nats.ErrBadSubscription) {
			errs = append(errs, err)
		}
	}
	s.handling.Wait()
	s.mu.Lock()
	defer s.mu.Unlock()
	return errors.Join(append(errs, s.mu.unsent)...)
}

// enter counts a request as under way; it reports false once the server is
// closed.
func (s *Server) enter() bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	if !s.mu.closed {
		s.handling.Add(1)
	}
	return !s.mu.closed
}

// receive starts to handle a request, unless too many are under way.
func (s *Server) receive(ctx context.Context, handler Handler, msg *nats.Msg) {
	if msg.Reply == "" || !s.enter() {
		return // nobody waits, or nobody is there any more
	}
	select {
	case s.slots <- struct{}{}:
	default:
		defer s.handling.Done()
		s.send(msg, reply{Error: Errorf(Busy, "the daemon is busy with %d other requests: try again", atOnce)})
		return
	}
	go func() {
		defer s.handling.Done()
		defer func() { <-s.slots }()
		s.send(msg, answer(ctx, handler, msg.Data))
	}()
}

// answer handles one request.
func answer(ctx context.Context, handler Handler, data []byte) reply {
	req, fault := readRequest(data)
	if fault != nil {
		return reply{Error: fault}
	}
	within := longest
	if asked := time.Duration(req.WithinMS) * time.Millisecond; asked > 0 {
		within = min(within, asked)
	}
	ctx, cancel := context.WithTimeout(ctx, within)
	defer cancel()
	result, err := handler(ctx, req.Body)
	if err != nil {
		return reply{Error: coded(err)}
	}
	body, err := json.Marshal(result)
	if err != nil {
		return reply{Error: Errorf(Failed, "encoding the reply: %v", err)}
	}
	return reply{Body: body}
}

// readRequest takes a request apart.
func readRequest(data []byte) (request, *Error) {
	var req request
	if len(data) > maxRequest {
		return req, Errorf(BadRequest, "the request has %d bytes, the limit is %d", len(data), maxRequest)
	}
	if err := json.Unmarshal(data, &req); err != nil {
		return req, Errorf(BadRequest, "the request is not a JSON object of this protocol: %v", err)
	}
	if req.Version != Version {
		return req, Errorf(BadVersion, "the request is of version %d, the daemon speaks %d: "+
			"use the program that runs the daemon", req.Version, Version)
	}
	return req, nil
}

// coded gives an error of a handler its code.
func coded(err error) *Error {
	var own *Error
	switch {
	case errors.As(err, &own):
		return &Error{Code: own.Code, Text: err.Error()}
	case errors.Is(err, context.DeadlineExceeded):
		return Errorf(TimedOut, "not done within the time given: %v", err)
	case errors.Is(err, context.Canceled):
		return Errorf(TimedOut, "the daemon is stopping")
	}
	return &Error{Code: Failed, Text: err.Error()}
}

// send sends a reply, or the error that it is too large.
func (s *Server) send(msg *nats.Msg, r reply) {
	r.Version = Version
	if limit := int(s.conn.MaxPayload()) - replyRoom; len(r.Body) > limit {
		r.Error = Errorf(ReplyTooLarge, "the reply has %d bytes, the bus carries %d: ask for less",
			len(r.Body), limit)
		r.Body = nil
	}
	data, err := json.Marshal(r)
	if err == nil {
		err = msg.Respond(data)
	}
	if err != nil {
		s.mu.Lock()
		s.mu.unsent = fmt.Errorf("replying on %s: %w", msg.Subject, err)
		s.mu.Unlock()
	}
}

// checkVerb reports whether a verb can stand in a subject.
func checkVerb(verb string) error {
	ok := verb != ""
	for _, r := range verb {
		ok = ok && (r >= 'a' && r <= 'z' || r == '-')
	}
	if !ok {
		return fmt.Errorf("%q is no verb: use lower-case letters and \"-\"", verb)
	}
	return nil
}
