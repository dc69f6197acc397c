package main

import (
	"context"
	"fmt"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// announceSetup publishes the set-up into the partition's stream, unless it is
// the one last published there. One that a store could not take is an error.
func announceSetup(ctx context.Context, b *bus.Bus, setup *config.Setup, partition int) error {
	raw, found, err := b.LastSetting(ctx, partition)
	if err != nil {
		return err
	}
	if found {
		old, err := config.Parse(raw.Data, "the set-up in force")
		if err == nil && old.Digest == setup.Digest {
			return nil
		}
		if err == nil {
			if why := monitor.Unfit(old, setup); why != "" {
				return unfitSetup(why)
			}
		}
	}
	_, err = b.Publish(ctx, bus.Outgoing{Partition: partition, Kind: bus.Setting, Data: setup.Text})
	return err
}

// followsStored refuses a set-up that can't follow the one that the store was
// built by: the stream may have been trimmed, or have dropped by age what says
// so too.
func followsStored(st *store.Store, setup *config.Setup) error {
	settings, err := st.Settings()
	if err != nil || len(settings) == 0 {
		return err
	}
	last := settings[len(settings)-1]
	if last.Digest == setup.Digest {
		return nil
	}
	old, err := config.Parse(last.Text, "the set-up in force")
	if err != nil {
		return nil //nolint:nilerr // of another version, which the engine judges
	}
	if why := monitor.Unfit(old, setup); why != "" {
		return unfitSetup(why)
	}
	return nil
}

func unfitSetup(why string) error {
	return fmt.Errorf("this set-up can't follow the one in force: %s\n"+
		"Keep the old values, or begin anew with another folder and name", why)
}
