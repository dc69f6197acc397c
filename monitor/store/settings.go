package store

import (
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// writeSettings keeps the set-ups that came into force, under their versions.
func writeSettings(tx *bolt.Tx, h *head, settings []monitor.SettingChange) error {
	if len(settings) == 0 {
		return nil
	}
	r, err := settingsShelf.in(tx)
	if err != nil {
		return err
	}
	for i := range settings {
		if err := writeSetting(r, h, &settings[i]); err != nil {
			return err
		}
	}
	return nil
}

func writeSetting(r rack, h *head, setting *monitor.SettingChange) error {
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
