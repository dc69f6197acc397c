package bus

import (
	"errors"
	"fmt"
	"strings"

	"github.com/nats-io/nats.go"
)

// denial is what the bus said when it refused the account something. It says
// so apart from the request, which is simply never answered.
type denial struct{ text string }

// noteDenial keeps what an error of the connection says of permissions, and
// reports whether it is one.
func (b *Bus) noteDenial(err error) bool {
	if !errors.Is(err, nats.ErrPermissionViolation) {
		return false
	}
	_, text, found := strings.Cut(err.Error(), "Permissions Violation for ")
	if !found {
		text = err.Error()
	}
	b.denied.Store(&denial{text})
	return true
}

// deniedSince adds to the error of a try that was not answered what the bus
// refused meanwhile. before is what it had refused last when the try began.
func (b *Bus) deniedSince(before *denial, err error) error {
	last := b.denied.Load()
	if err == nil || !passing(err) || last == before {
		return err
	}
	return fmt.Errorf("%w: %s: ingest/bus/README.md lists what each account needs (%w)", ErrNotAllowed, last.text, err)
}
