package main

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"

	"github.com/spf13/cobra"

	"pairloom/coordinator/plan"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/chain"
	"pairloom/sparse/reduce"
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

// outlook is what `plan` says of a job; with --json as it is.
type outlook struct {
	Cells     []uint32       `json:"cells"` // by degree
	Truncated bool           `json:"truncated"`
	Blocks    []blockOutlook `json:"blocks"` // in solving order
	Memory    uint64         `json:"memory_bytes"`
	CPU       float64        `json:"cpu_seconds"` // rough
}

// blockOutlook is one block. Columns and residual are those of its route; how many
// columns a neighbour that is solved before clears is estimated from the cell counts.
type blockOutlook struct {
	Degree   int    `json:"degree"`
	Method   string `json:"method"`
	Route    string `json:"route"`
	Reason   string `json:"route_reason"`
	Nonzeros uint64 `json:"nonzeros"`
	Columns  uint64 `json:"columns"`
	Residual uint64 `json:"residual"`
	Workers  int    `json:"workers"`
	Tiles    int    `json:"tiles"`
}

type planFlags struct {
	input            inputFlags
	json, quiet      bool
	workers, threads int
}

func planCommand() *cobra.Command {
	var f planFlags
	c := &cobra.Command{
		Use:         "plan INPUT…",
		Annotations: map[string]string{oneJSON: "yes"},
		Short:       "Count cells, memory, blocks and tiles, without reducing anything",
		Long: `Plan reads and orders the input as reduce would, in a temporary folder, looks for the
pairs that each block settles alone, and says how many cells each degree has, how each
block would be solved and why, how many columns are left to reduce, by how many workers,
and about how much memory that takes.`,
		Example: `  pairloom plan volume.npy
  pairloom plan points.csv --as points --degrees 2 --workers 16`,
		Args: needsInput,
		RunE: func(c *cobra.Command, args []string) error {
			ctx, stop := untilSignal(c.Context())
			defer stop()
			return f.run(ctx, c, args)
		},
	}
	f.input.add(c)
	p := c.Flags()
	p.IntVar(&f.workers, "workers", 1, "workers that the job would have")
	p.IntVar(&f.threads, "threads", system.defaultThreads(), "threads over all workers")
	p.BoolVar(&f.json, "json", false, "print the plan as JSON")
	p.BoolVar(&f.quiet, "quiet", false, "no progress")
	return c
}

func (f *planFlags) run(ctx context.Context, c *cobra.Command, args []string) (err error) {
	spec, options, err := f.input.read(args)
	if err != nil {
		return err
	}
	if f.workers < 1 || f.threads < 1 {
		return usage("--workers %d, --threads %d; at least 1 was expected", f.workers, f.threads)
	}
	folder, err := os.MkdirTemp("", "pairloom-plan-")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, os.RemoveAll(folder)) }()
	show := newMeter(c.ErrOrStderr(), f.quiet)
	o, err := f.look(ctx, folder, spec, options, show)
	show.End()
	if err != nil {
		return err
	}
	if f.json {
		return json.NewEncoder(c.OutOrStdout()).Encode(o)
	}
	return o.tell(c.OutOrStdout())
}

// look prepares the complex in a folder and looks at every block.
func (f *planFlags) look(ctx context.Context, folder string, spec source.Spec, options plan.Options, show *meter) (*outlook, error) {
	text, err := json.Marshal(spec)
	if err != nil {
		return nil, err
	}
	t := &pb.Task{Work: pb.Work_WORK_PREPARE, Folder: folder, Spec: string(text), Threads: uint32(f.threads)}
	if _, err := task.Run(ctx, t, show); err != nil {
		return nil, err
	}
	complex, err := chain.Read(stage.Order(folder))
	if err != nil {
		return nil, err
	}
	o := &outlook{Cells: complex.Cells, Truncated: complex.Truncated, Blocks: []blockOutlook{}}
	for _, n := range complex.Cells {
		o.Memory += bytesCell * uint64(n)
	}
	show.Stage("compress")
	v := &view{folder: folder, complex: complex, options: options, ranks: ranks(complex), solved: map[int]bool{}}
	for _, b := range plan.Blocks(complex, options) {
		look, err := f.block(ctx, v, b)
		if err != nil {
			return nil, err
		}
		o.Blocks = append(o.Blocks, look)
		o.Memory += bytesEntry * look.Nonzeros
		o.CPU += plan.Seconds(look.Residual, look.Columns, look.Nonzeros)
	}
	return o, nil
}

// view is what is known of the job while block after block is looked at.
type view struct {
	folder  string
	complex *chain.Complex
	options plan.Options
	ranks   []uint64
	solved  map[int]bool // blocks before
}

// block finds what a block settles alone and estimates what is left of it.
func (f *planFlags) block(ctx context.Context, v *view, b plan.Block) (blockOutlook, error) {
	cells := v.complex.Cells
	o := blockOutlook{Degree: b.Degree, Method: string(b.Method), Route: string(b.Route), Reason: b.Reason, Columns: uint64(cells[b.Degree])}
	rows, neighbour := cells[b.Degree-1], b.Degree+1
	if b.Route == plan.Coboundary {
		o.Columns, rows, neighbour = uint64(rows), cells[b.Degree], b.Degree-1
	}
	v.solved[b.Degree] = true
	m, err := chain.OpenBlock(stage.Order(v.folder), b.Degree, true)
	if err != nil {
		return o, err
	}
	o.Nonzeros = m.Nonzeros()
	m.Close()
	if b.Method != plan.Reduce {
		return o, nil
	}
	o.Residual = o.Columns
	if !slices.Contains(v.options.Without, "apparent") {
		done, err := task.Run(ctx, &pb.Task{Work: pb.Work_WORK_SURVEY, Folder: v.folder, Degree: uint32(b.Degree)}, source.Quiet{})
		if err != nil {
			return o, err
		}
		o.Residual -= done.Apparent
	}
	if b.Clear && v.solved[neighbour] {
		o.Residual -= min(o.Residual, v.ranks[neighbour])
	}
	o.Workers = plan.Workers(o.Residual, o.Columns, f.threads/f.workers, f.workers, v.options)
	o.Tiles = reduce.Cut(rows, o.Workers, cmp.Or(v.options.PerTile, plan.TilesAWorker)).Tiles
	return o, nil
}

// ranks estimates the ranks of ∂_0..∂_(top+1) from the cell counts, as if there were no
// homology but one component: each block kills all that the one below it left.
func ranks(c *chain.Complex) []uint64 {
	list := make([]uint64, c.Top()+2)
	for k := 1; k <= c.Top(); k++ {
		left := uint64(c.Cells[k-1]) - list[k-1]
		if k == 1 && left > 0 {
			left--
		}
		list[k] = min(uint64(c.Cells[k]), left)
	}
	return list
}

// tell says the plan in words.
func (o *outlook) tell(w io.Writer) error {
	for k, n := range o.Cells {
		fmt.Fprintf(w, "Degree %d: %d cells.\n", k, n)
	}
	for _, b := range o.Blocks {
		fmt.Fprintf(w, "Block %d: %d entries; ", b.Degree, b.Nonzeros)
		if b.Method != string(plan.Reduce) {
			fmt.Fprintf(w, "nothing to reduce: %s.\n", b.Reason)
			continue
		}
		fmt.Fprintf(w, "%s route (%s); about %d of %d columns are left to reduce; workers: %d, tiles: %d.\n",
			b.Route, b.Reason, b.Residual, b.Columns, b.Workers, b.Tiles)
	}
	if o.Truncated {
		fmt.Fprintf(w, "The complex is cut above degree %d.\n", len(o.Cells)-2)
	}
	_, err := fmt.Fprintf(w, "Memory: about %d MiB. Time: very roughly %.2g CPU seconds; fill-in does not show in counts.\n", o.Memory>>20, o.CPU)
	return err
}
