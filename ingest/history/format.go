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
	ByEnding Format = iota // .csv and .tsv; .ndjson, .jsonl and .json; .parquet
	CSV                    // a header line, then a row a line
	NDJSON                 // one JSON object a line
	Parquet                // columns of Apache Parquet
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
	case Parquet:
		return "parquet"
	}
	return fmt.Sprintf("Format(%d)", int(f))
}

// ParseFormat returns the format of this name: auto, csv, ndjson or parquet.
func ParseFormat(name string) (Format, error) {
	for _, f := range []Format{ByEnding, CSV, NDJSON, Parquet} {
		if name == f.String() {
			return f, nil
		}
	}
	return 0, fmt.Errorf("%q is no format; it is auto, csv, ndjson or parquet", name)
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
	case ".parquet":
		return Parquet, nil
	}
	if path == stdin {
		return 0, errors.New("standard input has no ending that tells its format; say --format csv, ndjson or parquet")
	}
	return 0, fmt.Errorf("%s: the ending %q tells no format; say --format csv, ndjson or parquet", path, filepath.Ext(path))
}
