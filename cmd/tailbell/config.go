package main

import (
	"errors"
	"fmt"

	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"

	"github.com/spf13/cobra"
)

// newConfigCommand returns "tailbell config": what can be said of a set-up
// without running it.
func newConfigCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "config",
		Short: "Print a sample set-up, check one, say what a change would mean, or print the schema of the data",
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newConfigSampleCommand(), newConfigCheckCommand(), newConfigDiffCommand(), newConfigSchemaCommand())
	return c
}

func newConfigSampleCommand() *cobra.Command {
	return &cobra.Command{
		Use:   "sample",
		Short: "Print a commented set-up to begin with",
		RunE: func(c *cobra.Command, _ []string) error {
			_, err := c.OutOrStdout().Write(config.Sample())
			return err
		},
	}
}

func newConfigSchemaCommand() *cobra.Command {
	return &cobra.Command{
		Use:   "schema",
		Short: "Print the JSON Schema of an observation",
		RunE: func(c *cobra.Command, _ []string) error {
			_, err := c.OutOrStdout().Write(wire.Schema())
			return err
		},
	}
}

func newConfigCheckCommand() *cobra.Command {
	var against string
	c := &cobra.Command{
		Use:   "check [FILE]",
		Short: "Say in plain sentences what a set-up would monitor, or everything that is wrong with it",
		Long: `Says in plain sentences what the set-up in FILE (tailbell.toml, unless another is
named) would monitor, how often it would look, what it may cost in memory, and what
in it is probably not meant. If anything is wrong, every fault is printed with its
line, and the command fails. With --against OLD it also says what would change from
the set-up OLD.`,
		RunE: func(c *cobra.Command, args []string) error { return checkConfig(c, setupNamed(args), against) },
	}
	c.Flags().StringVar(&against, "against", "", "also say what changes from the set-up in the file `OLD`")
	return c
}

// setupNamed is the set-up that the arguments name, else the usual one.
func setupNamed(args []string) string {
	if len(args) > 0 {
		return args[0]
	}
	return defaultSetup
}

func checkConfig(c *cobra.Command, file, against string) error {
	setup, err := loadSetup(file)
	if err != nil {
		return err
	}
	if err := setup.Describe(c.OutOrStdout()); err != nil {
		return err
	}
	if against != "" {
		old, err := loadSetup(against)
		if err != nil {
			return err
		}
		if err := printChanges(c, config.Compare(old, setup), monitor.CannotFollow(old, setup)); err != nil {
			return err
		}
	}
	for _, d := range setup.Doubts(file) {
		if _, err := fmt.Fprintf(c.ErrOrStderr(), "doubtful: %s\n", d); err != nil {
			return err
		}
	}
	return nil
}

// loadSetup loads a set-up and heads its faults with their number.
func loadSetup(file string) (*config.Setup, error) {
	setup, err := config.Load(file)
	var faults config.Faults
	if errors.As(err, &faults) {
		noun := "faults"
		if len(faults) == 1 {
			noun = "fault"
		}
		return nil, fmt.Errorf("%d %s in the set-up:\n%w", len(faults), noun, err)
	}
	return setup, err
}

func printChanges(c *cobra.Command, changes []config.Change, unfit string) error {
	text := "\nNothing changes.\n"
	if len(changes) > 0 {
		text = "\nWhat changes, and when it is in force:\n"
	}
	for _, ch := range changes {
		text += "  " + ch.String() + "\n"
	}
	if unfit != "" {
		text += "But " + unfit + "\n"
	}
	_, err := c.OutOrStdout().Write([]byte(text))
	return err
}
