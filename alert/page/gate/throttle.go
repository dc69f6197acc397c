package gate

import (
	"net/netip"
	"sync"
	"time"
)

const (
	// wrongAtOnce wrong tokens may come from an address at once, and one more
	// every wrongEvery.
	wrongAtOnce = 10
	wrongEvery  = 6 * time.Second
	// wrongPlaces is how many addresses are told apart; what comes from
	// further ones shares one allowance.
	wrongPlaces = 4096
)

// throttle counts wrong tokens by the address that they come from.
//
// A right token is let in however many wrong ones came before, also from the
// same address: many people may stand behind one, and 256 random bits are not
// found by guessing at any rate (NIST SP 800-63B asks for a limit only below
// 64 bits). The limit keeps a flood of wrong ones out of the log.
type throttle struct {
	mu struct {
		sync.Mutex
		places map[netip.Prefix]*allowance
		rest   allowance
	}
}

// allowance says from when on the address owes nothing: each wrong token adds
// wrongEvery.
type allowance struct{ clear time.Time }

// wrong counts a wrong token. It returns how long to wait before the next, 0
// as long as the address has some left.
func (t *throttle) wrong(remote string, now time.Time) time.Duration {
	t.mu.Lock()
	defer t.mu.Unlock()
	a := t.placeLocked(placeOf(remote), now)
	if a.clear.Before(now) {
		a.clear = now
	}
	if debt := a.clear.Sub(now); debt > (wrongAtOnce-1)*wrongEvery {
		return debt - (wrongAtOnce-1)*wrongEvery
	}
	a.clear = a.clear.Add(wrongEvery)
	return 0
}

func (t *throttle) placeLocked(place netip.Prefix, now time.Time) *allowance {
	if a := t.mu.places[place]; a != nil {
		return a
	}
	if len(t.mu.places) >= wrongPlaces {
		for p, a := range t.mu.places {
			if a.clear.Before(now) {
				delete(t.mu.places, p)
			}
		}
	}
	if len(t.mu.places) >= wrongPlaces {
		return &t.mu.rest
	}
	if t.mu.places == nil {
		t.mu.places = map[netip.Prefix]*allowance{}
	}
	a := &allowance{}
	t.mu.places[place] = a
	return a
}

// placeOf returns what counts as one address: of IPv6 the network of 64 bits
// that one subscriber has.
func placeOf(remote string) netip.Prefix {
	at, err := netip.ParseAddrPort(remote)
	if err != nil {
		return netip.Prefix{}
	}
	ip := at.Addr().Unmap().WithZone("")
	bits := ip.BitLen()
	if ip.Is6() {
		bits = 64
	}
	return netip.PrefixFrom(ip, bits).Masked()
}
