package oracle

import (
	"encoding/csv"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/gen"
)

func numbers(t *testing.T, text string) (out []int) {
	for _, f := range strings.Fields(text) {
		n, err := strconv.Atoi(f)
		require.NoError(t, err)
		out = append(out, n)
	}
	return out
}

func family(t *testing.T, name string, a []int) *gen.Filtered {
	switch name {
	case "skeleton":
		return gen.Skeleton(a[0], a[1])
	case "cross_polytope":
		return gen.CrossPolytope(a[0])
	case "matching":
		return gen.Matching(a[0])
	case "chessboard":
		return gen.Chessboard(a[0], a[1])
	case "not_connected":
		return gen.NotConnected(a[0], a[1])
	case "independent_path":
		return gen.IndependentPath(a[0])
	case "independent_cycle":
		return gen.IndependentCycle(a[0])
	case "linial_meshulam":
		return gen.LinialMeshulam(a[0], a[1], uint64(a[2]), uint64(a[3]), uint64(a[4]))
	case "random_flag":
		return gen.RandomFlag(a[0], uint64(a[1]), uint64(a[2]), uint64(a[3]))
	}
	require.Fail(t, "unknown family "+name)
	return nil
}

// betti reads "1 0 20", or reduced "3:1" (nothing: contractible) where degrees are not listed.
func betti(t *testing.T, text string, degrees int) []int {
	if !strings.Contains(text, ":") && text != "" {
		return numbers(t, text)
	}
	out := make([]int, degrees)
	out[0] = 1
	for _, f := range strings.Fields(text) {
		degree, rank, _ := strings.Cut(f, ":")
		out[numbers(t, degree)[0]] += numbers(t, rank)[0]
	}
	return out
}

// Families with closed formulas and seeded complexes. testdata/families.csv names the
// source of each value in its last column.
func TestFamilies(t *testing.T) {
	f, err := os.Open("testdata/families.csv")
	require.NoError(t, err)
	defer f.Close()
	lines, err := csv.NewReader(f).ReadAll()
	require.NoError(t, err)
	require.Greater(t, len(lines), 90)
	for _, l := range lines[1:] {
		c := family(t, l[0], numbers(t, l[1]))
		if l[2] != "" {
			require.Equal(t, numbers(t, l[2]), c.Cells(), "%s %s", l[0], l[1])
		}
		want := betti(t, l[3], len(c.Boundary))
		require.Equal(t, want, Reduce(c.Boundary).Betti(), "%s %s", l[0], l[1])
		if c.Betti != nil {
			require.Equal(t, want, c.Betti, "%s %s", l[0], l[1])
		}
	}
}

// General chain complexes have the pairs that they were built with.
func TestChainsHaveTheirPairs(t *testing.T) {
	long, empty := 0, 0
	for seed := range uint64(400) {
		r := gen.New(seed)
		var b, ranks []int
		for k := range 2 + r.IntN(4) {
			b, ranks = append(b, r.IntN(6)), append(ranks, min(k, 1)*r.IntN(16))
		}
		c := gen.Chain(r, b, ranks, r.IntN(8))
		p := Reduce(c.Boundary)
		require.Equal(t, c.Mate, p.Mate, "seed %d", seed)
		require.Equal(t, b, p.Betti(), "seed %d", seed)
		for k := 1; k < len(b); k++ {
			require.Equal(t, ranks[k], Rank(len(c.Boundary[k-1]), c.Boundary[k]))
			for _, column := range c.Boundary[k] {
				long, empty = max(long, len(column)), empty+1-min(len(column), 1)
			}
		}
		cut := c.Cut(1)
		require.Equal(t, b[:2], Reduce(cut.Boundary).Betti()[:2], "seed %d, cut", seed)
	}
	require.Greater(t, long, 20, "long columns")
	require.Greater(t, empty, 1000, "empty columns")
}

// The rank and the number of pairs of a block are the same number by two ways that
// share nothing.
func TestRankCountsPairs(t *testing.T) {
	for seed := range uint64(300) {
		c := gen.Simplicial(gen.New(seed), 12, 4, 30, 5)
		p := Reduce(c.Boundary)
		for k := 1; k < len(c.Boundary); k++ {
			rank := Rank(len(c.Boundary[k-1]), c.Boundary[k])
			require.Equal(t, rank, len(p.Births(k-1))-len(p.Essential(k-1)), "seed %d", seed)
			require.Equal(t, rank, len(c.Boundary[k])-len(p.Births(k)), "seed %d", seed)
		}
	}
}

// A filled triangle by hand: vertices 0 1 2, edges 01 02 12, one triangle.
func TestATriangleByHand(t *testing.T) {
	const none = 1<<32 - 1
	p := Reduce([][][]uint32{{nil, nil, nil}, {{0, 1}, {0, 2}, {1, 2}}, {{0, 1, 2}}})
	require.Equal(t, [][]uint32{{none, 0, 1}, {none, none, 0}, {none}}, p.Mate)
	require.Equal(t, []int{1, 0, 0}, p.Betti())
	require.Equal(t, []uint32{2}, p.Births(1))
	require.Equal(t, []uint32{0}, p.Essential(0))
}

func TestRankOfKnownMatrices(t *testing.T) {
	require.Zero(t, Rank(0, nil))
	require.Zero(t, Rank(3, [][]uint32{nil, nil}))
	require.Equal(t, 2, Rank(3, [][]uint32{{0, 1}, {1, 2}, {0, 2}}))
	var identity [][]uint32
	for i := range uint32(200) {
		identity = append(identity, []uint32{i})
	}
	require.Equal(t, 200, Rank(200, identity))
	slices.Reverse(identity)
	require.Equal(t, 200, Rank(200, identity))
}
