package config

import (
	"bytes"
	_ "embed" // the sample
)

//go:embed sample.toml
var sample []byte

// Sample returns a commented set-up that itself validates: the invented
// Quillmere Hospitals and the invented payments service Ferrybill.
func Sample() []byte { return bytes.Clone(sample) }
