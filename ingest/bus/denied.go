package bus

import (
	"context"
	"errors"
	"fmt"
	"strings"

	"github.com/nats-io/nats.go"
)

// denial is what the bus said when it refused the account something. It says
// so apart from the request, which is simply never answered.
type denial struct {
	text string
	next chan struct{} // closed at the next one
}

// noteDenial keeps what an error of the connection says of permissions.
func (b *Bus) noteDenial(err error) {
	if !errors.Is(err, nats.ErrPermissionViolation) {
		return
	}
	_, text, found := strings.Cut(err.Error(), "Permissions Violation for ")
	if !found {
		text = err.Error()
	}
	last := b.denied.Swap(&denial{text, make(chan struct{})})
	close(last.next)
}

// deniedSince adds to the error of a try that was not answered what the bus
// refused meanwhile. before is what it had refused last when the try began.
func (b *Bus) deniedSince(before *denial, err error) error {
	last := b.denied.Load()
	if err == nil || !passing(err) || last == before {
		return err
	}
	return notAllowed(last.text, err)
}

func notAllowed(text string, err error) error {
	return fmt.Errorf("%w: %s: ingest/bus/README.md lists what each account needs (%w)", ErrNotAllowed, text, err)
}

// Request sends a request and waits for its answer. The error is an
// ErrNotAllowed as soon as the bus refuses it.
func (b *Bus) Request(ctx context.Context, subject string, data []byte) (*nats.Msg, error) {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	refused := make(chan string, 1)
	go func(last *denial) {
		for {
			select {
			case <-last.next:
			case <-ctx.Done():
				return
			}
			if last = b.denied.Load(); strings.Contains(last.text, `"`+subject+`"`) {
				refused <- last.text
				cancel()
				return
			}
		}
	}(b.denied.Load())
	msg, err := b.nc.RequestWithContext(ctx, subject, data)
	if err == nil {
		return msg, nil
	}
	select {
	case text := <-refused:
		return nil, notAllowed(text, err)
	default:
		return nil, err
	}
}
