// Package agree runs whole jobs in one process, on thousands of random complexes
// and under random options, and compares every block's pairs with the textbook
// reduction of the block that the job published. It proves its own reach: see
// reach below.
package agree

import (
	"context"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/coordinator/cmd/inprocess"
	"pairloom/coordinator/plan"
	"pairloom/coordinator/report"
	coordinator "pairloom/coordinator/server"
	"pairloom/sparse/chain"
	"pairloom/sparse/oracle"
	"pairloom/sparse/source"
	"pairloom/sparse/stage"
)

// options draws one way of doing the work.
func options(r *rand.Rand) (plan.Options, int, int) {
	o := plan.Options{Spread: r.IntN(8) > 0, PerTile: 1 + r.IntN(8), Recheck: r.IntN(2) == 0,
		Route: []string{"auto", "boundary", "coboundary", "boundary"}[r.IntN(4)], Form: []string{"", "lists", "pairs"}[r.IntN(3)]}
	for _, step := range []struct {
		name string
		odds int
	}{{"apparent", 3}, {"graph", 7}, {"clearing", 5}, {"compression", 20}} {
		if r.IntN(step.odds) == 0 {
			o.Without = append(o.Without, step.name)
		}
	}
	return o, 1 + r.IntN(4), 1 + r.IntN(4)
}

// boundaries reads the blocks that a job published.
func boundaries(t *testing.T, folder string) [][][]uint32 {
	c, err := chain.Read(stage.Order(folder))
	require.NoError(t, err)
	out := make([][][]uint32, len(c.Cells))
	out[0] = make([][]uint32, c.Cells[0])
	for k := 1; k <= c.Top(); k++ {
		m, err := chain.OpenBlock(stage.Order(folder), k, false)
		require.NoError(t, err)
		for j := range m.Cols {
			out[k] = append(out[k], append([]uint32{}, m.Column(j, nil)...))
		}
		require.NoError(t, m.Close())
	}
	return out
}

// compare holds a job's pairs against the textbook reduction, cell by cell.
func compare(t *testing.T, folder string, c *chain.Complex) oracle.Pairs {
	want := oracle.Reduce(boundaries(t, folder))
	for k := 1; k <= c.Top(); k++ {
		p, err := stage.OpenPairs(folder, k, c.Cells[k-1], c.Cells[k])
		require.NoError(t, err)
		for i, j := range p.Mate {
			require.Equal(t, want.Mate[k-1][i], j, "block %d, row %d", k, i)
		}
		require.NoError(t, p.Close())
	}
	return want
}

func run(t *testing.T, folder string, spec source.Spec, o plan.Options, workers, threads int) *report.Run {
	got, err := inprocess.Run(context.Background(), inprocess.Config{Version: "test", Workers: workers, Threads: threads},
		coordinator.Job{Name: "test", Folder: folder, Spec: spec, Options: o}, nil)
	require.NoError(t, err, "%+v %+v workers %d threads %d", spec, o, workers, threads)
	return got
}

// reach counts in how many cases each thing that can go wrong really happened.
type reach struct {
	cases                                                            int
	evictions, cleared, dropped, exchanged, threeTiles, ties, topped int
}

func (n *reach) add(run *report.Run, want oracle.Pairs, tied bool) {
	n.cases++
	var evictions, cleared, dropped, tiles uint64
	for _, b := range run.Blocks {
		evictions, cleared, dropped = evictions+b.Evictions, cleared+b.Cleared, dropped+b.RowsDropped
	}
	for _, m := range run.Crew {
		tiles = max(tiles, m.Tiles)
	}
	count := func(n *int, yes bool) {
		if yes {
			*n++
		}
	}
	c := run.Complex
	count(&n.evictions, evictions > 0)
	count(&n.cleared, cleared > 0)
	count(&n.dropped, dropped > 0)
	count(&n.exchanged, run.Exchanged > 0)
	count(&n.threeTiles, tiles >= 3)
	count(&n.ties, tied)
	count(&n.topped, c.Truncated && len(want.Essential(c.Degrees)) > 0)
}

func (n *reach) check(t *testing.T) {
	t.Logf("%+v", *n)
	for name, hits := range map[string]int{"evictions": n.evictions, "cleared columns": n.cleared, "dropped rows": n.dropped,
		"exchanged columns": n.exchanged, "three or more tiles on a worker": n.threeTiles, "ties": n.ties, "homology at a truncated top": n.topped} {
		require.GreaterOrEqual(t, hits*5, n.cases, "%s in too few of %d cases", name, n.cases)
	}
}

func cases() uint64 {
	if raced {
		return 150
	}
	return 2500
}

func TestJobsAgreeWithTheTextbook(t *testing.T) {
	dir := t.TempDir()
	var n reach
	for seed := range cases() {
		r := rand.New(rand.NewPCG(seed, 1))
		folder := filepath.Join(dir, fmt.Sprint(seed))
		require.NoError(t, os.Mkdir(folder, 0o755))
		spec, tied := randomInput(t, r, folder)
		o, workers, threads := options(r)
		got := run(t, folder, spec, o, workers, threads)
		n.add(got, compare(t, folder, got.Complex), tied)
		require.NoError(t, os.RemoveAll(folder))
	}
	n.check(t)
}
