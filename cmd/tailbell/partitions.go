package main

import (
	"github.com/spf13/cobra"
)

// newPartitionsCommand returns "tailbell partitions": the parts into which the
// series of a deployment are divided.
func newPartitionsCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "partitions",
		Short: "Divide the stream into another number of partitions",
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newPartitionsDivideCommand())
	return c
}
