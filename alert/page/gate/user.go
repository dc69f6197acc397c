package gate

import (
	"crypto/sha256"
	"crypto/subtle"
	"encoding/base64"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"strings"
	"time"
	"unicode"
	"unicode/utf8"
)

// Role says what a user may do.
type Role int

// The roles, from the least to the most.
const (
	Read Role = iota // look
	Act              // look, and act on alerts
)

// Roles are the roles as they are written.
var Roles = []string{"read", "act"}

// String returns the role as it is written.
func (r Role) String() string {
	if r < 0 || int(r) >= len(Roles) {
		return fmt.Sprintf("Role(%d)", int(r))
	}
	return Roles[r]
}

// ParseRole reads a role.
func ParseRole(text string) (Role, error) {
	for i, word := range Roles {
		if text == word {
			return Role(i), nil
		}
	}
	return Read, fmt.Errorf("%q is no role: it is read (look) or act (look, and act on alerts)", text)
}

// User is somebody who may sign in, or could once.
type User struct {
	// Name as acts carry it.
	Name string
	Role Role
	// Added is when the user got the present token; Revoked, if not zero, when
	// it was taken back.
	Added   time.Time
	Revoked time.Time

	digest digest
}

// Active reports whether the user may sign in.
func (u *User) Active() bool { return u.Revoked.IsZero() }

// digest is what is kept of a token: its SHA-256. A slow hash would guard
// nothing more: those are for passwords, which can be guessed; a token has 256
// random bits, which can't, and its check must cost little, so that a flood of
// wrong ones costs little.
type digest [sha256.Size]byte

func digestOf(token string) digest { return sha256.Sum256([]byte(token)) }

func (d digest) String() string { return hex.EncodeToString(d[:]) }

func parseDigest(text string) (d digest, err error) {
	raw, err := hex.DecodeString(text)
	if err != nil || len(raw) != len(d) {
		return d, fmt.Errorf("is not a SHA-256 of %d hexadecimal digits", 2*len(d))
	}
	return digest(raw), nil
}

// tokenMark begins a token, so that people and programs that look for secrets
// in the wrong place know one.
const tokenMark = "tailbell-token-"

// tokenBytes is how many random bytes a token has.
const tokenBytes = 32

// newToken makes a token from a source of random bytes.
func newToken(random io.Reader) (string, error) {
	var raw [tokenBytes]byte
	if _, err := io.ReadFull(random, raw[:]); err != nil {
		return "", fmt.Errorf("reading random bytes: %w", err)
	}
	return tokenMark + base64.RawURLEncoding.EncodeToString(raw[:]), nil
}

// holder returns the active user whose token it is. The time that it takes
// tells nothing but how many users there are.
func holder(users []User, token string) (User, bool) {
	asked, at := digestOf(token), -1
	for i := range users {
		same := subtle.ConstantTimeCompare(asked[:], users[i].digest[:])
		at = subtle.ConstantTimeSelect(same, i, at)
	}
	if at < 0 || !users[at].Active() {
		return User{}, false
	}
	return users[at], true
}

// maxName is how many characters a name may have.
const maxName = 100

// checkName says why a text can't be a user's name.
func checkName(name string) error {
	strange := func(c rune) bool { return c != ' ' && !unicode.IsPrint(c) }
	switch {
	case name == "":
		return errors.New("the name is empty: acts carry it")
	case !utf8.ValidString(name) || strings.ContainsFunc(name, strange):
		return fmt.Errorf("the name %q has characters that can't be seen: leave them out", name)
	case utf8.RuneCountInString(name) > maxName:
		return fmt.Errorf("the name has more than %d characters: shorten it", maxName)
	case strings.Join(strings.Fields(name), " ") != name:
		return fmt.Errorf("the name %q has spaces in front, behind, or in a row: leave them out", name)
	}
	return nil
}
