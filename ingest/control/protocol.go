package control

import (
	"encoding/json"
	"fmt"
	"time"
)

// Version is the version of the protocol.
const Version = 1

const (
	maxRequest = 64 << 10
	// replyRoom is what the envelope and the bus need beside a reply's body.
	replyRoom = 4 << 10
	// longest is the longest that a request may be handled, and what a caller
	// without a deadline gets.
	longest = 30 * time.Second
	// atOnce is how many requests are handled at a time.
	atOnce = 8
)

// Code is a stable code of an error.
type Code string

// Codes of this package.
const (
	BadRequest    Code = "bad_request"     // not a request of this protocol, or too large
	BadVersion    Code = "bad_version"     // a version that the daemon doesn't speak
	Busy          Code = "busy"            // too many requests at a time: try again
	TimedOut      Code = "timed_out"       // not done within the time given
	Failed        Code = "failed"          // the handler failed, for no reason with a code of its own
	ReplyTooLarge Code = "reply_too_large" // ask for less
	NoAnswer      Code = "no_answer"       // nobody answers this verb
)

// Error is an error as it crosses the bus.
type Error struct {
	Code Code   `json:"code"`
	Text string `json:"text"`
}

func (e *Error) Error() string { return e.Text }

// Errorf makes an error with a code.
func Errorf(code Code, format string, args ...any) *Error {
	return &Error{Code: code, Text: fmt.Sprintf(format, args...)}
}

// request is a request on the bus.
type request struct {
	Version  int             `json:"version"`
	WithinMS int64           `json:"within_ms,omitempty"`
	Body     json.RawMessage `json:"body,omitempty"`
}

// reply is a reply on the bus.
type reply struct {
	Version int             `json:"version"`
	Body    json.RawMessage `json:"body,omitempty"`
	Error   *Error          `json:"error,omitempty"`
}
