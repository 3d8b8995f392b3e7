// Package compress settles locally what can be settled locally, block by block and
// without any traffic, so that only a residue of columns is left to be reduced.
//
//   - Apparent pairs (τ,σ): τ is σ's latest facet and σ is τ's earliest cofacet.
//     Column σ is already reduced, and no earlier column holds τ.
//   - Graph blocks: a block whose columns (or, by duality, rows) have at most two
//     entries is a graph; union–find with the elder rule gives its pairs.
//   - Clearing (Chen, Kerber 2011) and row compression (Bauer, Kerber,
//     Reininghaus 2014): a k-cell known as a birth has a zero column in block k; a
//     k-cell known as a death has a useless row in block k+1. Masks are bit sets
//     that are fixed before the first column of a block is read.
//
// Ranks, rows and columns are those of package block. Every function is one pass
// over the block's entries and safe to run beside others on other blocks.
package compress

import (
	"context"

	"pairloom/sparse/block"
	"pairloom/sparse/column"
)

// checkEvery is how many columns are handled between two looks at the context.
const checkEvery = 1 << 16

// Apparent finds the apparent pairs of a block in one pass over its columns.
// It fills pivotOf (length rows): row → its apparent column, or block.None, and
// calls residual with every other column, ascending. Memory: rows/8 bytes.
func Apparent(ctx context.Context, m block.Columns, pivotOf []uint32, residual func(j uint32)) (pairs uint32, err error) {
	rows, cols := m.Shape()
	seen := column.NewBits(rows)
	for r := range pivotOf {
		pivotOf[r] = block.None
	}
	var buf []uint32
	for j := range cols {
		if j%checkEvery == 0 && ctx.Err() != nil {
			return 0, context.Cause(ctx)
		}
		col := m.Column(j, buf)
		if n := len(col); n == 0 || seen.Has(col[n-1]) {
			residual(j)
		} else {
			pivotOf[col[n-1]] = j
			pairs++
		}
		for _, r := range col {
			seen.Set(r)
		}
	}
	return pairs, nil
}
