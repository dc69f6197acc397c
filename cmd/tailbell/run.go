package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"slices"
	"time"

	"github.com/rs/zerolog"
	"github.com/spf13/cobra"
	"golang.org/x/term"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/monitor/store"
)

// defaultSetup is the set-up's file unless --config names another.
const defaultSetup = "tailbell.toml"

func addConfigFlag(c *cobra.Command, path *string) {
	c.Flags().StringVar(path, "config", defaultSetup, "the set-up's `FILE`")
}

func newRunCommand() *cobra.Command {
	var path string
	o := runOptions{}
	c := &cobra.Command{
		Use:   "run",
		Short: "Run the daemon: watch the stream, and ring",
		Long: `Runs the daemon until SIGINT or SIGTERM: it recovers what its store holds, reads
the stream on from there, and delivers alerts to the bus and, in plain sentences
(--json: as records, one a line), to standard output. Logs go to standard error.
The first signal lets it finish what it began; a second one stops it at once,
which loses nothing either.

A set-up that differs from the one in force is put into force, or refused if the
stored state can't follow it (tailbell config diff says beforehand what changes).

/healthz answers "alive" as long as the process lives; /readyz answers 200 and
the status as JSON while the bus is connected and no partition far behind, else
503 and why.`,
		RunE: func(c *cobra.Command, _ []string) error {
			if err := o.check(); err != nil {
				return &usageError{err}
			}
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			return runDaemon(c.Context(), setup, o, c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&o.asJSON, "json", false, "write alerts as JSON records, one a line")
	c.Flags().StringVar(&o.health, "health", "127.0.0.1:4870", "loopback `ADDRESS` of /healthz and /readyz; off for none")
	c.Flags().StringVar(&o.profiling, "profiling", noProfiling, "loopback `ADDRESS` of profiles of the process, see OPERATIONS.md; off for none")
	c.Flags().StringVar(&o.logLevel, "log-level", "info", "the least `LEVEL` that is logged: debug, info, warn or error")
	return c
}

type runOptions struct {
	asJSON           bool
	health, logLevel string
	profiling        string
	level            zerolog.Level // of logLevel, set by check
}

// check reads the options, so that a wrong one is told before anything is
// done.
func (o *runOptions) check() error {
	levels := []zerolog.Level{zerolog.DebugLevel, zerolog.InfoLevel, zerolog.WarnLevel, zerolog.ErrorLevel}
	i := slices.IndexFunc(levels, func(l zerolog.Level) bool { return l.String() == o.logLevel })
	if i < 0 {
		return fmt.Errorf("--log-level %q: it is debug, info, warn or error", o.logLevel)
	}
	o.level = levels[i]
	return errors.Join(checkHealth(o.health), checkProfiling(o.profiling))
}

func runDaemon(ctx context.Context, setup *config.Setup, o runOptions, stdout, stderr io.Writer) (err error) {
	log := newLog(stderr).Level(o.level)
	h, err := startHealth(ctx, o.health, log)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, h.close()) }()
	profiles, err := startProfiling(ctx, o.profiling, log)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, profiles.close()) }()
	pages, err := startPage(ctx, setup, log)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, pages.close()) }()
	opts := daemonOptions{log: log, terminal: outlet.NewTerminal(stdout, widthOf(stdout), o.asJSON)}
	if !o.asJSON {
		opts.onTerminal = forPeople
	}
	err = runOnce(ctx, setup, opts, h, pages)
	for errors.Is(err, errAgain) && ctx.Err() == nil {
		log.Warn().Err(err).Msg("there is room again: starting the embedded bus again")
		err = runOnce(ctx, setup, opts, h, pages)
		// The room may be gone again before the bus has come up.
		if err != nil && !errors.Is(err, errAgain) && tryRoom(setup.Folder) != nil {
			log.Error().Err(err).Msg("starting again")
			err = errors.Join(errAgain, awaitRoom(ctx, setup.Folder))
		}
	}
	if ctx.Err() != nil && errors.Is(err, errAgain) {
		err = nil
	}
	if err == nil {
		log.Info().Msg("stopped")
	}
	return err
}

// runOnce opens the daemon and runs it. The error is an errAgain if that is to
// be done once more.
func runOnce(ctx context.Context, setup *config.Setup, o daemonOptions, h *health, pages *pageServer) (err error) {
	d, err := openDaemon(ctx, setup, o)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, d.close()) }()
	h.daemon.Store(d)
	defer h.daemon.Store(nil)
	if err := d.openPage(); err != nil {
		return err
	}
	pages.page.Store(d.page)
	defer pages.page.Store(nil)
	o.log.Info().Str("name", setup.Name).Str("folder", setup.Folder).Str("setup", setup.Digest[:12]).
		Bool("embedded_bus", d.bus.Embedded()).Msg("running")
	return d.run(ctx)
}

// checkFolder refuses a folder whose stores are another deployment's. It looks
// before anything is written there.
func checkFolder(setup *config.Setup) error {
	for n := range setup.Partitions {
		path := storePath(setup, n)
		if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
			continue
		}
		st, err := store.OpenReadOnly(path, store.Options{})
		if errors.Is(err, store.ErrInUse) {
			continue // the folder's lock tells by whom
		}
		if err != nil {
			return err
		}
		found, want := st.Identity(), identityOf(setup, n)
		if err := st.Close(); err != nil {
			return err
		}
		if found != want && (!setup.Bus.Share || !fromDivision(found, want)) {
			return wrongStore(path, found, want)
		}
	}
	return nil
}

// fromDivision reports whether a store is of the same deployment, from before its
// stream was divided into another number of partitions. Where processes share
// the partitions it is put aside as any other that is not the last owner's.
func fromDivision(found, want store.Identity) bool {
	found.Partition, found.Partitions = want.Partition, want.Partitions
	return found == want
}

// wrongStore is the error of a store that is another one's.
func wrongStore(path string, found, want store.Identity) error {
	if found.Deployment != want.Deployment {
		return fmt.Errorf("%s holds the deployment %q, the set-up is of %q: %w", path, found.Deployment, want.Deployment, store.ErrIdentity)
	}
	return fmt.Errorf("%s holds %s, the set-up wants %s: %w", path, found, want, store.ErrIdentity)
}

// newLog writes to standard error: for people on a terminal, else JSON lines.
func newLog(w io.Writer) zerolog.Logger {
	if isTerminal(w) {
		w = zerolog.ConsoleWriter{Out: w, TimeFormat: "15:04:05", NoColor: os.Getenv("NO_COLOR") != ""}
	}
	return zerolog.New(w).With().Timestamp().Logger()
}

func isTerminal(w io.Writer) bool {
	f, ok := w.(*os.File)
	return ok && term.IsTerminal(int(f.Fd()))
}

// widthOf is how wide lines may be.
func widthOf(w io.Writer) int {
	const usual = 96
	if f, ok := w.(*os.File); ok {
		if width, _, err := term.GetSize(int(f.Fd())); err == nil && width > 0 {
			return min(width, 120)
		}
	}
	return usual
}

// duration writes an elapsed time as the set-up does.
func duration(d time.Duration) string { return config.FormatDuration(d) }

// say prints a line for people.
func say(w io.Writer, format string, args ...any) error {
	_, err := fmt.Fprintf(w, format+"\n", args...)
	return err
}
