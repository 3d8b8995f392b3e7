package order

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"
	"gonum.org/v1/gonum/graph/simple"
	"gonum.org/v1/gonum/graph/topo"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// flagCells counts the simplices that a file gives.
func flagCells(t *testing.T, spec source.Spec) []uint32 {
	build := map[source.Kind]func(context.Context, source.Spec, string, int, source.Progress) (*chain.Complex, error){
		source.Points: Points, source.Distances: Distances, source.Graph: Graph}[spec.Kind]
	c, err := build(t.Context(), spec, t.TempDir(), 2, source.Quiet{})
	require.NoError(t, err)
	require.Equal(t, len(c.Cells)-1 > spec.Degrees, c.Truncated)
	return c.Cells
}

// Numbers of simplices of published data. The counts, and the filtrations, are those of
// a set of reference diagrams made with a textbook algorithm and checked by Euler
// curves and ranks in PARI/GP; there, points enter by squared distance. Data: eurodist
// and quakes from R's datasets; iris (Fisher 1936) and digits (Alpaydin, Kaynak) from
// scikit-learn; co-appearances in Les Misérables (Knuth 1993) from networkx, as 32
// minus the number of chapters.
func TestFlagCounts(t *testing.T) {
	for _, c := range []struct {
		kind    source.Kind
		file    string
		degrees int
		scale   float64
		want    []uint32
	}{
		{source.Distances, "eurodist_km.csv", 3, 1e9, []uint32{21, 210, 1330, 5985, 20349}},
		{source.Points, "iris_tenths.csv", 1, 10, []uint32{150, 2639, 26211}},
		{source.Points, "digits_64.csv", 2, 40, []uint32{64, 241, 372, 396}},
		{source.Points, "quakes_400.csv", 1, 100, []uint32{400, 3228, 20962}},
		{source.Graph, "les_miserables.csv", 20, 40, []uint32{77, 254, 467, 639, 644, 476, 252, 91, 20, 2}},
	} {
		require.Equal(t, c.want, flagCells(t, flagSpec(c.kind, filepath.Join("testdata/flag", c.file), c.degrees, c.scale)), c.file)
	}
	// Vertices of a circle and of polytopes, by steps or by rank of the distance: all
	// simplices; the counts are binomial coefficients.
	for n, want := range map[int][]uint32{
		9:  {9, 36, 84, 126, 126, 84, 36, 9, 1},
		12: {12, 66, 220, 495, 792, 924, 792, 495, 220, 66, 12, 1},
		15: {15, 105, 455, 1365, 3003, 5005, 6435, 6435, 5005, 3003, 1365, 455, 105, 15, 1},
	} {
		g := newJoined(n)
		for u := range n {
			for v := range u {
				g.set(u, v, float64(min(u-v, n-u+v)))
			}
		}
		require.Equal(t, want, flagCells(t, flagSpec(source.Distances, place(t, "circle.csv", g.text("square")), n, 1e9)))
	}
	cube := "0 0 0\n0 0 1\n0 1 0\n0 1 1\n1 0 0\n1 0 1\n1 1 0\n1 1 1\n"
	require.Equal(t, []uint32{8, 28, 56, 70, 56, 28, 8, 1}, flagCells(t, flagSpec(source.Points, place(t, "cube.csv", cube), 9, 2)))
}

// Components and loops agree with gonum's.
func TestGraphSummary(t *testing.T) {
	r := rand.New(rand.NewPCG(22, 1))
	for range 40 {
		n := 1 + r.IntN(60)
		g, text, lines := simple.NewUndirectedGraph(), "", 1+r.IntN(90)
		for v := range n {
			g.AddNode(simple.Node(v))
		}
		for range lines {
			u, v := r.IntN(n), r.IntN(n)
			text += fmt.Sprintf("%d;%d\n", u, v)
			if u != v {
				g.SetEdge(g.NewEdge(simple.Node(u), simple.Node(v)))
			}
		}
		spec := flagSpec(source.Graph, place(t, "in.csv", text), 0, -1)
		spec.Vertices = n
		c, err := Graph(t.Context(), spec, t.TempDir(), 1, source.Quiet{})
		require.NoError(t, err)
		parts := uint64(len(topo.ConnectedComponents(g)))
		require.Equal(t, &chain.GraphCounts{Vertices: uint64(n), Edges: uint64(lines), Components: parts, Rank: uint64(n) - parts, Loops: uint64(lines+n) - 2*uint64(n) + parts}, c.Graph)
	}
}

// Every broken file gives one line that says where and what, and nothing is left.
func TestFlagBroken(t *testing.T) {
	for _, c := range []struct {
		kind       source.Kind
		name, text string
		want       []string
	}{
		{source.Points, "in.csv", "1,2\n3\n", []string{"line 2", "1 numbers; 2"}},
		{source.Points, "in.csv", "1,2\n3,x\n", []string{"line 2", "column 2", `"x"`}},
		{source.Points, "in.csv", "x y\n1 2\n3 inf\n", []string{"line 3", "column 2", "finite"}},
		{source.Points, "in.csv", "1,\n", []string{"line 1", "column 2"}},
		{source.Points, "in.csv", "# nothing\n\n", []string{"no data"}},
		{source.Points, "in.csv", "1e200\n-1e200\n", []string{"overflow", "scale the coordinates down"}},
		{source.Points, "in.npy", flagArray([]int{2, 1, 2}, false, []float64{1, 2, 3, 4}), []string{"3 axes"}},
		{source.Points, "in.npy", flagArray([]int{2, 2}, true, []float64{1, 2, math.NaN(), 4}), []string{"entry [0, 1]", "finite"}},
		{source.Points, "in.npy", flagArray([]int{3, 2}, false, []float64{1, 2}), []string{"16 found"}},
		{source.Distances, "in.csv", "0,1\n2,0\n", []string{"line 2, column 1", "line 1, column 2", "symmetric"}},
		{source.Distances, "in.csv", "0,1\n1,3\n", []string{"line 2, column 2", "diagonal"}},
		{source.Distances, "in.csv", "0,-1\n-1,0\n", []string{"line 1, column 2", "not negative"}},
		{source.Distances, "in.csv", "0\n-1 0\n", []string{"line 2, column 1", "not negative"}},
		{source.Distances, "in.csv", "0,1\n1,nan\n", []string{"line 2", "column 2", "finite"}},
		{source.Distances, "in.csv", "0,1,2\n1,0,3\n", []string{"line 2", "square"}},
		{source.Distances, "in.csv", "0,1\n1,0\n1,0\n", []string{"line 3", "square"}},
		{source.Distances, "in.csv", "0,1\n1,0,1\n", []string{"line 2", "3 numbers; 2"}},
		{source.Distances, "in.csv", "1\n2,3,4\n", []string{"line 2", "lower triangular"}},
		{source.Distances, "in.csv", "", []string{"no data"}},
		{source.Distances, "in.npy", flagArray([]int{1, 2}, false, []float64{0, 1}), []string{"square"}},
		{source.Distances, "in.npy", flagArray([]int{2, 2}, false, []float64{0, 1, 2, 0}), []string{"entry [1, 0]", "entry [0, 1]", "symmetric"}},
		{source.Distances, "in.npy", flagArray([]int{2, 2}, true, []float64{0, 1, 2, 0}), []string{"entry [0, 1]", "entry [1, 0]", "symmetric"}},
		{source.Distances, "in.npy", flagArray([]int{2, 2}, false, []float64{0, math.Inf(1), 2, 0}), []string{"entry [0, 1]", "finite"}},
		{source.Graph, "in.csv", "1\n", []string{"line 1", "1 fields"}},
		{source.Graph, "in.csv", "1,2,3,4\n", []string{"line 1", "4 fields"}},
		{source.Graph, "in.csv", "0,1,2\n1,2\n", []string{"line 2", "either all edges have a value or none"}},
		{source.Graph, "in.csv", "0,1\na,2,3\n", []string{"line 2", "either all edges have a value or none"}},
		{source.Graph, "in.csv", "0,1,-2\n", []string{"line 1", "at least 0"}},
		{source.Graph, "in.csv", "0,1,1\na,1,nan\n", []string{"line 2", "at least 0"}},
		{source.Graph, "in.csv", "0,1,inf\n", []string{"line 1", "finite"}},
		{source.Graph, "in.csv", "0,1,x\n", []string{"line 1", `"x"`}},
		{source.Graph, "in.csv", "0,,1\n", []string{"line 1", "endpoint"}},
		{source.Graph, "in.csv", "u,v\n", []string{"no edge"}},
	} {
		dir := t.TempDir()
		spec := flagSpec(c.kind, place(t, c.name, c.text), -1, -1)
		requireFolder(t, dir, func() (*chain.Complex, error) {
			got, err := flagBuilders[c.kind](t.Context(), spec, dir, 2, source.Quiet{})
			var input *source.InputError
			require.ErrorAs(t, err, &input, "%q", c.text)
			require.NotContains(t, err.Error(), "\n")
			for _, part := range append(c.want, c.name) {
				require.Contains(t, err.Error(), part)
			}
			return got, err
		})
	}
}

// Options that mean nothing are usage errors.
func TestFlagUsage(t *testing.T) {
	names := place(t, "in.csv", "a,b,1\nb,c,2\n")
	spec := flagSpec(source.Graph, names, -1, -1)
	for vertices, ok := range map[int]bool{0: true, 3: true, 4: false, math.MaxUint32: false} {
		spec.Vertices = vertices
		_, err := Graph(t.Context(), spec, t.TempDir(), 1, source.Quiet{})
		var usage *source.UsageError
		require.Equal(t, !ok, errors.As(err, &usage), "%d: %v", vertices, err)
	}
	for kind, build := range flagBuilders {
		var usage *source.UsageError
		for _, scale := range []float64{math.NaN(), math.Inf(1), -1} {
			spec := flagSpec(kind, place(t, "in.csv", "0,1\n1,0\n"), -1, -1)
			spec.MaxScale = &scale
			_, err := build(t.Context(), spec, t.TempDir(), 1, source.Quiet{})
			require.ErrorAs(t, err, &usage)
		}
		_, err := build(t.Context(), source.Spec{Kind: kind}, t.TempDir(), 1, source.Quiet{})
		require.ErrorAs(t, err, &usage)
	}
}

var flagBuilders = map[source.Kind]func(context.Context, source.Spec, string, int, source.Progress) (*chain.Complex, error){
	source.Points: Points, source.Distances: Distances, source.Graph: Graph,
}

// Over budget: refused before any file, in the same words for any number of threads;
// the scale that is named fits, and the next longer edge does not.
func TestFlagBudget(t *testing.T) {
	r := rand.New(rand.NewPCG(22, 3))
	named := regexp.MustCompile(`use --max-scale (\S+), fewer`)
	for round := range 24 {
		n, text := 30+r.IntN(30), ""
		for range n {
			text += fmt.Sprintf("%d %d\n", r.IntN(40), r.IntN(40))
		}
		path := place(t, "in.csv", text)
		run := func(scale float64, budget uint64, threads int) error {
			spec := flagSpec(source.Points, path, round%4, scale)
			spec.MemoryBytes = budget
			dir := t.TempDir()
			var err error
			requireFolder(t, dir, func() (*chain.Complex, error) {
				var c *chain.Complex
				c, err = Points(t.Context(), spec, dir, threads, source.Quiet{})
				return c, err
			})
			return err
		}
		budget := uint64(n)*48 + 200 + uint64(r.IntN(60_000))
		err := run(100, budget, 1)
		if err == nil {
			continue
		}
		var big *source.TooBig
		require.ErrorAs(t, err, &big)
		require.EqualError(t, run(100, budget, 2), err.Error())
		require.Contains(t, err.Error(), fmt.Sprintf("%d vertices, %d edges", n, n*(n-1)/2))
		require.Contains(t, err.Error(), fmt.Sprintf("%d are allowed", budget))
		found := named.FindStringSubmatch(err.Error())
		require.NotNil(t, found, err.Error())
		scale, err := strconv.ParseFloat(found[1], 64)
		require.NoError(t, err)
		require.NoError(t, run(scale, budget, 1))
		if next := nextLength(text, scale); round%4 > 0 { // K = 0 may stop at a rougher bound
			require.ErrorAs(t, run(next, budget, 1), &big, "%v after %v", next, scale)
		}
	}
}

// nextLength is the shortest distance of two points above a scale.
func nextLength(text string, scale float64) float64 {
	var x, y []float64
	for line := range strings.Lines(text) {
		var a, b float64
		fmt.Sscan(line, &a, &b)
		x, y = append(x, a), append(y, b)
	}
	next := math.Inf(1)
	for i := range x {
		for j := range i {
			if d := math.Sqrt((x[i]-x[j])*(x[i]-x[j]) + (y[i]-y[j])*(y[i]-y[j])); d > scale {
				next = min(next, d)
			}
		}
	}
	return next
}

// A complete graph on many vertices is refused at once, whatever the degrees.
func TestFlagExplosion(t *testing.T) {
	n, text := 120, ""
	for u := range n {
		for v := range u {
			text += fmt.Sprintf("%d,%d,%d\n", u, v, u)
		}
	}
	for _, budget := range []uint64{1 << 24, 0} {
		spec := flagSpec(source.Graph, place(t, "in.csv", text), 1000, -1)
		spec.MemoryBytes = budget
		if budget == 0 {
			spec.Degrees = 40
			limit, cancel := context.WithCancelCause(t.Context())
			cancel(errors.New("stopped"))
			_, err := Graph(limit, spec, t.TempDir(), 2, source.Quiet{})
			require.EqualError(t, err, "stopped")
			continue
		}
		_, err := Graph(t.Context(), spec, t.TempDir(), 2, source.Quiet{})
		var big *source.TooBig
		require.ErrorAs(t, err, &big)
		require.Contains(t, err.Error(), "use --max-scale 1")
	}
}

// cutter ends a context when a stage begins.
type cutter struct {
	source.Quiet
	stage  string
	cancel context.CancelCauseFunc
}

func (c cutter) Stage(name string) {
	if name == c.stage {
		c.cancel(errors.New("cut short"))
	}
}

// A stop in any stage, or a name already taken, leaves no file behind.
func TestFlagLeavesNothing(t *testing.T) {
	forms := map[source.Kind]string{source.Points: "0 0\n0 1\n1 0\n1 1\n", source.Distances: "0\n1 0\n1 1 0\n", source.Graph: "0,1\n1,2\n0,2\n"}
	for kind, text := range forms {
		spec := flagSpec(kind, place(t, "in.csv", text), -1, -1)
		for _, stage := range []string{"read", "block"} {
			ctx, cancel := context.WithCancelCause(t.Context())
			dir := t.TempDir()
			requireFolder(t, dir, func() (*chain.Complex, error) {
				c, err := flagBuilders[kind](ctx, spec, dir, 1, cutter{stage: stage, cancel: cancel})
				require.EqualError(t, err, "cut short", "%s %s", kind, stage)
				return c, err
			})
		}
		for _, taken := range []string{"cells-0", "cells-2", "boundary-1", "boundary-2", "complex.json"} {
			dir := t.TempDir()
			require.NoError(t, os.WriteFile(filepath.Join(dir, taken), []byte("mine"), 0o644))
			_, err := flagBuilders[kind](t.Context(), spec, dir, 1, source.Quiet{})
			require.Error(t, err)
			require.Equal(t, map[string]string{taken: "mine"}, files(t, dir))
		}
	}
}

// The grid of cells misses no pair: duplicates, any dimension, tiny and huge numbers.
func TestPointsWithin(t *testing.T) {
	r := rand.New(rand.NewPCG(22, 4))
	for round := range 400 {
		s := &cloud{n: 1 + r.IntN(60), d: 1 + r.IntN(5)}
		unit := []float64{1, 1e-3, 1e-160, 1e150, 5e-324}[r.IntN(5)]
		s.at = make([]float64, s.n*s.d)
		for i := range s.at {
			s.at[i] = unit * r.NormFloat64()
			if round%3 == 0 {
				s.at[i] = unit * float64(r.IntN(12))
			}
		}
		scale := unit * []float64{0, 0.01, 0.3, 1, 3, 100}[r.IntN(6)]
		s.prepare(scale)
		for u := range s.n {
			var want []near
			for v := u + 1; v < s.n; v++ {
				if d := math.Sqrt(square(s.point(u), s.point(v))); d <= scale {
					want = append(want, near{uint32(v), d})
				}
			}
			require.Equal(t, want, s.within(u, scale, nil), "round %d, scale %v", round, scale)
		}
	}
}

// Intersections agree with a plain search, for lists of like and unlike lengths.
func TestIntersect(t *testing.T) {
	r := rand.New(rand.NewPCG(22, 5))
	draw := func(n int) (out []uint32) {
		for range n {
			out = append(out, uint32(r.IntN(400)))
		}
		slices.Sort(out)
		return slices.Compact(out)
	}
	for range 500 {
		x, y := draw(r.IntN(300)*r.IntN(2)+r.IntN(9)), draw(r.IntN(300)*r.IntN(2)+r.IntN(9))
		ranks := make([]uint32, len(y))
		for i := range ranks {
			ranks[i] = uint32(r.IntN(10))
		}
		most := min(len(x), len(y))
		place, rank := make([]uint32, most), make([]uint32, most)
		n := intersect(x, y, ranks, 5, place, rank)
		at := 0
		for i, v := range x {
			if j, ok := slices.BinarySearch(y, v); ok && ranks[j] < 5 {
				require.Less(t, at, n)
				require.Equal(t, []uint32{uint32(i), ranks[j]}, []uint32{place[at], rank[at]})
				at++
			}
		}
		require.Equal(t, at, n)
	}
}

// A hub that everything is joined to: long lists meet short ones.
func TestFlagHub(t *testing.T) {
	const n = 3000
	var text strings.Builder
	for v := range n {
		fmt.Fprintf(&text, "hub,%d\n%d,%d\n", v, v, (v+1)%n)
	}
	spec := flagSpec(source.Graph, place(t, "in.csv", "from,to\n"+text.String()), 4, -1)
	require.Equal(t, []uint32{n + 1, 2 * n, n}, flagCells(t, spec))
}

// No memory is taken for each simplex.
func TestFlagAllocations(t *testing.T) {
	spec := flagSpec(source.Points, place(t, "in.csv", cube(300)), 2, 0.4)
	spec.MemoryBytes = 1 << 30
	simplices := uint32(0)
	allocations := testing.AllocsPerRun(1, func() {
		c, err := Points(t.Context(), spec, t.TempDir(), 1, source.Quiet{})
		require.NoError(t, err)
		simplices = c.Cells[3]
	})
	require.Greater(t, simplices, uint32(10_000))
	require.Less(t, allocations, 1500.0)
}

// Any bytes as any of the three kinds: a whole folder, or an error and nothing.
func FuzzFlag(f *testing.F) {
	for which, text := range []string{"0,1\n1,0\n", "0\n1 0\n1 1 0\n", "0,1,2\na,b,3\n1,0,1\n", "3\n", flagArray([]int{2, 2}, true, []float64{0, 1, 1, 0})} {
		for kind := range byte(3) {
			f.Add([]byte(text), kind, int8(which-1), float64(which-1), which == 4)
		}
	}
	f.Fuzz(func(t *testing.T, text []byte, which byte, degrees int8, scale float64, array bool) {
		kind := []source.Kind{source.Points, source.Distances, source.Graph}[which%3]
		name := map[bool]string{true: "in.npy", false: "in.csv"}[array]
		spec := flagSpec(kind, place(t, name, string(text)), max(int(degrees), -1), scale)
		spec.MemoryBytes = 1 << 22
		dir := t.TempDir()
		requireFolder(t, dir, func() (*chain.Complex, error) {
			return flagBuilders[kind](context.Background(), spec, dir, 2, source.Quiet{})
		})
	})
}
