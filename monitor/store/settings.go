package store

import (
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// writeSetting keeps a set-up that came into force, under its version.
func writeSetting(tx *bolt.Tx, h *head, setting *monitor.SettingChange) error {
	if setting == nil {
		return nil
	}
	r, err := settingsShelf.in(tx)
	if err != nil {
		return err
	}
	if setting.Version < 0 {
		return fmt.Errorf("set-up version %d: %w", setting.Version, ErrOrder)
	}
	key := number(uint64(setting.Version))
	var known monitor.SettingChange
	found, err := r.getJSON(key, &known)
	if err != nil {
		return err
	}
	if found {
		if known.Digest != setting.Digest {
			return fmt.Errorf("set-up version %d is known with digest %s, not %s: %w",
				setting.Version, known.Digest, setting.Digest, ErrOrder)
		}
		return nil
	}
	h.Settings++
	return r.putJSON(key, setting)
}

// Settings returns all set-ups that were in force, by version.
func (s *Store) Settings() ([]monitor.SettingChange, error) {
	var settings []monitor.SettingChange
	err := s.view(func(tx *bolt.Tx) error {
		var err error
		settings, err = readSettings(tx)
		return err
	})
	return settings, err
}

func readSettings(tx *bolt.Tx) ([]monitor.SettingChange, error) {
	r, err := settingsShelf.in(tx)
	if err != nil {
		return nil, err
	}
	var settings []monitor.SettingChange
	err = r.ForEach(func(key, value []byte) error {
		var setting monitor.SettingChange
		if err := r.openJSON(key, value, &setting); err != nil {
			return err
		}
		settings = append(settings, setting)
		return nil
	})
	return settings, err
}
