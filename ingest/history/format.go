package history

import (
	"errors"
	"fmt"
	"path/filepath"
	"strings"
)

// Format is the format of a file.
type Format int

// The formats.
const (
	ByEnding Format = iota // .csv, or .ndjson, .jsonl and .json
	CSV                    // a header line, then a row a line
	NDJSON                 // one JSON object a line
)

// String returns the format as it is written in options.
func (f Format) String() string {
	switch f {
	case ByEnding:
		return "auto"
	case CSV:
		return "csv"
	case NDJSON:
		return "ndjson"
	}
	return fmt.Sprintf("Format(%d)", int(f))
}

// ParseFormat returns the format of this name: auto, csv or ndjson.
func ParseFormat(name string) (Format, error) {
	for _, f := range []Format{ByEnding, CSV, NDJSON} {
		if name == f.String() {
			return f, nil
		}
	}
	return 0, fmt.Errorf("%q is no format; it is auto, csv or ndjson", name)
}

// of returns the format of a file.
func (f Format) of(path string) (Format, error) {
	if f != ByEnding {
		return f, nil
	}
	switch strings.ToLower(filepath.Ext(path)) {
	case ".csv", ".tsv":
		return CSV, nil
	case ".ndjson", ".jsonl", ".json":
		return NDJSON, nil
	}
	if path == stdin {
		return 0, errors.New("standard input has no ending that tells its format; say --format csv or --format ndjson")
	}
	return 0, fmt.Errorf("%s: the ending %q tells no format; say --format csv or --format ndjson", path, filepath.Ext(path))
}
