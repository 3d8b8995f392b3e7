package order

import (
	"context"
	"encoding/csv"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync/atomic"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/oracle"
	"pairloom/sparse/source"
)

func gridded(path string, top bool, degrees int) source.Spec {
	return source.Spec{Kind: source.Grid, Inputs: []string{path}, Voxels: map[bool]string{false: "vertices", true: "cells"}[top], Degrees: degrees, MemoryBytes: testBudget}
}

// buildGrid runs Grid on an array file in a fresh folder.
func buildGrid(t *testing.T, text string, top bool, degrees, threads int) (string, *chain.Complex) {
	dir := t.TempDir()
	c, err := Grid(context.Background(), gridded(place(t, "in.npy", text), top, degrees), dir, threads, source.Quiet{})
	require.NoError(t, err)
	return dir, c
}

func (g gridArray) allOutside() bool {
	return !slices.ContainsFunc(g.values, func(v float64) bool { return !math.IsNaN(v) })
}

// Hundreds of random arrays agree, cell by cell and column by column, with the
// plainest enumeration; ∂∂ = 0; the number of threads does not matter.
func TestGridTwin(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for i := range 200 {
		g, top := randomGrid(r, i%3 == 0), i%2 == 0
		if g.allOutside() {
			continue
		}
		degrees := r.IntN(len(g.shape)+3) - 1
		dir, c := buildGrid(t, g.text("<f8", false), top, degrees, 1+r.IntN(4))
		requireGrid(t, dir, c, g, top, degrees)
		require.Equal(t, g.shape, c.Shape)
		requireGridNotes(t, c, g)
		requireComplex(t, gridBoundary(g.cells(top)))
	}
}

func requireGridNotes(t *testing.T, c *chain.Complex, g gridArray) {
	outside := 0
	for _, v := range g.values {
		if math.IsNaN(v) {
			outside++
		}
	}
	if outside == 0 {
		require.Empty(t, c.Notes)
		return
	}
	require.Equal(t, []chain.Note{{What: "NaN voxels outside the complex", Count: uint64(outside)}}, c.Notes)
}

// requireComplex asks for ∂∂ = 0.
func requireComplex(t *testing.T, boundary [][][]uint32) {
	for k := 2; k < len(boundary); k++ {
		for _, col := range boundary[k] {
			odd := map[uint32]bool{}
			for _, f := range col {
				for _, e := range boundary[k-1][f] {
					odd[e] = !odd[e]
				}
			}
			for e := range odd {
				if odd[e] {
					require.Failf(t, "∂∂ is not 0", "column %v of block %d", col, k)
				}
			}
		}
	}
}

// One array stored in any order of axes, order of bytes and type that holds it
// makes the same files.
func TestGridStorage(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 2))
	for i := range 6 {
		g := randomGrid(r, false)
		for j, v := range g.values {
			g.values[j] = math.Abs(math.Mod(v, 100))
		}
		top := i%2 == 0
		dir, _ := buildGrid(t, g.text("|u1", false), top, -1, 1)
		want := files(t, dir)
		for _, descr := range []string{"|u1", "<u2", ">u2", "<i2", ">i2", "<i4", ">i4", "<i8", ">i8", "<f4", ">f4", "<f8", ">f8"} {
			for _, fortran := range []bool{false, true} {
				dir, _ := buildGrid(t, g.text(descr, fortran), top, -1, 2)
				require.Equal(t, want, files(t, dir), "%s, Fortran order %v", descr, fortran)
			}
		}
	}
}

// The pairs, as the centres that they are named by, do not depend on the order
// inside a star: Grid's own, the one by all vertices (top cells), and a random one
// give the same, pairs of length zero included.
func TestGridStarOrder(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 3))
	for i := range 200 {
		g, top := randomGrid(r, i%3 == 0), i%2 == 0
		if g.allOutside() {
			continue
		}
		cells := g.cells(top)
		want := namedPairs(cells)
		for _, k := range cells {
			slices.SortStableFunc(k, func(a, b gridCell) int { return slices.Compare(a.centres, b.centres) })
		}
		require.Equal(t, want, namedPairs(cells))
		for _, k := range cells {
			r.Shuffle(len(k), func(i, j int) { k[i], k[j] = k[j], k[i] })
			slices.SortStableFunc(k, func(a, b gridCell) int { return a.centres[0] - b.centres[0] })
		}
		require.Equal(t, want, namedPairs(cells))
	}
}

// namedPairs reduces a complex and lists its pairs by degree and centres.
func namedPairs(cells [][]gridCell) []string {
	var out []string
	dead := make([]map[uint32]bool, len(cells)+1)
	for k := range dead {
		dead[k] = map[uint32]bool{}
	}
	for k, mates := range oracle.Reduce(gridBoundary(cells)).Mate {
		for i, j := range mates {
			switch {
			case j != block.None:
				dead[k+1][j] = true
				out = append(out, fmt.Sprint(k, cells[k][i].centre, cells[k+1][j].centre))
			case !dead[k][uint32(i)]:
				out = append(out, fmt.Sprint(k, cells[k][i].centre, "never"))
			}
		}
	}
	slices.Sort(out)
	return out
}

// Reference diagrams and counts of cells: checks/persistence.csv, rows cubical_*
// (rows of an image of 28 × 28, a height map of 87 × 61, a negated block of a
// volume, 16 × 18 × 16), with the diagrams of checks/persistence.
func TestGridReference(t *testing.T) {
	for _, at := range []struct {
		array, diagram string
		top            bool
		cells          []uint32
		reported       int
	}{
		{"fashion_0", "fashion_0", false, []uint32{784, 1512, 729}, 2},
		{"volcano", "volcano_vertices", false, []uint32{5307, 10466, 5160}, 2},
		{"volcano", "volcano_cells", true, []uint32{5456, 10762, 5307}, 2},
		{"brain", "brain", false, []uint32{4608, 12992, 12210, 3825}, 3},
	} {
		dir := t.TempDir()
		c, err := Grid(context.Background(), gridded("testdata/grid_"+at.array+".npy", at.top, -1), dir, 2, source.Quiet{})
		require.NoError(t, err)
		require.Equal(t, at.cells, c.Cells)
		if testing.Short() && len(at.cells) > 3 {
			continue
		}
		require.Equal(t, readDiagram(t, "testdata/grid_"+at.diagram+".csv"), diagram(t, dir, c), at.diagram)
	}
}

func readDiagram(t *testing.T, path string) (rows []string) {
	f, err := os.Open(path)
	require.NoError(t, err)
	defer f.Close()
	lines, err := csv.NewReader(f).ReadAll()
	require.NoError(t, err)
	for _, l := range lines[1:] {
		row := l[0]
		for _, field := range l[1:] {
			v, err := strconv.ParseFloat(field, 64)
			require.NoError(t, err)
			row += fmt.Sprint(" ", v)
		}
		rows = append(rows, row)
	}
	slices.Sort(rows)
	return rows
}

// diagram reduces the blocks of a folder and lists degree, birth and death.
func diagram(t *testing.T, dir string, c *chain.Complex) (rows []string) {
	table, err := chain.OpenTable(dir)
	require.NoError(t, err)
	defer table.Close()
	boundary := [][][]uint32{make([][]uint32, c.Cells[0])}
	for k := 1; k <= c.Top(); k++ {
		m, err := chain.OpenBlock(dir, k, false)
		require.NoError(t, err)
		defer m.Close()
		boundary = append(boundary, make([][]uint32, m.Cols))
		for j := range m.Cols {
			boundary[k][j] = m.Column(j, nil)
		}
	}
	dead := make([]bool, slices.Max(c.Cells))
	for k, mates := range oracle.Reduce(boundary).Mate {
		next := make([]bool, len(dead))
		for i, j := range mates {
			birth, death := table.Value(k, uint32(i)), math.Inf(1)
			if j != block.None {
				next[j], death = true, table.Value(k+1, j)
			}
			if !dead[i] && birth != death {
				rows = append(rows, fmt.Sprint(k, " ", birth, " ", death))
			}
		}
		dead = next
	}
	slices.Sort(rows)
	return rows
}

// Every broken array gives one sentence about it and leaves nothing in the folder.
func TestGridBroken(t *testing.T) {
	g := gridArray{shape: []int{2, 3}, values: []float64{1, 2, 3, 4, 5, 6}}
	good := g.text("<f8", false)
	with := func(at int, v float64) string {
		values := slices.Clone(g.values)
		values[at] = v
		return gridArray{g.shape, values}.text("<f8", false)
	}
	nan := math.NaN()
	whole := gridArray{[]int{2}, []float64{1, 2}}.text("<i8", false)
	turned := gridArray{[]int{2, 3}, []float64{0, 0, math.Inf(1), 0, 0, 0}}.text("<f4", true)
	for name, at := range map[string]struct{ text, why string }{
		"empty":           {"", "not a NumPy"},
		"magic":           {"X" + good[1:], "not a NumPy"},
		"in the header":   {good[:40], "cut short"},
		"in the values":   {good[:len(good)-9], "48 bytes expected after the header (shape 2 × 3 of f64), 39 found"},
		"no values":       {good[:len(good)-48], "48 bytes expected after the header (shape 2 × 3 of f64), 0 found"},
		"trailing":        {good + "x", "49 found"},
		"complex numbers": {strings.Replace(good, "<f8", "<c8", 1), "type \"<c8\" are not read; accepted are u1"},
		"huge":            {gridArray{[]int{1 << 62, 1 << 62}, nil}.text("<f8", false), "more than any file can hold"},
		"large":           {gridArray{[]int{1 << 20, 1 << 20}, nil}.text("|u1", false), "1099511627776 bytes expected after the header (shape 1048576 × 1048576 of u8), 0 found"},
		"negative":        {gridArray{[]int{-2, 3}, g.values}.text("<f8", false), "negative length"},
		"zero length":     {gridArray{[]int{2, 0}, nil}.text("<f8", false), "axis 1 of the array has length 0"},
		"no axes":         {strings.Replace(gridArray{[]int{1}, []float64{1}}.text("<f8", false), "(1,)", "()  ", 1), "0 axes"},
		"five axes":       {gridArray{[]int{1, 1, 1, 1, 1}, []float64{1}}.text("<f8", false), "5 axes"},
		"infinite":        {with(4, math.Inf(-1)), "voxel (1, 1) is infinite; use NaN"},
		"infinite turned": {turned, "voxel (0, 2) is infinite; use NaN"},
		"all outside":     {gridArray{[]int{2}, []float64{nan, nan}}.text("<f4", false), "every voxel is NaN"},
		"not exact":       {whole[:len(whole)-8] + "\x01\x00\x00\x00\x00\x00\x20\x00", "value 1 (in file order) is a 64-bit integer"},
	} {
		for _, top := range []bool{false, true} {
			dir := t.TempDir()
			_, err := Grid(context.Background(), gridded(place(t, "in.npy", at.text), top, -1), dir, 2, source.Quiet{})
			var broken *source.InputError
			require.ErrorAs(t, err, &broken, name)
			require.Contains(t, err.Error(), at.why, name)
			require.NotContains(t, err.Error(), "\n", name)
			require.Empty(t, files(t, dir), name)
		}
	}
}

// What would not fit is refused before a value is read; other misuse is named.
func TestGridRefused(t *testing.T) {
	dir := t.TempDir()
	g := gridArray{shape: []int{3}, values: []float64{1, 2, 3}}
	spec := gridded(place(t, "in.npy", g.text("<f8", false)), false, -1)
	run := func(s source.Spec, ctx context.Context) error {
		_, err := Grid(ctx, s, dir, 2, source.Quiet{})
		require.Empty(t, files(t, dir))
		return err
	}
	small := spec
	small.MemoryBytes = 100
	var big *source.TooBig
	require.ErrorAs(t, run(small, context.Background()), &big)
	require.Contains(t, big.Why, "grid 3: 5 cells in degrees 0..1 need ")
	require.Contains(t, big.Why, "the budget is 100;")
	var usage *source.UsageError
	odd := spec
	odd.Voxels = "edges"
	require.ErrorAs(t, run(odd, context.Background()), &usage)
	odd = spec
	odd.Inputs = append(odd.Inputs, "other.npy")
	require.ErrorAs(t, run(odd, context.Background()), &usage)
	odd.Inputs = []string{filepath.Join(dir, "missing.npy")}
	require.ErrorIs(t, run(odd, context.Background()), os.ErrNotExist)
	ended, cancel := context.WithCancel(context.Background())
	cancel()
	require.ErrorIs(t, run(spec, ended), context.Canceled)
}

// The bound of 2³² − 1 cells holds in the degree that is built, not in those above.
func TestGridTooMany(t *testing.T) {
	job := &gridJob{shape: []int{1200, 1200, 1000}}
	job.grid = newDoubled(job.shape, false)
	job.last = 3
	var big *source.TooBig
	require.ErrorAs(t, job.fits(), &big) // 4.3e9 edges
	require.Contains(t, big.Why, "grid 1200 × 1200 × 1000: 4316160000 cells of degree 1, at most 4294967294 are possible")
	job.shape = []int{1000, 1000, 1000}
	job.grid = newDoubled(job.shape, false)
	require.NoError(t, job.fits())
	require.Equal(t, []float64{1e9, 3 * 999e6, 3 * 998001e3, 997002999}, job.grid.counts())
}

// countdown is a context that ends when it has been asked a number of times.
type countdown struct {
	context.Context
	left atomic.Int64
}

func (c *countdown) Err() error {
	if c.left.Add(-1) < 0 {
		return context.Canceled
	}
	return nil
}

// Work stops at any look at the context, early or late, and nothing is left behind.
func TestGridInterrupted(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 4))
	for _, g := range []gridArray{{shape: []int{150000}}, {shape: []int{30, 40, 40}}} {
		for range gridProduct(g.shape) {
			g.values = append(g.values, float64(r.IntN(100)))
		}
		path := place(t, "in.npy", g.text("<f4", false))
		looks := 0
		for ; ; looks += 1 + looks/4 {
			dir := t.TempDir()
			ctx := &countdown{Context: context.Background()}
			ctx.left.Store(int64(looks))
			_, err := Grid(ctx, gridded(path, false, -1), dir, 1, source.Quiet{})
			if err == nil {
				break
			}
			require.ErrorIs(t, err, context.Canceled)
			require.Empty(t, files(t, dir))
		}
		require.Greater(t, looks, 20)
	}
}

func gridProduct(shape []int) int {
	n := 1
	for _, k := range shape {
		n *= k
	}
	return n
}

// A name that is taken ends the work; what was there stays, what was written goes.
func TestGridTaken(t *testing.T) {
	g := gridArray{shape: []int{3, 3}, values: []float64{1, 2, 3, 4, 5, 6, 7, 8, 9}}
	path := place(t, "in.npy", g.text("<f8", false))
	for _, name := range []string{"centres", "cells-0", "cells-1", "boundary-1", "boundary-2", "complex.json"} {
		dir := t.TempDir()
		require.NoError(t, os.WriteFile(filepath.Join(dir, name), []byte("taken"), 0o644))
		_, err := Grid(context.Background(), gridded(path, false, -1), dir, 1, source.Quiet{})
		require.Error(t, err, name)
		require.Equal(t, map[string]string{name: "taken"}, files(t, dir))
	}
	_, err := Grid(context.Background(), gridded(path, false, -1), filepath.Join(t.TempDir(), "missing"), 1, source.Quiet{})
	require.ErrorIs(t, err, os.ErrNotExist)
}

// A signal longer than a piece between two looks at the context: edge by edge.
func TestGridSignal(t *testing.T) {
	r := rand.New(rand.NewPCG(6, 6))
	g := gridArray{shape: []int{pieceMost + 5}}
	for range g.shape[0] {
		g.values = append(g.values, float64(r.IntN(1000)))
	}
	dir, c := buildGrid(t, g.text("<f8", false), false, -1, 2)
	require.Equal(t, []uint32{uint32(g.shape[0]), uint32(g.shape[0] - 1)}, c.Cells)
	ranks := g.ranks()
	var want [][]uint32
	for i := range ranks[1:] {
		want = append(want, []uint32{uint32(min(ranks[i], ranks[i+1])), uint32(max(ranks[i], ranks[i+1]))})
	}
	slices.SortStableFunc(want, func(a, b []uint32) int { return int(a[1]) - int(b[1]) })
	requireGridBlock(t, dir, c, 1, want)
}

// The networks sort: by the zero-one principle (Knuth 1973) all inputs of zeros and ones are enough.
func TestGridNetworks(t *testing.T) {
	for bits := range uint32(256) {
		var v [8]uint32
		for i := range v {
			v[i] = bits >> i & 1
		}
		var to4 [4]uint32
		var to6 [6]uint32
		var to8 [8]uint32
		sort4(&to4, v[0], v[1], v[2], v[3])
		sort6(&to6, v[0], v[1], v[2], v[3], v[4], v[5])
		sort8(&to8, v[0], v[1], v[2], v[3], v[4], v[5], v[6], v[7])
		for _, got := range [][]uint32{to4[:], to6[:], to8[:]} {
			want := slices.Clone(v[:len(got)])
			slices.Sort(want)
			require.Equal(t, want, got)
		}
	}
}

func FuzzGrid(f *testing.F) {
	g := gridArray{shape: []int{2, 3}, values: []float64{1, 2, 3, 3, math.NaN(), 0}}
	f.Add([]byte(g.text("<f8", false)), int8(-1), false)
	f.Add([]byte(g.text(">f4", true)), int8(0), true)
	f.Add([]byte(g.text("|u1", false)), int8(1), false)
	f.Fuzz(func(t *testing.T, text []byte, degrees int8, top bool) {
		dir := t.TempDir()
		spec := gridded(place(t, "in.npy", string(text)), top, max(int(degrees), -1))
		spec.MemoryBytes = 1 << 22
		requireFolder(t, dir, func() (*chain.Complex, error) {
			return Grid(context.Background(), spec, dir, 2, source.Quiet{})
		})
	})
}

// gridNoise is 64³ values without structure: 2 million cells.
func gridNoise(descr string) string {
	r := rand.New(rand.NewPCG(5, 5))
	g := gridArray{shape: []int{64, 64, 64}, values: make([]float64, 64*64*64)}
	for i := range g.values {
		g.values[i] = float64(r.IntN(1 << 15))
	}
	return g.text(descr, false)
}

func benchmarkGrid(b *testing.B, top bool) {
	path := place(b, "in.npy", gridNoise("<f4"))
	b.ReportAllocs()
	cells := uint64(0)
	for b.Loop() {
		dir, err := os.MkdirTemp(b.TempDir(), "")
		require.NoError(b, err)
		c, err := Grid(context.Background(), gridded(path, top, -1), dir, 1, source.Quiet{})
		require.NoError(b, err)
		for _, n := range c.Cells {
			cells += uint64(n)
		}
		require.NoError(b, os.RemoveAll(dir))
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(cells), "ns/cell")
}

func BenchmarkGridVertices(b *testing.B) { benchmarkGrid(b, false) }

func BenchmarkGridCells(b *testing.B) { benchmarkGrid(b, true) }
