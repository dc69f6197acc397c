package main

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"slices"

	"github.com/spf13/cobra"

	"tailbell/monitor/store"
)

// newStoreCommand returns "tailbell store": what can be done with the files
// that hold the partitions' states. All but copy want no daemon to have them.
func newStoreCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "store",
		Short: "Check the stores of a folder whole, copy them, put a copy in place, or accept another stream",
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newStoreCheckCommand(), newStoreCopyCommand(), newStoreRebuildCommand(), newStoreAcceptCommand())
	return c
}

func newStoreCheckCommand() *cobra.Command {
	var asJSON bool
	c := &cobra.Command{
		Use:   "check FOLDER|FILE",
		Short: "Read every page and value of a store, and say what is wrong",
		Long: `Reads every page and value of a store with its checksum, and compares counts,
indexes and cursors. FOLDER stands for all stores in it. Nothing is written.

It fails if anything is wrong, and names it. A store that a daemon has open is
not looked at: stop the daemon, or check a copy.`,
		RunE: func(c *cobra.Command, args []string) error { return checkStores(c, args[0], asJSON) },
	}
	c.Flags().BoolVar(&asJSON, "json", false, "print the findings as JSON, one object a store")
	return c
}

// storeFinding is what "store check --json" prints of one store.
type storeFinding struct {
	File   string       `json:"file"`
	Sound  bool         `json:"sound"`
	Error  string       `json:"error,omitempty"`
	Report store.Report `json:"report"`
}

func checkStores(c *cobra.Command, path string, asJSON bool) error {
	files, err := storeFiles(path)
	if err != nil {
		return err
	}
	sound := true
	for _, file := range files {
		report, err := store.CheckFile(c.Context(), file, store.Options{})
		if c.Context().Err() != nil {
			return err
		}
		sound = sound && err == nil
		if err := tellCheck(c.OutOrStdout(), file, report, err, asJSON); err != nil {
			return err
		}
	}
	if !sound {
		return errReported
	}
	return nil
}

func tellCheck(w io.Writer, file string, r store.Report, found error, asJSON bool) error {
	if asJSON {
		finding := storeFinding{File: file, Sound: found == nil, Report: r}
		if found != nil {
			finding.Error = found.Error()
		}
		return writeJSON(w, finding)
	}
	if found != nil {
		return tellFaults(w, file, r.Faults, found)
	}
	archived := archiveRowOf(&r.Archive)
	_, err := fmt.Fprintf(w, `%s is sound.
  %s, format %d
  stands at position %d of its stream after %s
  %d series, %d of them written whole, %s since; %s in %s; %s
  %s, %d of them not done; %s waiting for %s
  %d refused, %d of them listed, %d with their bytes; %s
  %.1f MiB, %.1f MiB of them free
`, file, r.Identity, r.Format, r.Position, amount(r.Commits, "commits"),
		r.Series, r.States, amount(r.Patches, "patches"), amount(r.IDs, "ids"), amount(r.Generations, "generations"), "archive: "+archived.String(),
		amount(r.Alerts, "alerts"), r.OpenAlerts, amount(r.OutboxRows, "steps"), amount(r.Outlets, "outlets"),
		r.Refused, r.RefusedRows, r.RefusedRaw, amount(r.Settings, "set-ups"),
		float64(r.FileBytes)/(1<<20), float64(r.FreeBytes)/(1<<20))
	if err == nil && r.TornMeta {
		_, err = fmt.Fprintln(w, "  The last commit broke off; the store stands at the one before it. The stream brings it again.")
	}
	return err
}

func tellFaults(w io.Writer, file string, faults []string, found error) error {
	if len(faults) == 0 {
		_, err := fmt.Fprintf(w, "%s can't be checked: %v\n", file, found)
		return err
	}
	if _, err := fmt.Fprintf(w, "%s is damaged:\n", file); err != nil {
		return err
	}
	for _, fault := range faults {
		if _, err := fmt.Fprintf(w, "  %s\n", fault); err != nil {
			return err
		}
	}
	_, err := fmt.Fprintln(w, "It was left untouched. Put back a copy, or move it away so that it is built again from the stream.")
	return err
}

// storeFiles returns the stores that a path names.
func storeFiles(path string) ([]string, error) {
	info, err := os.Stat(path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("there is no %s: name the folder of a set-up that has run, or a store's file", path)
	}
	if err != nil || !info.IsDir() {
		return []string{path}, err
	}
	files, err := filepath.Glob(filepath.Join(globEscape(path), "*.store"))
	if err == nil && len(files) == 0 {
		err = fmt.Errorf("no stores in %s: name the folder of a set-up that has run, or a store's file", path)
	}
	slices.Sort(files)
	return files, err
}

// globEscape keeps a folder's name from being read as a pattern.
func globEscape(path string) string {
	var b []byte
	for _, c := range []byte(path) {
		if slices.Contains([]byte(`*?[\`), c) && filepath.Separator == '/' {
			b = append(b, '\\')
		}
		b = append(b, c)
	}
	return string(b)
}
