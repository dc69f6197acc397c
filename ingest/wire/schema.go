package wire

import (
	"bytes"
	_ "embed"
)

//go:embed observation.schema.json
var observationSchema []byte

// Schema returns the JSON Schema (draft 2020-12) of one observation. What a
// schema can't say is in its descriptions.
func Schema() []byte { return bytes.Clone(observationSchema) }
