package gen

import (
	"fmt"
	"io"
	"math"
	"path/filepath"
	"slices"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/source/market"
	"pairloom/sparse/source/npy"
	"pairloom/sparse/source/table"
)

// The first numbers of seed 1234567 as published with the reference implementation
// (Vigna 2015, splitmix64.c) and repeated in many languages.
func TestSplitMix64(t *testing.T) {
	r := New(1234567)
	for _, want := range []uint64{6457827717110365317, 3203168211198807973, 9817491932198370423, 4593380528125082431, 16408922859458223821} {
		require.Equal(t, want, r.Uint64())
	}
}

func TestPermutations(t *testing.T) {
	r, seen := New(3), map[string]int{}
	for range 6000 {
		p := r.Perm(3)
		seen[fmt.Sprint(p)]++
		require.Equal(t, []int{0, 1, 2}, slices.Sorted(slices.Values(p)))
	}
	require.Len(t, seen, 6)
	for p, n := range seen {
		require.InDelta(t, 1000, n, 150, p)
	}
}

// whole checks what every filtered complex promises.
func whole(t *testing.T, f *Filtered) {
	for k := range f.Boundary {
		require.Len(t, f.Values[k], len(f.Boundary[k]))
		require.True(t, slices.IsSorted(f.Values[k]), "values of degree %d", k)
		for j, column := range f.Boundary[k] {
			odd := map[uint32]bool{}
			for at, row := range column {
				require.Less(t, int(row), len(f.Boundary[k-1]))
				require.True(t, at == 0 || column[at-1] < row, "entries ascend")
				require.LessOrEqual(t, f.Values[k-1][row], f.Values[k][j], "face after its coface")
				for _, i := range f.Boundary[k-1][row] {
					odd[i] = !odd[i]
				}
				if f.Vertices != nil {
					require.Subset(t, f.Vertices[k][j], f.Vertices[k-1][row])
				}
			}
			for i, yes := range odd {
				require.False(t, yes, "boundary of boundary of %d-cell %d at %d", k, j, i)
			}
			require.True(t, f.Vertices == nil || k == 0 || len(column) == k+1)
		}
	}
}

func TestComplexesAreWhole(t *testing.T) {
	ties := 0
	for seed := range uint64(150) {
		r := New(seed)
		f := Simplicial(r, 3+r.IntN(10), r.IntN(5), 1+r.IntN(20), 1+r.IntN(6))
		whole(t, f)
		whole(t, f.Cut(1))
		star, function := Star(r, 3+r.IntN(10), r.IntN(5), 1+r.IntN(20), 1+r.IntN(6))
		whole(t, star)
		for k := range star.Vertices {
			for j, s := range star.Vertices[k] {
				most := math.Inf(-1)
				for _, v := range s {
					most = max(most, function[v])
				}
				require.Equal(t, most, star.Values[k][j])
			}
			if len(star.Values[k]) > 1 && star.Values[k][0] == star.Values[k][1] {
				ties++
			}
		}
		whole(t, Chain(r, []int{1, r.IntN(4), 2}, []int{0, r.IntN(9), r.IntN(9)}, r.IntN(5)))
	}
	require.Greater(t, ties, 50)
	for _, f := range []*Filtered{Skeleton(5, 2), Matching(7), Chessboard(3, 4), CrossPolytope(4), IndependentPath(9), IndependentCycle(10),
		NotConnected(5, 2), LinialMeshulam(9, 2, 1, 2, 1), RandomFlag(12, 1, 2, 2)} {
		whole(t, f)
	}
}

// A path 0–1–2 with heights 1, 0, 1: vertex 1 first, then its star's edges by their other end.
func TestLowerStarOrder(t *testing.T) {
	f := Closure([][]uint32{{0, 1}, {1, 2}}).LowerStar([]float64{1, 0, 1})
	require.Equal(t, [][]uint32{{1}, {0}, {2}}, f.Vertices[0])
	require.Equal(t, [][]uint32{{0, 1}, {1, 2}}, f.Vertices[1])
	require.Equal(t, [][]uint32{{0, 1}, {0, 2}}, f.Boundary[1])
	require.Equal(t, []float64{0, 1, 1}, f.Values[0])
}

func TestGridsHaveValues(t *testing.T) {
	holes := 0
	for seed := range uint64(200) {
		a := Grid(New(seed), 1+int(seed%4), 4, 3, true)
		n, finite := 1, 0
		for _, side := range a.Shape {
			n *= side
		}
		require.Len(t, a.Values, n)
		for _, v := range a.Values {
			if !math.IsNaN(v) {
				finite++
			}
		}
		require.Positive(t, finite)
		holes += n - finite
	}
	require.Greater(t, holes, 500)
}

// Files are read back by the project's readers.
func TestFilesReadBack(t *testing.T) {
	dir := t.TempDir()
	f := Simplicial(New(5), 9, 3, 20, 4)
	paths, err := WriteMarket(dir, "d", f.Boundary)
	require.NoError(t, err)
	for k := 1; k < len(f.Boundary); k++ {
		r, err := market.Open(paths[k-1])
		require.NoError(t, err)
		columns := make([][]uint32, len(f.Boundary[k]))
		for {
			row, col, odd, err := r.Next()
			if err == io.EOF {
				break
			}
			require.NoError(t, err)
			require.True(t, odd)
			columns[col] = append(columns[col], row)
		}
		require.NoError(t, r.Close())
		require.Equal(t, f.Boundary[k], columns)
		require.Equal(t, columns, Transpose(len(columns), Transpose(len(f.Boundary[k-1]), columns)))
	}

	path := filepath.Join(dir, "simplices.csv")
	require.NoError(t, WriteSimplices(path, f))
	in, err := table.Open(path)
	require.NoError(t, err)
	defer in.Close()
	for k := range f.Vertices {
		for j, s := range f.Vertices[k] {
			require.True(t, in.Next())
			require.Len(t, in.Fields(), k+2)
			v, ok := table.ParseFloat(in.Fields()[0])
			require.True(t, ok)
			require.Equal(t, f.Values[k][j], v)
			for q, vertex := range s {
				got, ok := table.ParseUint32(in.Fields()[q+1])
				require.True(t, ok)
				require.Equal(t, vertex, got)
			}
		}
	}
	require.False(t, in.Next())
	require.NoError(t, in.Err())

	a := Grid(New(6), 3, 5, 9, false)
	path = filepath.Join(dir, "a.npy")
	require.NoError(t, WriteNPY(path, a.Shape, a.Values))
	n, err := npy.Open(path)
	require.NoError(t, err)
	defer n.Close()
	require.Equal(t, a.Shape, n.Header().Shape)
	got := make([]float64, n.Len())
	_, err = n.Read(got)
	require.NoError(t, err)
	require.Equal(t, a.Values, got)
}
