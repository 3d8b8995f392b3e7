package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"

	"github.com/spf13/cobra"

	"pairloom/coordinator/wire"
	"pairloom/sparse/exit"
)

func fetchCommand() *cobra.Command {
	var address, out string
	var replace bool
	c := &cobra.Command{
		Use:     "fetch JOB --out FOLDER",
		Short:   "Get the result files of a finished job",
		Example: `  pairloom fetch volume-1 --out result --coordinator head:7440`,
		Args:    cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			if out == "" {
				return exit.With(exit.Usage, errors.New("fetch needs --out FOLDER"))
			}
			return withClient(c, address, func(ctx context.Context, client *wire.Client) error {
				return fetch(ctx, client, args[0], out, replace)
			})
		},
	}
	coordinatorFlag(c, &address)
	c.Flags().StringVar(&out, "out", "", "folder for the result: missing or empty (required)")
	c.Flags().BoolVar(&replace, "replace", false, "replace the folder if it holds something")
	return c
}

// fetch gets the files into a folder beside out, which takes its place when all are there.
func fetch(ctx context.Context, client *wire.Client, job, out string, replace bool) error {
	out = filepath.Clean(out)
	if !replace {
		if err := mustBeFree(out); err != nil {
			return err
		}
	}
	if err := os.MkdirAll(filepath.Dir(out), 0o755); err != nil {
		return exit.With(exit.CannotOut, err)
	}
	part, err := os.MkdirTemp(filepath.Dir(out), "."+filepath.Base(out)+".*.part")
	if err != nil {
		return exit.With(exit.CannotOut, err)
	}
	defer os.RemoveAll(part)
	if err := errors.Join(os.Chmod(part, 0o755), client.Fetch(ctx, job, part)); err != nil {
		return err
	}
	return exit.With(exit.CannotOut, takePlace(part, out, replace))
}

// takePlace renames the folder part to out; what is there must be empty, or goes away
// when replace is set.
func takePlace(part, out string, replace bool) error {
	if replace {
		old := part + ".old"
		if err := os.Rename(out, old); err != nil && !errors.Is(err, os.ErrNotExist) {
			return err
		}
		defer os.RemoveAll(old)
	} else if err := os.Remove(out); err != nil && !errors.Is(err, os.ErrNotExist) {
		return err
	}
	return os.Rename(part, out)
}

func mustBeFree(folder string) error {
	entries, err := os.ReadDir(folder)
	switch {
	case errors.Is(err, os.ErrNotExist) || err == nil && len(entries) == 0:
		return nil
	case err != nil:
		return exit.With(exit.CannotOut, err)
	}
	return exit.With(exit.CannotOut, fmt.Errorf("%s is not empty; say --replace to replace it", folder))
}
