package reduce

import (
	"context"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/block"
	"pairloom/sparse/column"
	"pairloom/sparse/compress"
)

// textbook pairs a block by adding columns left to right, entry by entry: row →
// column. An independent twin of two dozen lines.
func textbook(rows int, cols [][]uint32) []uint32 {
	mate := slices.Repeat([]uint32{block.None}, rows)
	done := make([]map[uint32]bool, len(cols))
	for j, col := range cols {
		c := map[uint32]bool{}
		for _, r := range col {
			c[r] = true
		}
		for len(c) > 0 {
			top := uint32(0)
			for r := range c {
				top = max(top, r)
			}
			if mate[top] == block.None {
				mate[top], done[j] = uint32(j), c
				break
			}
			for r := range done[mate[top]] {
				if c[r] {
					delete(c, r)
				} else {
					c[r] = true
				}
			}
		}
	}
	return mate
}

func randomBlock(r *rand.Rand) (int, [][]uint32) {
	rows, n := 1+r.IntN(150), r.IntN(120)
	width := 1 + r.IntN(12)
	cols := make([][]uint32, n)
	for j := range cols {
		set := map[uint32]bool{}
		for range r.IntN(width + 1) {
			set[uint32(r.IntN(rows))] = true
		}
		for row := range set {
			cols[j] = append(cols[j], row)
		}
		slices.Sort(cols[j])
	}
	return rows, cols
}

func all(n int) func(func(uint32) bool) {
	return func(yield func(uint32) bool) {
		for j := range uint32(n) {
			if !yield(j) {
				return
			}
		}
	}
}

// Any matrix over Z/2 has unique pairs; order, goroutines, apparent pairs, route
// and form do not change them.
func TestSolveAgreesWithTextbook(t *testing.T) {
	evictions := uint64(0)
	for seed := range uint64(3000) {
		r := rand.New(rand.NewPCG(seed, 7))
		rows, cols := randomBlock(r)
		want := textbook(rows, cols)
		m := block.FromColumns(uint32(rows), cols)
		p := Problem{Columns: m, Seed: seed, Form: column.Form(seed % 3)}
		order := r.Perm(len(cols))
		shuffled := func(yield func(uint32) bool) {
			for _, j := range order {
				if !yield(uint32(j)) {
					return
				}
			}
		}
		got, counts, err := Solve(t.Context(), p, shuffled, 1+int(seed%3))
		require.NoError(t, err)
		require.Equal(t, want, got, "seed %d", seed)
		evictions += counts.Evictions

		pivotOf, rest := make([]uint32, rows), []uint32{}
		_, err = compress.Apparent(t.Context(), m, pivotOf, func(j uint32) { rest = append(rest, j) })
		require.NoError(t, err)
		p.Apparent = pivotOf
		got, _, err = Solve(t.Context(), p, slices.Values(rest), 2)
		require.NoError(t, err)
		for row, j := range pivotOf {
			if j != block.None {
				require.Equal(t, uint32(block.None), got[row])
				got[row] = j
			}
		}
		require.Equal(t, want, got, "apparent pairs, seed %d", seed)
	}
	require.Greater(t, evictions, uint64(10_000), "the test must reach evictions")
}

// The anti-transpose has the same pairs (de Silva, Morozov, Vejdemo-Johansson 2011).
func TestTurnedBlockHasTheSamePairs(t *testing.T) {
	dir := t.TempDir()
	for seed := range uint64(300) {
		r := rand.New(rand.NewPCG(seed, 8))
		rows, cols := randomBlock(r)
		m := block.FromColumns(uint32(rows), cols)
		turned, err := compress.Turn(t.Context(), m, nil, nil, dir+"/"+string(rune('a'+seed%26))+string(rune('0'+seed/26)))
		require.NoError(t, err)
		require.NoError(t, turned.Check())
		got, _, err := Solve(t.Context(), Problem{Columns: turned, Seed: seed}, all(rows), 1)
		require.NoError(t, err)
		require.Equal(t, textbook(rows, cols), compress.TurnPairs(got, uint32(rows)), "seed %d", seed)
		require.NoError(t, turned.Close())
	}
}

// Graph blocks, both ways, against the same twin.
func TestGraphBlocks(t *testing.T) {
	for seed := range uint64(1000) {
		r := rand.New(rand.NewPCG(seed, 9))
		rows, n := 1+r.IntN(60), r.IntN(90)
		cols := make([][]uint32, n)
		for j := range cols {
			for range r.IntN(3) {
				if row := uint32(r.IntN(rows)); !slices.Contains(cols[j], row) {
					cols[j] = append(cols[j], row)
				}
			}
			slices.Sort(cols[j])
		}
		got := make([]uint32, rows)
		require.NoError(t, compress.Graph(t.Context(), block.FromColumns(uint32(rows), cols), got))
		require.Equal(t, textbook(rows, cols), got, "seed %d", seed)

		turned := make([][]uint32, rows) // a block whose rows have at most two entries
		for j, col := range cols {
			for _, row := range col {
				turned[row] = append(turned[row], uint32(j))
			}
		}
		got = make([]uint32, n)
		require.NoError(t, compress.DualGraph(t.Context(), block.FromColumns(uint32(n), turned), nil, got))
		require.Equal(t, textbook(n, turned), got, "seed %d", seed)
	}
}

// Every invariant after every offer, one hand, random order.
func TestInvariantsHoldAfterEveryOffer(t *testing.T) {
	for seed := range uint64(40) {
		r := rand.New(rand.NewPCG(seed, 10))
		rows, cols := randomBlock(r)
		p := &Problem{Columns: block.FromColumns(uint32(rows), cols), Seed: seed, Tiling: Cut(uint32(rows), 1, 1)}
		table := NewTable(p)
		h := table.NewHand()
		for _, j := range r.Perm(len(cols)) {
			require.NoError(t, h.OfferInitial(uint32(j)))
			require.NoError(t, table.Check())
		}
	}
}

func TestTilingIsABijection(t *testing.T) {
	for seed := range uint64(500) {
		r := rand.New(rand.NewPCG(seed, 11))
		tl := Cut(uint32(r.IntN(300)), 1+r.IntN(5), 1+r.IntN(9))
		for row := range tl.Rows {
			self := tl.Owner(tl.Tile(row))
			require.Less(t, uint64(tl.slot(row)), tl.slots(self))
			require.Equal(t, row, tl.row(self, tl.slot(row)))
		}
	}
}

// Damage to a column that is being stored is always seen before it can be used.
func TestDamagedColumnsAreSeen(t *testing.T) {
	seen := 0
	for seed := range uint64(500) {
		r := rand.New(rand.NewPCG(seed, 12))
		rows, cols := randomBlock(r)
		p := &Problem{Columns: block.FromColumns(uint32(rows), cols), Seed: seed, Tiling: Cut(uint32(rows), 1, 1)}
		h := NewTable(p).NewHand()
		left, resting := r.IntN(20), true
		h.Tamper(func(c *column.Column) { // called before a column is stored, and after
			if resting = !resting; resting {
				return
			}
			if left--; left == -1 && len(c.Words) > 0 {
				c.Words[r.IntN(len(c.Words))] ^= 1 << r.IntN(64)
			}
		})
		var err error
		for j := range cols {
			if err = h.OfferInitial(uint32(j)); err != nil {
				break
			}
		}
		if left < 0 {
			require.ErrorAs(t, err, new(*Failure))
			seen++
		}
	}
	require.Greater(t, seen, 200)
}

func TestSolveStopsWhenTold(t *testing.T) {
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	_, _, err := Solve(ctx, Problem{Columns: block.FromColumns(2, [][]uint32{{0}, {0, 1}})}, all(2), 1)
	require.ErrorIs(t, err, context.Canceled)
}
