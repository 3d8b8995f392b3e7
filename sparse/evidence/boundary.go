// Package evidence gathers what can see a wrong input or a wrong reduction.
// Euler–Poincaré and its like cannot: they are identities of the bookkeeping.
//
//   - ∂∂ = 0, by random words: every (k−2)-cell has a 64-bit word (column.Word), a
//     (k−1)-cell's word is the XOR of its facets' words, and every k-cell must give
//     0. A block with ∂∂ ≠ 0 passes with probability 2⁻⁶⁴ a cell. O(nonzeros).
//   - Fates: every column of a block ends with exactly one recorded fate.
//   - Second answer: two independent answers for one block have the same pairs.
//
// Carried checksums and i < j are checked where columns are added (package reduce).
package evidence

import (
	"context"
	"fmt"

	"pairloom/sparse/block"
	"pairloom/sparse/column"
)

// Broken is evidence against an input or a result; exit code 70, or 65 where the
// input itself is at fault.
type Broken struct {
	Check  string // which check
	Degree int    // of the block
	Why    string
}

func (b *Broken) Error() string {
	return fmt.Sprintf("evidence: %s: block %d: %s", b.Check, b.Degree, b.Why)
}

// BoundaryOfBoundary checks ∂_{k−1}∂_k = 0 for low = ∂_{k−1} and high = ∂_k, which
// must have as many rows as low has columns. It names the first k-cell that fails.
// Memory: 8 bytes a (k−1)-cell.
func BoundaryOfBoundary(ctx context.Context, k int, low, high block.Columns, seed uint64) error {
	_, mid := low.Shape()
	rows, cols := high.Shape()
	if rows != mid {
		return &Broken{"boundary of boundary", k, fmt.Sprintf("%d rows where the block below has %d columns", rows, mid)}
	}
	words := make([]uint64, mid)
	var buf []uint32
	for j := range mid {
		if j%(1<<16) == 0 && ctx.Err() != nil {
			return context.Cause(ctx)
		}
		w := uint64(0)
		for _, r := range low.Column(j, buf) {
			w ^= column.Word(seed, r)
		}
		words[j] = w
	}
	for j := range cols {
		if j%(1<<16) == 0 && ctx.Err() != nil {
			return context.Cause(ctx)
		}
		w := uint64(0)
		for _, r := range high.Column(j, buf) {
			w ^= words[r]
		}
		if w != 0 {
			return &Broken{"boundary of boundary", k, fmt.Sprintf("the boundary of the boundary of %d-cell %d is not zero mod 2", k, j)}
		}
	}
	return nil
}
