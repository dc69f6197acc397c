package config

import (
	"net/url"
	"slices"
	"strings"
	"time"
)

// MaxMessageBytes is the largest message that a set-up may allow: the bus
// itself takes no larger ones.
const MaxMessageBytes = 64 << 20

// DefaultClaim is how long a claim holds unless the set-up says otherwise, and
// DefaultCopyEvery how often a store is copied.
const (
	DefaultClaim     = 3 * time.Second
	DefaultCopyEvery = 30 * time.Second
)

func (s section) readBus() Bus {
	s.strict("[bus]")
	b := Bus{}
	b.URL = s.readURL()
	b.Credentials = s.filePath("credentials", "")
	b.User, _ = s.text("user", "")
	b.PasswordFile = s.filePath("password_file", "")
	b.CA = s.filePath("ca", "")
	b.Cert = s.filePath("cert", "")
	b.Key = s.filePath("key", "")
	b.MaxBytes, _ = s.size("max_bytes", 4<<30, 1<<20, 1<<50)
	b.MaxAge, _ = s.duration("max_age", 0, 0, maxTime)
	replicas, _ := s.whole("replicas", 1, 1, 5)
	b.Replicas = int(replicas)
	if n := s.node.fields["url"]; n == nil || n.text == "" {
		for _, key := range []string{"credentials", "user", "password_file", "ca", "cert", "key", "replicas", "share", "claim", "copy_every"} {
			if s.has(key) && (key != "replicas" || b.Replicas > 1) {
				s.fault(key, "means nothing for the embedded bus", "name a bus with url, or leave it out")
			}
		}
		return b
	}
	b.Share, _ = s.truth("share")
	b.Claim, _ = s.duration("claim", DefaultClaim, time.Second, time.Minute)
	b.CopyEvery, _ = s.duration("copy_every", DefaultCopyEvery, 5*time.Second, 24*time.Hour)
	s.pair("user", "password_file")
	s.pair("cert", "key")
	if s.has("credentials") && s.has("user") {
		s.fault("credentials", "and an account of user and password_file exclude each other", "keep one")
	}
	return b
}

// pair reports one of two keys that need each other.
func (s section) pair(a, b string) {
	switch {
	case s.has(a) && !s.has(b):
		s.fault(a, "needs "+b+" beside it", "")
	case s.has(b) && !s.has(a):
		s.fault(b, "needs "+a+" beside it", "")
	}
}

var busSchemes = []string{"nats", "tls", "ws", "wss"}

func (s section) readURL() string {
	n, given, ok := s.get("url", textKind)
	if !given || !ok || n.text == "" {
		return ""
	}
	for one := range strings.SplitSeq(n.text, ",") {
		u, err := url.Parse(strings.TrimSpace(one))
		switch {
		case err != nil || u.Host == "" || !slices.Contains(busSchemes, u.Scheme):
			// The text is not repeated: it may hold a password.
			s.fault("url", "is no address of a bus", `write e.g. "nats://bus.example.org:4222", or tls:// for TLS from the start`)
		case u.User != nil:
			s.fault("url", "holds a user or a password, which must not stand in a set-up", "use credentials, or user and password_file")
		default:
			continue
		}
		return ""
	}
	return n.text
}

func (s section) readLimits() Limits {
	s.strict("[limits]")
	var l Limits
	v, _ := s.whole("max_series", 20_000, 1, 100_000_000)
	l.MaxSeries = int(v)
	v, _ = s.whole("max_ids", 1_000_000, 0, 10_000_000_000)
	l.MaxIDs = int(v)
	v, _ = s.size("max_message", 1<<20, 1<<10, MaxMessageBytes)
	l.MaxMessageBytes = int(v)
	v, _ = s.whole("max_observations", 10_000, 1, 1_000_000)
	l.MaxObservations = int(v)
	l.Memory, _ = s.size("memory", 4<<30, 1<<20, 1<<50)
	l.Archive = s.readArchive()
	return l
}
