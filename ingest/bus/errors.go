package bus

import (
	"errors"
	"fmt"
)

// Errors of Open and Dial.
var (
	// ErrLocked is returned by Open when another process holds the folder.
	ErrLocked = errors.New("the folder is in use")
	// ErrNoDaemon is returned by Dial when no daemon runs on the folder.
	ErrNoDaemon = errors.New("no daemon is running")
	// ErrPartitionsDiffer is returned when the stream was made for another
	// number of partitions or another number of key parts.
	ErrPartitionsDiffer = errors.New("the stream's partitions differ from the set-up's")
	// ErrDividing is returned while the stream is being divided into another
	// number of partitions.
	ErrDividing = errors.New("a division is under way")
	// ErrStreamDiffers is returned when a stream exists whose settings would
	// lose or change messages, or that is not Tailbell's.
	ErrStreamDiffers = errors.New("the stream differs from what is needed")
	// ErrNotAllowed is returned when the bus refuses the account what is
	// needed.
	ErrNotAllowed = errors.New("the bus does not allow this to the account of the set-up")
)

// Errors of publishing.
var (
	// ErrFull is returned when the stream, or the store under it, has reached
	// its limit. Nothing of the message was stored.
	ErrFull = errors.New("the stream is full")
	// ErrTooLarge is returned for a message that is larger than the bus takes.
	ErrTooLarge = errors.New("the message is too large")
	// ErrNoPartition is returned for a partition that the deployment lacks.
	ErrNoPartition = errors.New("no such partition")
)

// Errors of reading.
var (
	// ErrBeyondEnd is returned when a position lies past the stream's end: the
	// stream lost its tail, or it is another stream.
	ErrBeyondEnd = errors.New("the position lies beyond the stream's end")
	// ErrStreamReplaced is returned when the stream was deleted, or deleted and
	// made anew, while it was being read.
	ErrStreamReplaced = errors.New("the stream was replaced")
	// ErrNoMessage is returned by At for a position that holds no message.
	ErrNoMessage = errors.New("no message at this position")
	// ErrClosed is returned once the Bus has been closed.
	ErrClosed = errors.New("the bus is closed")
)

// LockedError says who holds a folder. It is an ErrLocked.
type LockedError struct {
	Folder string
	PID    int // 0 if not known
}

func (e *LockedError) Error() string {
	who := "another process"
	if e.PID > 0 {
		who = fmt.Sprintf("process %d", e.PID)
	}
	return fmt.Sprintf("the folder %s is in use by %s: "+
		"stop that process first, or name another folder in the set-up", e.Folder, who)
}

// Is reports whether target is ErrLocked.
func (e *LockedError) Is(target error) bool { return target == ErrLocked }

// BeyondEndError says how far a position lies past the end of a stream. It is
// an ErrBeyondEnd.
type BeyondEndError struct {
	Stream string
	After  uint64 // the position after which reading was to go on
	End    uint64 // the last sequence of the stream
}

func (e *BeyondEndError) Error() string {
	return fmt.Sprintf("the stream %s ends at %d, but %d was already read: "+
		"the stream lost its tail or was replaced by another one; "+
		"restore it, or rebuild the store from the stream", e.Stream, e.End, e.After)
}

// Is reports whether target is ErrBeyondEnd.
func (e *BeyondEndError) Is(target error) bool { return target == ErrBeyondEnd }
