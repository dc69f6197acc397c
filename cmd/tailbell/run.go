package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"

	"github.com/rs/zerolog"
	"github.com/spf13/cobra"
	"golang.org/x/term"

	"tailbell/alert/outlet"
	"tailbell/config"
)

// defaultSetup is the set-up's file unless --config names another.
const defaultSetup = "tailbell.toml"

func addConfigFlag(c *cobra.Command, path *string) {
	c.Flags().StringVar(path, "config", defaultSetup, "the set-up's `FILE`")
}

func newRunCommand() *cobra.Command {
	var path, health string
	var asJSON bool
	c := &cobra.Command{
		Use:   "run",
		Short: "Run the daemon: watch the stream, and ring",
		Long: `Runs the daemon until SIGINT or SIGTERM: it recovers what its store holds, reads
the stream on from there, and delivers alerts to the bus and, in plain sentences
(--json: as records, one a line), to standard output. Logs go to standard error.
The first signal lets it finish what it began; a second one stops it at once,
which loses nothing either.`,
		Args: cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			return runDaemon(c.Context(), setup, health, c.OutOrStdout(), c.ErrOrStderr(), asJSON)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "write alerts as JSON records, one a line")
	c.Flags().StringVar(&health, "health", "127.0.0.1:4870", "loopback `ADDRESS` of /healthz and /readyz; off for none")
	return c
}

func runDaemon(ctx context.Context, setup *config.Setup, health string, stdout, stderr io.Writer, asJSON bool) (err error) {
	log := newLog(stderr)
	d, err := openDaemon(ctx, setup, daemonOptions{
		log: log, terminal: outlet.NewTerminal(stdout, widthOf(stdout), asJSON),
	})
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, d.close()) }()
	if health != "off" {
		closeHealth, err := serveHealth(ctx, d, health)
		if err != nil {
			return err
		}
		defer closeHealth()
	}
	log.Info().Str("name", setup.Name).Str("folder", setup.Folder).Str("setup", setup.Digest[:12]).
		Bool("embedded_bus", d.bus.Embedded()).Msg("running")
	if err := d.run(ctx); err != nil {
		return err
	}
	log.Info().Msg("stopped")
	return nil
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

// say prints a line for people.
func say(w io.Writer, format string, args ...any) error {
	_, err := fmt.Fprintf(w, format+"\n", args...)
	return err
}
