package main

import (
	"bytes"
	"fmt"
	"io/fs"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	bolt "go.etcd.io/bbolt"

	"tailbell/ingest/bus"
)

// Names that are looked for afterwards; all are invented.
const (
	nobody = "Tannquist" // in places that the contract lacks
	person = "Brindelow" // in an act's own fields, which are kept
)

// leaks are messages with the name in every place that the contract lacks.
func leaks() []bus.Outgoing {
	const sound = `"series":"quillmere-east/ward-1/fall","start":"2026-03-02T00:00:00Z","end":"2026-03-03T00:00:00Z","events":1`
	var list []bus.Outgoing
	for _, data := range []string{
		`{` + sound + `,"patient":"Merle Tannquist"}`,
		`{` + sound + `,"Merle Tannquist":1}`,
		`{` + sound + `,"note":{"a":["Tannquist"]}}`,
		`{` + sound + `,"exposure":"Tannquist"}`,
		`{` + sound + `,"exposure":Tannquist}`,
		`{` + sound + `,"retracted":"Tannquist"}`,
		`{` + sound + `,"reported":"Tannquist"}`,
		`{` + sound + `,"id":"Tannquist\u0007"}`,
		`{` + sound + `,"id":["Tannquist"]}`,
		`{` + sound + `,"exposure":1,"exposure":"Tannquist"}`,
		`{"series":"Merle Tannquist","at":"2026-03-02T00:00:00Z","events":1}`,
		`{"series":"quillmere-east/Merle Tannquist/fall","at":"2026-03-02T00:00:00Z","events":1}`,
		`{"series":"quillmere-east/ward-1/fall","at":"Tannquist","events":1}`,
		`Merle Tannquist fell at noon`, `"Tannquist"`, `["Tannquist"]`, `{"Tannquist"`, "Tannquist\xff", "[{Tannquist}, {", "\"Tannquist",
		`{"specversion":"1.0","id":"1","source":"/q","type":"t","Tannquist":"x","data":{}}`,
		`{"specversion":"1.0","id":"1","source":"/q","type":"t","patient":"Tannquist","subject":"Tannquist","data":{` + sound + `}}`,
		`{"specversion":"Tannquist","id":"1","source":"/q","type":"t","data":{}}`,
		`{"specversion":"1.0","id":"1","source":"Tann quist Tannquist%zz","type":"t","data":{}}`,
		`{"specversion":"1.0","id":"1","source":"/q","type":"t","time":"Tannquist","data":{}}`,
		`{"specversion":"1.0","id":"1","source":"/q","type":"t","datacontenttype":"Tannquist","data":{}}`,
	} {
		list = append(list, bus.Outgoing{Data: []byte(data)})
	}
	envelope := map[string][]string{"ce-specversion": {"1.0"}, "ce-id": {"1"}, "ce-source": {"/q"}, "ce-type": {"t"}}
	for _, header := range []map[string][]string{
		{"Ward-Doctor": {"Tannquist"}},
		{"ce-patient": {"Tannquist"}},
		{"Tailbell-Time": {"Tannquist"}},
		{"Tailbell-Live": {"Tannquist"}},
		{"Content-Type": {"application/cloudevents-Tannquist"}},
		{"Content-Type": {"Tannquist/x"}},
		{"ce-id": {"Tannquist"}},
		{"ce-Tannquist": {"%zz"}},
		{"ce-Tannquist": {"a", "b"}},
		{"ce-tannquist": {"Tannquist"}},
	} {
		list = append(list, bus.Outgoing{Data: []byte(`{` + sound + `}`), Header: header})
		whole := maps.Clone(envelope)
		maps.Copy(whole, header)
		list = append(list, bus.Outgoing{Data: []byte(`{` + sound + `}`), Header: whole})
	}
	for _, act := range []string{
		`{"act":"note","alert":"x","by":"A","why":"b","patient":"Tannquist"}`,
		`{"act":"Tannquist","alert":"x","by":"A"}`, `{"act":"note","Tannquist":"x"}`, `Tannquist`,
		`{"act":"note","series":"Merle Tannquist","direction":"upper","by":"A","why":"b"}`,
		`{"act":"note","series":"a/b","direction":"Tannquist","by":"A","why":"b"}`,
		`{"act":"note","alert":"x","by":"A","why":"b","at":"Tannquist"}`,
	} {
		list = append(list, bus.Outgoing{Kind: bus.Act, Data: []byte(act)})
	}
	return append(list, bus.Outgoing{Kind: bus.Tick, Data: []byte("Tannquist")})
}

// TestNoNameIsKept sends names where the contract has no place for one, and
// searches every file, log, alert and copy: they may stand in the raw stream and
// in the refused bytes, and nowhere else. An act's fields are the control.
func TestNoNameIsKept(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	for ago := 20; ago > 3; ago-- {
		s.publish(day(1, ago, 3))
	}
	b := s.dial()
	end := uint64(0)
	for _, out := range leaks() {
		var err error
		if end, err = b.Publish(t.Context(), out); err != nil {
			t.Fatal(err)
		}
	}
	if r := s.reaches(end); r.Partitions[0].OpenAlerts == 0 {
		t.Fatal("there is no alert to search")
	}
	s.says(0, nil, "alert", "note", openAlert(s), "--by", "Ann Brindelow", "--why", "called the ward")
	copied := filepath.Join(t.TempDir(), "copy.store")
	s.says(0, nil, "store", "copy", storeOf(t, setup), copied)
	var shown strings.Builder
	for _, line := range []string{"status", "status --json", "alert list --all", "alert list --all --json", "refused list", "alert show " + openAlert(s)} {
		shown.WriteString(s.says(0, nil, strings.Fields(line)...))
	}
	_, ready := s.ready()
	s.await("delivery", func() bool {
		r, ok := s.status()
		return ok && !slices.ContainsFunc(r.Partitions[0].Outlets, func(o outletRow) bool { return o.Waiting > 0 })
	})
	s.stop(syscall.SIGTERM)

	for what, text := range map[string]string{"the log": s.log.String(), "standard output": s.stdout.String(), "what commands show": shown.String(), "/readyz": ready} {
		for line := range strings.Lines(text) {
			if strings.Contains(line, nobody) {
				t.Errorf("the name stands in %s: %.400s", what, line)
			}
		}
	}
	if !strings.Contains(s.stdout.String()+shown.String(), person) {
		t.Error("who acts is not shown: the search finds nothing at all")
	}
	for _, path := range []string{storeOf(t, setup), copied} {
		searchStore(t, path)
	}
	searchFiles(t, filepath.Dir(setup))
}

// openAlert is the id of the one alert.
func openAlert(s *service) string {
	s.t.Helper()
	out := strings.Fields(s.says(0, nil, "alert", "list"))
	i := slices.Index(out, "SERIES")
	if i < 0 || i+1 == len(out) {
		s.t.Fatalf("no alert: %v", out)
	}
	return out[i+1]
}

// searchStore looks where in a store the names stand.
func searchStore(t *testing.T, path string) {
	t.Helper()
	db, err := bolt.Open(path, 0o600, &bolt.Options{ReadOnly: true, Timeout: time.Second})
	if err != nil {
		t.Fatal(err)
	}
	found := map[string]bool{}
	err = db.View(func(tx *bolt.Tx) error {
		return tx.ForEach(func(bucket []byte, b *bolt.Bucket) error {
			return b.ForEach(func(k, v []byte) error {
				for _, name := range []string{nobody, person} {
					if !bytes.Contains(k, []byte(name)) && !bytes.Contains(v, []byte(name)) {
						continue
					}
					found[fmt.Sprintf("%s in %s", name, bucket)] = true
					if name == nobody && string(bucket) != "refused-raw" {
						t.Errorf("%s: the name stands in %s: %.400q", filepath.Base(path), bucket, v)
					}
				}
				return nil
			})
		})
	})
	if err != nil {
		t.Fatal(err)
	}
	if err := db.Close(); err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{nobody + " in refused-raw", person + " in alerts"} {
		if !found[want] {
			t.Errorf("%s: %s was to be found; the search found %v", filepath.Base(path), want, found)
		}
	}
}

// searchFiles looks in which files the name stands.
func searchFiles(t *testing.T, folder string) {
	t.Helper()
	err := filepath.WalkDir(folder, func(path string, e fs.DirEntry, err error) error {
		if err != nil || e.IsDir() {
			return err
		}
		text, err := os.ReadFile(path)
		if err != nil {
			return err
		}
		inStream := strings.Contains(path, filepath.Join("streams", "quillmere-in"))
		if bytes.Contains(text, []byte(nobody)) && !inStream && filepath.Ext(path) != ".store" {
			t.Errorf("the name stands in %s", path)
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
}
