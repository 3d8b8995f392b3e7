package main

import (
	"encoding/json"
	"fmt"
	"os"

	"github.com/spf13/cobra"

	"pairloom/coordinator/plan"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/stage"
	"pairloom/worker/task"
)

// bytesCell and bytesEntry are what a job holds at its peak, measured: tables, masks
// and pairs a cell, mapped blocks an entry.
const (
	bytesCell  = 18
	bytesEntry = 4
)

func planCommand() *cobra.Command {
	var input inputFlags
	var asJSON bool
	c := &cobra.Command{
		Use:   "plan INPUT…",
		Short: "Count cells, memory and blocks, without reducing anything",
		Long: `Plan reads and orders the input as reduce would, in a temporary folder, and says how
many cells each degree has, how each block would be solved and why, and about how much
memory that takes.`,
		Example: `  pairloom plan volume.npy`,
		Args:    cobra.MinimumNArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			ctx, stop := untilSignal(c.Context())
			defer stop()
			spec, options, err := input.read(args)
			if err != nil {
				return err
			}
			folder, err := os.MkdirTemp("", "pairloom-plan-")
			if err != nil {
				return err
			}
			defer os.RemoveAll(folder)
			text, err := json.Marshal(spec)
			if err != nil {
				return err
			}
			t := &pb.Task{Work: pb.Work_WORK_PREPARE, Folder: folder, Spec: string(text), Threads: uint32(defaultThreads())}
			if _, err := task.Run(ctx, t, source.Quiet{}); err != nil {
				return err
			}
			complex, err := chain.Read(stage.Order(folder))
			if err != nil {
				return err
			}
			return tellPlan(c, complex, plan.Blocks(complex, options), folder, asJSON)
		},
	}
	input.add(c)
	c.Flags().BoolVar(&asJSON, "json", false, "print the plan as JSON")
	return c
}

func tellPlan(c *cobra.Command, complex *chain.Complex, blocks []plan.Block, folder string, asJSON bool) error {
	memory, nonzeros := uint64(0), map[int]uint64{}
	for k, n := range complex.Cells {
		memory += bytesCell * uint64(n)
		if k == 0 {
			continue
		}
		m, err := chain.OpenBlock(stage.Order(folder), k, true)
		if err != nil {
			return err
		}
		nonzeros[k] = m.Nonzeros()
		memory += bytesEntry * m.Nonzeros()
		m.Close()
	}
	out := c.OutOrStdout()
	if asJSON {
		return json.NewEncoder(out).Encode(map[string]any{"cells": complex.Cells, "truncated": complex.Truncated, "blocks": blocks, "nonzeros": nonzeros, "memory_bytes": memory})
	}
	for k, n := range complex.Cells {
		fmt.Fprintf(out, "degree %d: %d cells\n", k, n)
	}
	for _, b := range blocks {
		fmt.Fprintf(out, "block %d: %d entries, %s, %s route (%s)\n", b.Degree, nonzeros[b.Degree], b.Method, b.Route, b.Reason)
	}
	_, err := fmt.Fprintf(out, "memory: about %d MiB\n", memory>>20)
	return err
}
