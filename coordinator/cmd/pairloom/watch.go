package main

import (
	"context"

	"github.com/spf13/cobra"

	"pairloom/coordinator/wire"
)

func watchCommand() *cobra.Command {
	var address string
	var asJSON bool
	c := &cobra.Command{
		Use:     "watch JOB",
		Short:   "Follow a job to its end and exit with its code",
		Example: `  pairloom watch volume-1 --coordinator head:7440`,
		Args:    cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			return withClient(c, address, func(ctx context.Context, client *wire.Client) error {
				last, err := client.Watch(ctx, args[0], seer(c.OutOrStdout(), asJSON))
				if err != nil {
					return err
				}
				return ended(last)
			})
		},
	}
	coordinatorFlag(c, &address)
	c.Flags().BoolVar(&asJSON, "json", false, "one JSON object a state and line")
	return c
}
