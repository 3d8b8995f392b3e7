package main

import (
	"context"
	"fmt"
	"time"

	"github.com/spf13/cobra"

	"pairloom/coordinator/wire"
)

func healthCommand() *cobra.Command {
	var address string
	var timeout time.Duration
	c := &cobra.Command{
		Use:     "health",
		Short:   "Say whether a coordinator answers: exit code 0 or 69",
		Example: `  pairloom health --coordinator head:7440`,
		Args:    cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			return withClient(c, address, func(ctx context.Context, client *wire.Client) error {
				ctx, cancel := context.WithTimeout(ctx, timeout)
				defer cancel()
				if err := client.Health(ctx); err != nil {
					return err
				}
				_, err := fmt.Fprintln(c.OutOrStdout(), "serving")
				return err
			})
		},
	}
	coordinatorFlag(c, &address)
	c.Flags().DurationVar(&timeout, "timeout", 5*time.Second, "how long an answer may take")
	return c
}
