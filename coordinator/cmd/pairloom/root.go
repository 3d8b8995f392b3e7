// Command pairloom computes Betti numbers and persistence pairs over Z/2 of large
// filtered complexes: here in one process, or on a crew of workers.
package main

import (
	"context"
	"fmt"
	"os"
	"runtime/debug"

	"github.com/spf13/cobra"

	"pairloom/sparse/exit"
)

// release is the version of this source.
const release = "0.1.0"

// version is what coordinators and workers compare: they must be of one build.
func version() string {
	if info, ok := debug.ReadBuildInfo(); ok {
		for _, s := range info.Settings {
			if s.Key == "vcs.revision" {
				return release + "+" + s.Value[:min(12, len(s.Value))]
			}
		}
	}
	return release
}

func commands() []*cobra.Command {
	return []*cobra.Command{reduceCommand(), planCommand(), serveCommand(), workCommand(), submitCommand(), jobsCommand(),
		watchCommand(), fetchCommand(), healthCommand(), versionCommand()}
}

func rootCommand() *cobra.Command {
	root := &cobra.Command{
		Use:   "pairloom",
		Short: "Betti numbers and persistence pairs over Z/2 of large filtered complexes",
		Long: `pairloom reads volumes, point clouds, distance matrices, networks, simplex lists and
boundary matrices, reduces them here or on a crew of workers, and publishes Betti
numbers and persistence pairs with evidence that they are right. For research: no
diagnosis and no safety decision may rest on the results alone.

A first step:  pairloom reduce volume.npy --out result
says what came out, and leaves pairs.csv, betti.csv and summary.json in result.`,
		Example:       "  pairloom reduce points.csv --as points --degrees 1",
		SilenceErrors: true,
		SilenceUsage:  true,
		Args:          unknownCommand,
		RunE:          func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	root.SuggestionsMinimumDistance = 2
	root.SetFlagErrorFunc(flagError)
	for _, c := range commands() {
		if check := c.Args; check != nil {
			c.Args = func(c *cobra.Command, args []string) error {
				if err := check(c, args); err != nil && exit.Code(err) != exit.Usage {
					return usage("%w; see %s --help", err, c.CommandPath())
				} else {
					return err
				}
			}
		}
		root.AddCommand(c)
	}
	return root
}

func versionCommand() *cobra.Command {
	return &cobra.Command{Use: "version", Short: "Print the version of this build", Args: cobra.NoArgs, Example: "  pairloom version",
		Long: `Version prints the release, and the revision where the build knows it. A coordinator
and its workers must be of one version.`,
		RunE: func(c *cobra.Command, _ []string) error {
			_, err := fmt.Fprintln(c.OutOrStdout(), version())
			return err
		}}
}

// run executes one command line and returns its exit code.
func run(ctx context.Context, root *cobra.Command) int {
	c, err := root.ExecuteContextC(ctx)
	if err == nil {
		return exit.Done
	}
	return tellFailure(c, root.OutOrStdout(), root.ErrOrStderr(), err)
}

func main() {
	os.Exit(run(context.Background(), rootCommand()))
}
