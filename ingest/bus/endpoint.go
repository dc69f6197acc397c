package bus

import (
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
)

const (
	endpointFile   = "control.json"
	endpointFormat = 1
)

// endpoint is where and how other commands reach the embedded bus of a running
// daemon. It is written to a file that only its owner can read.
type endpoint struct {
	Format     int    `json:"format"`
	Deployment string `json:"deployment"`
	PID        int    `json:"pid"`
	URL        string `json:"url"`
	User       string `json:"user"`
	Password   string `json:"password"`
}

// write puts the endpoint into the folder, whole or not at all.
func (e endpoint) write(folder string) (err error) {
	text, err := json.MarshalIndent(e, "", "  ")
	if err != nil {
		return fmt.Errorf("encoding the endpoint: %w", err)
	}
	f, err := os.CreateTemp(folder, endpointFile+".*.tmp") // 0600
	if err != nil {
		return fmt.Errorf("writing the endpoint: %w", err)
	}
	defer func() {
		if err != nil {
			err = errors.Join(fmt.Errorf("writing the endpoint: %w", err), os.Remove(f.Name()))
		}
	}()
	_, err = f.Write(append(text, '\n'))
	if err == nil {
		err = f.Sync()
	}
	if err = errors.Join(err, f.Close()); err != nil {
		return err
	}
	return os.Rename(f.Name(), filepath.Join(folder, endpointFile))
}

// readEndpoint reads the endpoint of a folder; the error is an
// os.ErrNotExist if there is none.
func readEndpoint(folder string) (endpoint, error) {
	var e endpoint
	path := filepath.Join(folder, endpointFile)
	text, err := os.ReadFile(path)
	if err != nil {
		return e, fmt.Errorf("reading the endpoint of the daemon: %w", err)
	}
	if err := json.Unmarshal(text, &e); err != nil {
		return e, fmt.Errorf("reading %s: %w", path, err)
	}
	if e.Format != endpointFormat {
		return e, fmt.Errorf("%s has format %d, this program knows %d: "+
			"use the program that runs the daemon", path, e.Format, endpointFormat)
	}
	return e, nil
}

// removeEndpoint removes what a daemon left, whether it lived to clean up or
// not.
func removeEndpoint(folder string) error {
	left, err := filepath.Glob(filepath.Join(folder, endpointFile+".*.tmp"))
	if err != nil {
		return err
	}
	for _, path := range append(left, filepath.Join(folder, endpointFile)) {
		if err := os.Remove(path); err != nil && !errors.Is(err, os.ErrNotExist) {
			return fmt.Errorf("removing an endpoint: %w", err)
		}
	}
	return nil
}
