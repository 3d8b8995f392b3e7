package main

import (
	"context"
	"fmt"

	"github.com/spf13/cobra"

	"pairloom/coordinator/wire"
	"pairloom/sparse/exit"
)

func submitCommand() *cobra.Command {
	var address, name string
	var inPlace, wait, asJSON bool
	var input inputFlags
	c := &cobra.Command{
		Use:   "submit INPUT…",
		Short: "Hand a job to a coordinator",
		Long: `Submit uploads the inputs, with a digest, and prints the name of the job alone on
stdout. The flags that say what the input is and how it is worked on are those of
reduce. With --wait it follows the job on stderr and exits with the job's code.`,
		Example: `  job=$(pairloom submit volume.npy --coordinator head:7440)`,
		Args:    cobra.MinimumNArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			spec, options, err := input.read(args)
			if err != nil {
				return err
			}
			return withClient(c, address, func(ctx context.Context, client *wire.Client) error {
				job, err := client.Submit(ctx, wire.Submission{Name: name, Spec: spec, Options: options, InPlace: inPlace})
				if err != nil {
					return err
				}
				if _, err := fmt.Fprintln(c.OutOrStdout(), job); err != nil || !wait {
					return err
				}
				last, err := client.Watch(ctx, job, seer(c.ErrOrStderr(), asJSON))
				if err != nil {
					return exit.With(exit.Code(err), fmt.Errorf("job %s goes on unwatched: %w", job, err))
				}
				return ended(last)
			})
		},
	}
	input.add(c)
	coordinatorFlag(c, &address)
	c.Flags().StringVar(&name, "name", "", "name of the job (default: after the first input)")
	c.Flags().BoolVar(&inPlace, "in-place", false, "send paths only: the coordinator reads them below its --inputs")
	c.Flags().BoolVar(&wait, "wait", false, "wait for the end and exit with the job's code")
	c.Flags().BoolVar(&asJSON, "json", false, "with --wait: one JSON object a state and line")
	return c
}
