package gate

import (
	"crypto/sha256"
	"encoding/base64"
	"fmt"
	"io"
	"sync"
	"time"
)

const (
	// sessionTime is how long a browser stays signed in.
	sessionTime = 12 * time.Hour
	// sessionsEach is how many sessions one user has at once; a further one
	// ends the oldest.
	sessionsEach = 16
)

// session is a browser that is signed in.
type session struct {
	name   string
	digest digest // of the token that began it: with that it ends
	began  time.Time
}

// sessions are the browsers that are signed in, by the SHA-256 of what their
// cookie says.
type sessions struct {
	mu struct {
		sync.Mutex
		of map[digest]session
	}
}

// begin returns the value of the cookie of a new session.
func (s *sessions) begin(u User, now time.Time, random io.Reader) (string, error) {
	var raw [tokenBytes]byte
	if _, err := io.ReadFull(random, raw[:]); err != nil {
		return "", fmt.Errorf("reading random bytes: %w", err)
	}
	value := base64.RawURLEncoding.EncodeToString(raw[:])
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.mu.of == nil {
		s.mu.of = map[digest]session{}
	}
	var oldest digest
	count := 0
	for key, other := range s.mu.of {
		switch {
		case over(other, now):
			delete(s.mu.of, key)
		case other.name == u.Name:
			if count++; count == 1 || other.began.Before(s.mu.of[oldest].began) {
				oldest = key
			}
		}
	}
	if count >= sessionsEach {
		delete(s.mu.of, oldest)
	}
	s.mu.of[sha256.Sum256([]byte(value))] = session{name: u.Name, digest: u.digest, began: now}
	return value, nil
}

// user returns the user of a session, if it still runs and the token that
// began it still stands. Looking it up by a hash gives nothing away by its
// time.
func (s *sessions) user(users []User, value string, now time.Time) (User, bool) {
	s.mu.Lock()
	defer s.mu.Unlock()
	key := digestOf(value)
	have, found := s.mu.of[key]
	if !found {
		return User{}, false
	}
	i, known := find(users, have.name)
	if over(have, now) || !known || !users[i].Active() || users[i].digest != have.digest {
		delete(s.mu.of, key)
		return User{}, false
	}
	return users[i], true
}

func (s *sessions) end(value string) {
	s.mu.Lock()
	defer s.mu.Unlock()
	delete(s.mu.of, digestOf(value))
}

func over(s session, now time.Time) bool { return now.Sub(s.began) >= sessionTime }
