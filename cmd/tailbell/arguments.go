package main

import (
	"errors"
	"fmt"
	"strconv"
	"strings"

	"github.com/spf13/cobra"
)

// checkArguments makes every command under c take the arguments that its use
// line names ("show ALERT", "feed FILE...", "exact [FILE]"), and a command line
// with others a usageError.
func checkArguments(c *cobra.Command) {
	want := argumentsOf(c.Use)
	c.Args = func(c *cobra.Command, args []string) error {
		if c.HasSubCommands() && len(args) > 0 {
			return unknownCommand(c, args[0])
		}
		return want.check(c, args)
	}
	for _, sub := range c.Commands() {
		checkArguments(sub)
	}
}

// arguments are what a use line asks for.
type arguments struct {
	needed []string // their names, in order
	most   int      // -1 for any number
}

func argumentsOf(use string) arguments {
	var a arguments
	optional := false
	for _, word := range strings.Fields(use)[1:] {
		begins := strings.HasPrefix(word, "[")
		inside := optional || begins
		optional = inside && !strings.HasSuffix(word, "]")
		switch {
		case !inside:
			a.needed = append(a.needed, strings.TrimSuffix(word, "..."))
			a.most++
		case begins:
			a.most++
		}
		if strings.HasSuffix(strings.TrimSuffix(word, "]"), "...") {
			a.most = -1
			break
		}
	}
	return a
}

func (a arguments) check(c *cobra.Command, args []string) error {
	usage := strings.TrimSuffix(c.UseLine(), " [flags]")
	if n := len(args); n < len(a.needed) {
		return &usageError{fmt.Errorf("%s is missing: %s (--help says more)", a.needed[n], usage)}
	} else if a.most >= 0 && n > a.most {
		return &usageError{fmt.Errorf("%q is one argument too many: %s (--help says more)", args[a.most], usage)}
	}
	return nil
}

func unknownCommand(c *cobra.Command, name string) error {
	perhaps := ""
	c.SuggestionsMinimumDistance = 2
	if near := c.SuggestionsFor(name); len(near) > 0 {
		perhaps = fmt.Sprintf("; did you mean %q?", near[0])
	}
	return &usageError{fmt.Errorf("there is no command %q%s (%s --help lists them)", c.CommandPath()+" "+name, perhaps, c.CommandPath())}
}

// badFlag words an option that can't be read.
func badFlag(c *cobra.Command, err error) error {
	var number *strconv.NumError
	if errors.As(err, &number) {
		text, _, _ := strings.Cut(err.Error(), " flag: ")
		err = errors.New(text + ": it is no number, or one that can't stand here")
	}
	return &usageError{fmt.Errorf("%w (%s --help says more)", err, c.CommandPath())}
}

// newHelpCommand is cobra's, with an error for a command that is not there.
func newHelpCommand() *cobra.Command {
	return &cobra.Command{
		Use:   "help [COMMAND...]",
		Short: "Say what a command does, and with which options",
		RunE: func(c *cobra.Command, args []string) error {
			about, rest, err := c.Root().Find(args)
			if err != nil {
				return err
			}
			if len(rest) > 0 {
				return unknownCommand(about, rest[0])
			}
			return about.Help()
		},
	}
}
