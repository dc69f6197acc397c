package config

import (
	"archive/zip"
	"bytes"
	_ "embed" // the zone data
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"sync"
	"time"
)

// ZoneDataVersion is the version of the IANA time zone database that is
// embedded. Slots follow it and nothing else: the machine's own zone data are
// never read, so the same set-up means the same slots everywhere.
const ZoneDataVersion = "2025c"

// zoneArchive is lib/time/zoneinfo.zip of the Go 1.26 distribution, compiled
// from the IANA time zone database, which is in the public domain.
//
//go:embed zoneinfo/zoneinfo.zip
var zoneArchive []byte

// ErrZone is returned for a name that the IANA time zone database lacks.
var ErrZone = errors.New("not a zone of the IANA time zone database")

var openZones = sync.OnceValues(func() (*zip.Reader, error) {
	return zip.NewReader(bytes.NewReader(zoneArchive), int64(len(zoneArchive)))
})

// LoadZone returns the zone of an IANA name such as "Europe/Berlin" from the
// embedded data. "Local" and "" are no zones.
func LoadZone(name string) (*time.Location, error) {
	if name == "UTC" {
		return time.UTC, nil
	}
	if name == "" || strings.HasSuffix(name, "/") {
		return nil, ErrZone
	}
	archive, err := openZones()
	if err != nil {
		return nil, fmt.Errorf("embedded zone data: %w", err)
	}
	for _, f := range archive.File {
		if f.Name == name {
			return loadZoneFile(f)
		}
	}
	return nil, ErrZone
}

func loadZoneFile(f *zip.File) (*time.Location, error) {
	r, err := f.Open()
	if err != nil {
		return nil, fmt.Errorf("embedded zone data: %w", err)
	}
	data, err := io.ReadAll(r)
	if err = errors.Join(err, r.Close()); err != nil {
		return nil, fmt.Errorf("embedded zone data: %w", err)
	}
	zone, err := time.LoadLocationFromTZData(f.Name, data)
	if err != nil {
		return nil, fmt.Errorf("embedded zone data: %w", err)
	}
	return zone, nil
}

// zoneNames returns every name that LoadZone knows, in order.
func zoneNames() []string {
	archive, err := openZones()
	if err != nil {
		return nil
	}
	names := []string{"UTC"}
	for _, f := range archive.File {
		if !strings.HasSuffix(f.Name, "/") {
			names = append(names, f.Name)
		}
	}
	slices.Sort(names)
	return slices.Compact(names)
}
