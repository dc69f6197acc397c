package config

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"github.com/pelletier/go-toml/v2"
)

// Bounds of a set-up, so that a slip of the pen can't ask for the impossible.
const (
	maxFileBytes  = 16 << 20
	maxPartitions = 1024
	maxIndicators = 10_000
	maxPatterns   = 1000
	maxBaselines  = 100_000
	maxWindows    = 32
	maxSlots      = 100_000
	maxTime       = 36_600 * 24 * time.Hour // a hundred years
)

// Parse reads a set-up. It is pure: the same text gives the same set-up.
// Relative paths are left as they are written. The error is of type Faults and
// lists everything that is wrong; file is only the name that it gives.
func Parse(text []byte, file string) (*Setup, error) {
	return parse(text, &collector{file: file})
}

func parse(text []byte, c *collector) (*Setup, error) {
	if len(text) > maxFileBytes {
		c.add(nil, "", "is larger than "+FormatSize(maxFileBytes), "")
		return nil, c.err()
	}
	// An editor's byte order mark is no part of TOML.
	plain := bytes.TrimPrefix(text, []byte("\ufeff"))
	root, whole := readTree(bytes.Clone(plain), c)
	if !whole {
		return nil, c.err()
	}
	s := readSetup(section{c, root, ""})
	if len(c.faults) == 0 {
		c.checkTOML(plain)
	}
	if err := c.err(); err != nil {
		return nil, err
	}
	s.Text = bytes.Clone(text)
	digest := sha256.Sum256(text)
	s.Digest = hex.EncodeToString(digest[:])
	return s, nil
}

// checkTOML lets the library judge what the tree reader passed: rules of TOML
// that no readable set-up comes near, such as dates that don't exist.
func (c *collector) checkTOML(text []byte) {
	var all map[string]any
	err := toml.Unmarshal(text, &all)
	if err == nil {
		return
	}
	at := (*node)(nil)
	var decode *toml.DecodeError
	if errors.As(err, &decode) {
		line, column := decode.Position()
		at = &node{line: line, column: column}
	}
	c.add(at, "", "is not valid TOML: "+err.Error(), "")
}

// Load reads the set-up in a file. Relative paths in it (the folder, the bus's
// files) are taken from the file's own folder. The error is of type Faults if
// the file could be read.
func Load(path string) (*Setup, error) {
	text, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("no set-up: %w; \"tailbell config sample\" prints one to begin with", err)
	}
	if err != nil {
		return nil, fmt.Errorf("read the set-up: %w", err)
	}
	s, err := Parse(text, path)
	if err != nil {
		return nil, err
	}
	s.resolve(filepath.Dir(path))
	return s, nil
}

func (s *Setup) resolve(folder string) {
	for _, p := range []*string{&s.Folder, &s.Bus.Credentials, &s.Bus.PasswordFile, &s.Bus.CA, &s.Bus.Cert, &s.Bus.Key, &s.Page.Users, &s.Page.Cert, &s.Page.Key} {
		if *p != "" && !filepath.IsAbs(*p) {
			*p = filepath.Join(folder, *p)
		}
	}
	for i := range s.Outlets {
		o := &s.Outlets[i]
		paths := []*string{&o.SecretFile, &o.Mail.CA, &o.Mail.PasswordFile}
		if len(o.Command) > 0 {
			paths = append(paths, &o.Command[0])
		}
		for _, p := range paths {
			if *p != "" && !filepath.IsAbs(*p) {
				*p = filepath.Join(folder, *p)
			}
		}
	}
}

func readSetup(top section) *Setup {
	top.strict("")
	s := &Setup{}
	s.Name, _ = top.plainName("name", 32)
	s.Folder = top.filePath("folder", "tailbell-data")
	partitions, _ := top.whole("partitions", 1, 1, maxPartitions)
	keyParts, _ := top.whole("key_parts", 1, 1, MaxSeriesParts)
	s.Partitions, s.KeyParts = int(partitions), int(keyParts)
	clock := top.sub("time")
	clock.strict("[time]")
	mode, _ := clock.word("mode", 0, "live", "history")
	s.History = mode == 1
	bus := top.sub("bus")
	s.Bus = bus.readBus()
	limits := top.sub("limits")
	s.Limits = limits.readLimits()
	s.Indicators = readIndicators(top, s)
	s.Outlets = readOutlets(top, s.Indicators)
	checkRemind(top, s)
	s.Page = top.sub("page").readPage(top.has("page"))
	if len(top.faults) == 0 {
		s.checkMemory(limits)
	}
	return s
}

func readIndicators(top section, s *Setup) []Indicator {
	tables := top.tables("indicator", maxIndicators)
	if !top.has("indicator") {
		top.fault("indicator", "is missing: nothing would be monitored", `add a table [[indicator]]; "tailbell config sample" shows one`)
	}
	names, patterns := map[string]string{}, map[Pattern]string{}
	all := make([]Indicator, 0, len(tables))
	for _, t := range tables {
		in := t.readIndicator()
		t.compareNames(&in, names, patterns)
		t.checkPeers(&in)
		t.checkSums(&in, s)
		all = append(all, in)
	}
	return all
}

// compareNames reports names and patterns that an indicator shares with those
// before it. The maps say where each was seen first.
func (s section) compareNames(in *Indicator, names map[string]string, patterns map[Pattern]string) {
	switch first, seen := names[in.Name]; {
	case seen:
		s.fault("name", fmt.Sprintf("%q is already the name of %s", in.Name, first), "choose another")
	case in.Name != "":
		names[in.Name] = s.path
	}
	for _, p := range in.Series {
		if first, seen := patterns[p]; seen {
			s.fault("series", fmt.Sprintf("%q stands in %s too, and a series belongs to exactly one indicator", p, first),
				"make the patterns differ")
			continue
		}
		patterns[p] = s.path
	}
}

// tables returns a list of tables; a single table stands for a list of one.
func (s section) tables(name string, most int) []section {
	n := s.node.fields[name]
	if n != nil && n.kind == tableKind {
		return []section{{s.collector, n, s.item(name, 0)}}
	}
	items, _ := s.list(name, most)
	var all []section
	for i, item := range items {
		if item.kind != tableKind {
			s.wrongKind(item, s.item(name, i), tableKind)
			continue
		}
		all = append(all, section{s.collector, item, s.item(name, i)})
	}
	return all
}
