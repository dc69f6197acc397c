package store

import (
	"errors"
	"syscall"

	bolterrors "go.etcd.io/bbolt/errors"
)

// Errors of Create, Open and OpenReadOnly. A file that is refused is left as
// it is, byte for byte.
var (
	// ErrForeign is returned when the file is no store: another program's
	// file, or no database at all.
	ErrForeign = errors.New("not a Tailbell store; left untouched: " +
		"name another folder, or move that file away if nobody needs it")
	// ErrDamaged is returned when the file was a store but its pages, frames
	// or checksums contradict each other. Any read can return it.
	ErrDamaged = errors.New("the store is damaged; left untouched: " +
		"put back a copy of it (tailbell store copy makes them), " +
		"or move the file away so that it is built again from the stream")
	// ErrFormatTooNew is returned when a later version of Tailbell wrote the file.
	ErrFormatTooNew = errors.New("the store was written by a later version of Tailbell; left untouched: " +
		"use that version")
	// ErrIdentity is returned when the store belongs to another deployment or
	// partition, or to another number of partitions.
	ErrIdentity = errors.New("the store belongs to another deployment or partition; left untouched: " +
		"correct the folder, the name or the partitions in the set-up")
	// ErrInUse is returned when another process holds the file.
	ErrInUse = errors.New("the store is in use by another process: stop that one first")
)

// Errors of Commit and the other writes.
var (
	// ErrPosition is returned when a commit does not move the position
	// forward, or its mark belongs to another position.
	ErrPosition = errors.New("the position of a commit must lie beyond the stored one")
	// ErrOrder is returned when changes break the order that monitor.Changes
	// promises. It is a fault of the program.
	ErrOrder = errors.New("the changes are out of order: this is a fault of the program, please report it")
	// ErrFull is returned when there is no room on the disk or under
	// Options.MaxBytes. Nothing was stored; the same call may be tried again.
	ErrFull = errors.New("no room left for the store: make room on its disk, it goes on by itself")
	// ErrFailed is returned when a write broke off so that only the file knows
	// whether it holds, and by every write after that.
	ErrFailed = errors.New("a write to the store broke off: close the store and open it again")
	// ErrReadOnly is returned by every write to a store opened by OpenReadOnly.
	ErrReadOnly = errors.New("the store was opened for reading only")
	// ErrClosed is returned when the store is used after Close.
	ErrClosed = errors.New("the store is closed")
	// ErrEpoch is returned when an owner epoch does not lie beyond the stored one.
	ErrEpoch = errors.New("the owner epoch must lie beyond the stored one: another owner has taken over since")
	// ErrStream is returned when another stream than the known one is set.
	ErrStream = errors.New("the stream is not the one that this store was filled from: " +
		"find out why; a copy that fits the stream, or accepting the new stream, is the way on")
	// ErrNoOutlet is returned when an outlet is not registered.
	ErrNoOutlet = errors.New("no such outlet: it must be registered first")
	// ErrNotFound is returned when there is no alert, refusal or such under a
	// name or number.
	ErrNotFound = errors.New("not in the store")
)

// translate turns the errors of bbolt and of the disk into ours; during says
// that a commit was under way, so that an unknown error leaves doubt.
func translate(err error, during bool) error {
	switch {
	case err == nil:
		return nil
	case errors.Is(err, bolterrors.ErrDatabaseNotOpen):
		return ErrClosed
	case errors.Is(err, bolterrors.ErrDatabaseReadOnly):
		return ErrReadOnly
	case errors.Is(err, bolterrors.ErrMaxSizeReached),
		errors.Is(err, syscall.ENOSPC),
		errors.Is(err, syscall.EDQUOT),
		errors.Is(err, syscall.EFBIG):
		return errors.Join(ErrFull, err)
	case during:
		return errors.Join(ErrFailed, err)
	}
	return err
}
