package bus

import (
	"time"

	"tailbell/config"
)

const (
	mib = 1 << 20

	// defaultMaxBytes limits the input stream if the set-up doesn't.
	defaultMaxBytes = 8 << 30
	// defaultMaxMessage is the largest data of a message if the set-up doesn't
	// say.
	defaultMaxMessage = mib
	// leastMaxMessage leaves room for settings and alerts, whatever limit
	// observations have.
	leastMaxMessage = mib
	// headerRoom is what headers may add to a message.
	headerRoom = 16 << 10

	alertsMaxBytes = 1 << 30
	alertsMaxAge   = 366 * 24 * time.Hour
	// alertsRepeats is how long the bus remembers the keys of alert steps.
	alertsRepeats = 24 * time.Hour
	// inRepeats is how long it remembers the ids of acts and settings.
	inRepeats = 2 * time.Minute

	// leastPayload is the smallest limit of one message of any kind, replies
	// to commands among them.
	leastPayload = 8 * mib
	memoryLimit  = 64 * mib
	// storeLimit is no limit: each stream has its own, only the daemon makes
	// streams, and a sum of today's limits would keep the server from changing
	// a stream that was made under larger ones.
	storeLimit = 1 << 50
)

// maxData is the largest data of a message with observations, in bytes.
func maxData(setup *config.Setup) int {
	if setup.Limits.MaxMessageBytes > 0 {
		return setup.Limits.MaxMessageBytes
	}
	return defaultMaxMessage
}

// maxStored is the largest message, headers included, that the input stream
// takes.
func maxStored(setup *config.Setup) int {
	return max(maxData(setup), leastMaxMessage) + headerRoom
}

func maxBytes(setup *config.Setup) int64 {
	if setup.Bus.MaxBytes > 0 {
		return setup.Bus.MaxBytes
	}
	return defaultMaxBytes
}

func partitions(setup *config.Setup) int { return max(1, setup.Partitions) }

func keyParts(setup *config.Setup) int { return max(1, setup.KeyParts) }
