// Command tailbell watches streams of rare events and rings when a rate is no
// longer what it was.
//
// Every subcommand is a file of this folder: options, wiring, printing. The
// rules live in the packages below.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"runtime/debug"
	"strings"
	"syscall"

	"github.com/spf13/cobra"
)

func main() {
	ctx, stop := signalled(context.Background())
	defer stop()
	os.Exit(execute(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr))
}

// signalled returns a context that ends at the first SIGINT or SIGTERM. A
// second signal stops the process at once.
func signalled(parent context.Context) (context.Context, context.CancelFunc) {
	ctx, stop := signal.NotifyContext(parent, os.Interrupt, syscall.SIGTERM)
	context.AfterFunc(ctx, stop)
	return ctx, stop
}

// execute runs one command and returns its exit code: 0 for success, 1 for a
// failure that was reported, 2 for a command line that makes no sense, 3 for
// data that were used whole but are odd.
func execute(ctx context.Context, args []string, stdin io.Reader, stdout, stderr io.Writer) int {
	root := newRootCommand()
	root.SetArgs(args)
	root.SetIn(stdin)
	root.SetOut(stdout)
	root.SetErr(stderr)
	err := exclusive(root.ExecuteContext(ctx))
	var usage *usageError
	switch {
	case err == nil:
		return 0
	case errors.As(err, &usage):
		complain(stderr, err)
		return 2
	case errors.Is(err, errOdd):
		return 3
	case !errors.Is(err, errReported):
		complain(stderr, err)
	}
	return 1
}

// exclusive says in our own words that options exclude each other.
func exclusive(err error) error {
	if err == nil {
		return nil
	}
	names, found := strings.CutPrefix(err.Error(), "if any flags in the group [")
	if !found {
		return err
	}
	names, _, _ = strings.Cut(names, "]")
	return &usageError{fmt.Errorf("give only one of --%s", strings.Join(strings.Fields(names), ", --"))}
}

// version is the program's, as the build knows it.
func version() string {
	built := "unknown"
	if info, ok := debug.ReadBuildInfo(); ok {
		built = info.Main.Version
		for _, s := range info.Settings {
			if s.Key == "vcs.revision" {
				built += " " + s.Value
			}
		}
		built += ", " + info.GoVersion
	}
	return built
}

// errReported is returned by commands that have told what is wrong already.
var errReported = errors.New("it has been said what is wrong")

// errOdd is returned by commands that used all that they were given, and have
// told what is odd about it.
var errOdd = errors.New("it has been said what is odd")

// usageError is a command line that makes no sense.
type usageError struct{ err error }

func (e *usageError) Error() string { return e.err.Error() }
func (e *usageError) Unwrap() error { return e.err }

func complain(w io.Writer, err error) {
	if _, err := fmt.Fprintf(w, "tailbell: %v\n", err); err != nil {
		return // nobody is listening
	}
}

func newRootCommand() *cobra.Command {
	root := &cobra.Command{
		Use:   "tailbell",
		Short: "Watch streams of rare events, and ring when a rate is no longer what it was",
		Long: `Tailbell watches streams of rare events and rings when a rate is no longer what
it was: by exact Poisson and binomial tails against a baseline, over rolling
windows.

A signal is a statistical finding: it diagnoses nothing and names no cause.
Silence is no proof of safety. Local policy decides.`,
		Version:       version(),
		SilenceUsage:  true,
		SilenceErrors: true,
		RunE:          func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	root.CompletionOptions.HiddenDefaultCmd = true
	root.SetFlagErrorFunc(badFlag)
	root.SetHelpCommand(newHelpCommand())
	root.AddCommand(
		newAlertCommand(), newSeriesCommand(), newBaselineCommand(), newClockCommand(), newConfigCommand(), newDemoCommand(), newExactCommand(), newFeedCommand(), newLimitsCommand(),
		newOutletCommand(), newRefusedCommand(), newRehearseCommand(), newReplayCommand(), newReportCommand(), newRunCommand(), newStatusCommand(), newStoreCommand(), newStreamCommand(),
		newUserCommand(), newPartitionsCommand(),
	)
	checkArguments(root)
	return root
}
