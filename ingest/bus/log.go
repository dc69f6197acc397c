package bus

import (
	"fmt"
	"slices"
	"strings"
	"sync"

	"github.com/rs/zerolog"
)

// serverLog passes what the embedded server has to say on to a logger. The
// server's notices are of no interest to the user of the daemon: they are
// logged as debug.
type serverLog struct {
	log zerolog.Logger
	mu  struct {
		sync.Mutex
		fatal  string // the last fatal message
		broken string // why nothing more is stored
	}
}

// broken returns why the server stores nothing any more, "" if it does.
func (l *serverLog) broken() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.mu.broken
}

// What the server says when it gives up storing. It says so nowhere else, and
// does not try again when there is room: only a new start does.
var breakdowns = []string{"Critical write error", "will be DISABLED"}

// fatal returns the server's last fatal message, "" if there was none.
func (l *serverLog) fatal() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.mu.fatal
}

// Noticef logs a notice.
func (l *serverLog) Noticef(format string, v ...any) {
	l.log.Debug().Msgf(format, v...)
}

// plaintext begins the server's warning that a password is kept unhashed. The
// embedded server's are random, live as long as the process, and stand in no
// file but control.json (0600).
const plaintext = "Plaintext passwords detected"

// Warnf logs a warning.
func (l *serverLog) Warnf(format string, v ...any) {
	if strings.HasPrefix(format, plaintext) {
		return
	}
	l.log.Warn().Msgf(format, v...)
}

// Errorf logs an error.
func (l *serverLog) Errorf(format string, v ...any) {
	text := fmt.Sprintf(format, v...)
	if slices.ContainsFunc(breakdowns, func(one string) bool { return strings.Contains(text, one) }) {
		l.mu.Lock()
		l.mu.broken = text
		l.mu.Unlock()
	}
	l.log.Error().Msgf(format, v...)
}

// Fatalf logs an error after which the server doesn't work. The process goes
// on: whoever started the server decides.
func (l *serverLog) Fatalf(format string, v ...any) {
	l.mu.Lock()
	l.mu.fatal = fmt.Sprintf(format, v...)
	l.mu.Unlock()
	l.log.Error().Msgf(format, v...)
}

// Debugf drops the server's debug messages: they name every client and request.
func (l *serverLog) Debugf(string, ...any) {}

// Tracef drops the server's traces: they hold message contents.
func (l *serverLog) Tracef(string, ...any) {}
