package plan

import (
	"fmt"
	"slices"

	"pairloom/sparse/chain"
)

// Route is the direction in which a block is reduced.
type Route string

// The routes: columns are k-cells, or (k−1)-cells in reverse order.
const (
	Boundary   Route = "boundary"
	Coboundary Route = "coboundary"
)

// Method is how a block is solved.
type Method string

// The methods.
const (
	Graph     Method = "graph"      // union–find, columns have at most two entries
	DualGraph Method = "dual graph" // union–find by duality, rows have at most two entries
	Reduce    Method = "reduce"
)

// Block is the plan for ∂_Degree.
type Block struct {
	Degree int
	Route  Route
	Method Method
	Reason string
	Clear  bool // columns known to be zero are skipped
	Drop   bool // rows known to be useless are not read
}

// Blocks plans the blocks 1..top of a complex, in the order in which they are to be
// solved: graph blocks first, as they are cheap and their results clear and compress
// the others; then the boundary route from the top down to above the richest degree,
// then the coboundary route from the bottom up to it. The waste of a reduction is in
// zero columns that nothing clears, β_k of them in the boundary route of block k and
// β_(k−1) in the coboundary route; β is estimated from the cell counts.
func Blocks(c *chain.Complex, o Options) []Block {
	rich := richest(c)
	var graphs, down, up []Block
	for k := 1; k <= c.Top(); k++ {
		b := Block{Degree: k, Clear: !slices.Contains(o.Without, "clearing"), Drop: !slices.Contains(o.Without, "compression")}
		b.Route, b.Reason = route(k, rich, o)
		b.Method = Reduce
		if !slices.Contains(o.Without, "graph") {
			graphMethod(&b, c)
		}
		switch {
		case b.Method != Reduce:
			graphs = append(graphs, b)
		case b.Route == Boundary:
			down = append(down, b)
		default:
			up = append(up, b)
		}
	}
	slices.Reverse(down)
	return slices.Concat(graphs, down, up)
}

func graphMethod(b *Block, c *chain.Complex) {
	switch k := b.Degree; {
	case c.Cells[k] == 0 || c.Cells[k-1] == 0 || at(c.ColsAtMost2, k):
		b.Method, b.Route, b.Reason = Graph, Boundary, "columns have at most two entries: union–find"
	case at(c.RowsAtMost2, k):
		b.Method, b.Route, b.Reason = DualGraph, Coboundary, "rows have at most two entries: union–find by duality"
	}
}

func at(list []bool, k int) bool { return k < len(list) && list[k] }

func route(k, rich int, o Options) (Route, string) {
	switch {
	case o.Route == string(Boundary) || o.Route == string(Coboundary):
		return Route(o.Route), "as asked"
	case rich == 0:
		return Boundary, "no degree is rich in homology"
	case k > rich:
		return Boundary, fmt.Sprintf("above the richest degree, %d", rich)
	}
	return Coboundary, fmt.Sprintf("not above the richest degree, %d", rich)
}

// poor is the share of a degree's cells below which an estimated Betti number is noise.
const poor = 0.002

// richest estimates from counts alone which degree has most homology; 0 if none does.
func richest(c *chain.Complex) int {
	ranks := make([]float64, c.Top()+2)
	for k := 1; k <= c.Top(); k++ {
		n := float64(c.Cells[k])
		if k == 1 {
			ranks[k] = min(n, max(float64(c.Cells[0])-1, 0))
			continue
		}
		ranks[k] = min(n, max(float64(c.Cells[k-1])-ranks[k-1], 0))
	}
	best, at := 0.0, 0
	for k := 1; k <= c.Top(); k++ {
		b := float64(c.Cells[k]) - ranks[k] - ranks[k+1]
		if b > best && b > poor*float64(c.Cells[k]) {
			best, at = b, k
		}
	}
	return at
}

// Seconds a residual column costs, measured: thin blocks (grids, triangulations)
// hardly fill in; where most columns stay after compression, they do.
const (
	secondsThin  = 3e-6
	secondsHeavy = 40e-6
	heavyShare   = 0.25
	secondsCore  = 0.1 // of reduction that a core must get to be worth its latency
)

// TilesAWorker is how many tiles a worker gets.
const TilesAWorker = 8

// each is what a residual column costs, in seconds.
func each(residual, columns uint64) float64 {
	if float64(residual) > heavyShare*float64(columns) {
		return secondsHeavy
	}
	return secondsThin
}

// Workers decides how many of a crew share a block: predicted reduction time divided
// by 100 ms a core, at least one.
func Workers(residual, columns uint64, threadsEach, crew int, o Options) int {
	if o.Spread {
		return crew
	}
	cores := float64(residual) * each(residual, columns) / secondsCore
	return max(1, min(crew, int(cores/float64(max(threadsEach, 1)))))
}

// secondsEntry is what an entry of a block costs apart from the reduction, measured on
// grids and triangulations: read, ordered, written, surveyed, checked twice, reported.
const secondsEntry = 150e-9

// Seconds predicts the CPU seconds that a block takes, reduction included, from its
// entries and residual columns. A lead within a small factor, not a promise: fill-in
// does not show in counts.
func Seconds(residual, columns, nonzeros uint64) float64 {
	return secondsEntry*float64(nonzeros) + each(residual, columns)*float64(residual)
}

// RecheckLimit is the number of residual columns up to which every block gets a second answer.
const RecheckLimit = 100_000
