// Command pairloom computes Betti numbers and persistence pairs over Z/2 of large
// filtered complexes: here in one process, or on a crew of workers.
package main

import (
	"context"
	"encoding/json"
	"fmt"
	"os"
	"runtime/debug"
	"strings"

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

A first step:  pairloom reduce volume.npy --out result`,
		SilenceErrors: true,
		SilenceUsage:  true,
	}
	root.SetFlagErrorFunc(func(c *cobra.Command, err error) error {
		return exit.With(exit.Usage, fmt.Errorf("%w; see pairloom %s --help", err, c.Name()))
	})
	for _, c := range commands() {
		if check := c.Args; check != nil {
			c.Args = func(c *cobra.Command, args []string) error {
				if err := check(c, args); err != nil {
					return exit.With(exit.Usage, fmt.Errorf("%w; see pairloom %s --help", err, c.Name()))
				}
				return nil
			}
		}
		root.AddCommand(c)
	}
	return root
}

func versionCommand() *cobra.Command {
	return &cobra.Command{Use: "version", Short: "Print the version of this build", Args: cobra.NoArgs, Example: "  pairloom version",
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
	code := exit.Code(err)
	if strings.HasPrefix(err.Error(), "unknown command") {
		code = exit.Usage
	}
	fmt.Fprintln(root.ErrOrStderr(), "pairloom: "+strings.ReplaceAll(err.Error(), "\n", " "))
	if f := c.Flags().Lookup("json"); f != nil && f.Value.String() == "true" && c.Name() == "reduce" {
		_ = json.NewEncoder(root.OutOrStdout()).Encode(map[string]any{"error": err.Error(), "code": code})
	}
	return code
}

func main() {
	os.Exit(run(context.Background(), rootCommand()))
}
