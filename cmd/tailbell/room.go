package main

import (
	"context"
	"errors"
	"os"
	"time"
)

const (
	// roomPause lies between two looks at whether the bus stores.
	roomPause = time.Second
	// roomBytes is how much room there must be before it is tried again.
	roomBytes = 1 << 20
)

// errAgain ends a daemon that is to be opened again in the same process.
var errAgain = errors.New("the embedded bus has to be started again")

// watchRoom watches whether the embedded bus stores. One that has met a full
// disk refuses everything until it is started again: so that is done once
// there is room.
func (d *daemon) watchRoom(ctx context.Context) error {
	tick := time.NewTicker(roomPause)
	defer tick.Stop()
	told := false
	for {
		select {
		case <-tick.C:
		case <-ctx.Done():
			return nil
		}
		why := d.bus.Broken()
		if why == "" {
			continue
		}
		if !told {
			told = true
			text := "the bus stores nothing, publishers get no acknowledgement: " + why + "; it goes on by itself when there is room"
			d.log.Error().Msg(text)
			d.troubles.set(troubleNoRoom, everyPartition, text)
		}
		if tryRoom(d.setup.Folder) == nil {
			return errAgain
		}
	}
}

// tryRoom says why nothing can be stored in a folder.
func tryRoom(folder string) (err error) {
	f, err := os.CreateTemp(folder, "room-*.tmp")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, os.Remove(f.Name())) }()
	_, err = f.Write(make([]byte, roomBytes))
	return errors.Join(err, f.Sync(), f.Close())
}

// awaitRoom waits until there is room.
func awaitRoom(ctx context.Context, folder string) error {
	tick := time.NewTicker(roomPause)
	defer tick.Stop()
	for tryRoom(folder) != nil {
		select {
		case <-tick.C:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
	return nil
}
