package bus

import "time"

// Raw is one message as the bus stores it.
type Raw struct {
	// Position is the message's sequence in the stream, from 1.
	Position uint64
	// Stored is when the bus stored it.
	Stored time.Time
	// Subject ends in obs, act, set or tick.
	Subject string
	Header  map[string][]string
	// Data is the reader's to keep and to change.
	Data []byte
}
