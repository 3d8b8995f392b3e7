// Package checks runs whole jobs on inputs whose answers are known from outside the
// project, and compares: Betti numbers of published triangulations, reference
// diagrams, a minimum spanning tree. testdata/triangulations.csv names the source of
// each triangulation (the kind of list, author and year) in its last columns; the
// diagrams are of open data sets of Debian packages, reduced by a plain textbook
// program apart from this one, and passed independent checks (Euler curves, spanning
// forests, duality, ranks by PARI).
package checks

import (
	"context"
	"encoding/binary"
	"encoding/csv"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"gonum.org/v1/gonum/graph/path"
	"gonum.org/v1/gonum/graph/simple"

	"pairloom/coordinator/cmd/inprocess"
	"pairloom/coordinator/plan"
	"pairloom/coordinator/report"
	"pairloom/coordinator/server"
	"pairloom/sparse/source"
)

// row is a pair without its cells.
type row struct {
	degree       int
	birth, death float64
}

func reduce(t *testing.T, spec source.Spec, o plan.Options) (rows []row, betti []int) {
	job, dst := t.TempDir(), t.TempDir()
	run, err := inprocess.Run(context.Background(), inprocess.Config{Version: "test", Workers: 2, Threads: 2},
		server.Job{Name: "check", Folder: job, Spec: spec, Options: o}, nil)
	require.NoError(t, err)
	s, err := report.Write(t.Context(), job, dst, run, false)
	require.NoError(t, err)
	for _, b := range s.Betti {
		betti = append(betti, int(*b))
	}
	return diagram(t, filepath.Join(dst, "pairs.csv")), betti
}

// diagram reads degree, birth and death of a file, sorted.
func diagram(t *testing.T, path string) (rows []row) {
	f, err := os.Open(path)
	require.NoError(t, err)
	defer f.Close()
	lines, err := csv.NewReader(f).ReadAll()
	require.NoError(t, err)
	for _, l := range lines[1:] {
		k, err := strconv.Atoi(l[0])
		require.NoError(t, err)
		b, err := strconv.ParseFloat(l[1], 64)
		require.NoError(t, err)
		d, err := strconv.ParseFloat(l[2], 64)
		require.NoError(t, err)
		rows = append(rows, row{k, b, d})
	}
	slices.SortFunc(rows, func(a, b row) int {
		return slices.Compare([]float64{float64(a.degree), a.birth, a.death}, []float64{float64(b.degree), b.birth, b.death})
	})
	return rows
}

func numbers(t *testing.T, text string) (out []int) {
	for _, f := range strings.Fields(text) {
		n, err := strconv.Atoi(f)
		require.NoError(t, err)
		out = append(out, n)
	}
	return out
}

// All published triangulations: Betti numbers over Z/2, from facets.
func TestTriangulations(t *testing.T) {
	f, err := os.Open("testdata/triangulations.csv")
	require.NoError(t, err)
	defer f.Close()
	lines, err := csv.NewReader(f).ReadAll()
	require.NoError(t, err)
	at := slices.Index(lines[0], "betti_2")
	require.Greater(t, len(lines), 49)
	for _, l := range lines[1:] {
		_, betti := reduce(t, source.Spec{Kind: source.Facets, Inputs: []string{filepath.Join("testdata", l[1])}, Degrees: -1}, plan.Options{Spread: true})
		require.Equal(t, numbers(t, l[at]), betti, l[0])
	}
}

// Lower stars by vertex number, on the triangulations that have a diagram.
func TestLowerStars(t *testing.T) {
	files, err := filepath.Glob("testdata/persistence/lowerstar_*_mod2.csv")
	require.NoError(t, err)
	require.NotEmpty(t, files)
	for _, want := range files {
		name := strings.TrimSuffix(strings.TrimPrefix(filepath.Base(want), "lowerstar_"), "_mod2.csv")
		facets := filepath.Join("testdata/triangulations", name+".csv")
		text, err := os.ReadFile(facets)
		require.NoError(t, err)
		top := 0
		for _, n := range numbers(t, strings.NewReplacer(",", " ", "\n", " ").Replace(string(text))) {
			top = max(top, n)
		}
		function := filepath.Join(t.TempDir(), "f.csv")
		var b strings.Builder
		for v := range top + 1 {
			fmt.Fprintln(&b, v)
		}
		require.NoError(t, os.WriteFile(function, []byte(b.String()), 0o644))
		got, _ := reduce(t, source.Spec{Kind: source.Facets, Inputs: []string{facets}, Degrees: -1, Function: function}, plan.Options{})
		require.Equal(t, diagram(t, want), got, name)
	}
}

// array writes values as .npy, f64, C order.
func array(t *testing.T, shape []int, values []float64) string {
	head := fmt.Sprintf("{'descr': '<f8', 'fortran_order': False, 'shape': (%s,), }", strings.Trim(strings.ReplaceAll(fmt.Sprint(shape), " ", ", "), "[]"))
	head += strings.Repeat(" ", 63-(10+len(head))%64) + "\n"
	b := append([]byte("\x93NUMPY\x01\x00"), byte(len(head)), byte(len(head)>>8))
	b = append(b, head...)
	for _, v := range values {
		b = binary.LittleEndian.AppendUint64(b, math.Float64bits(v))
	}
	path := filepath.Join(t.TempDir(), "array.npy")
	require.NoError(t, os.WriteFile(path, b, 0o644))
	return path
}

// table reads a data file of numbers, a header line left out.
func table(t *testing.T, name string) (rows [][]float64) {
	f, err := os.Open(filepath.Join("testdata/data", name))
	require.NoError(t, err)
	defer f.Close()
	lines, err := csv.NewReader(f).ReadAll()
	require.NoError(t, err)
	for _, l := range lines {
		var r []float64
		for _, s := range l {
			if v, err := strconv.ParseFloat(s, 64); err == nil {
				r = append(r, v)
			}
		}
		if len(r) == len(l) {
			rows = append(rows, r)
		}
	}
	return rows
}

func flat(rows [][]float64) []float64 { return slices.Concat(rows...) }

// raw reads the values of a little-endian .npy after a header of 128 bytes.
func raw(t *testing.T, name string, width int) (out []float64) {
	b, err := os.ReadFile(filepath.Join("testdata/data", name))
	require.NoError(t, err)
	for b = b[128:]; len(b) >= width; b = b[width:] {
		switch width {
		case 1:
			out = append(out, float64(b[0]))
		case 2:
			out = append(out, float64(binary.LittleEndian.Uint16(b))) // elevations are above 0, so unsigned serves both
		case 4:
			out = append(out, float64(int32(binary.LittleEndian.Uint32(b))))
		}
	}
	return out
}

// cutOut cuts [from, to) out of an array.
func cutOut(shape, from, to []int, values []float64) (size []int, out []float64) {
	for d := range shape {
		size = append(size, to[d]-from[d])
	}
	at := slices.Clone(from)
	for {
		i := 0
		for d := range shape {
			i = i*shape[d] + at[d]
		}
		out = append(out, values[i])
		d := len(shape) - 1
		for ; d >= 0; d-- {
			if at[d]++; at[d] < to[d] {
				break
			}
			at[d] = from[d]
		}
		if d < 0 {
			return size, out
		}
	}
}

func check(t *testing.T, name string, spec source.Spec) {
	spec.Degrees = cmpDegrees(spec)
	got, _ := reduce(t, spec, plan.Options{Spread: true})
	require.Equal(t, diagram(t, filepath.Join("testdata/persistence", name+"_mod2.csv")), got, name)
}

func cmpDegrees(spec source.Spec) int {
	if spec.Kind == source.Grid {
		return -1
	}
	return spec.Degrees
}

// Grids in both conventions: elevation, signals, images, a brain volume.
func TestGridDiagrams(t *testing.T) {
	grid := func(path, voxels string) source.Spec {
		return source.Spec{Kind: source.Grid, Inputs: []string{path}, Voxels: voxels}
	}
	volcano := array(t, []int{87, 61}, flat(table(t, "volcano.csv")))
	check(t, "cubical_volcano_vertex", grid(volcano, "vertices"))
	check(t, "cubical_volcano_top", grid(volcano, "cells"))
	check(t, "signal_ecg_4000", grid(array(t, []int{4000}, flat(table(t, "ecg_4000.csv"))), "vertices"))
	for _, i := range []int{0, 1, 9} {
		check(t, fmt.Sprintf("cubical_fashion_%d", i), grid(array(t, []int{28, 28}, raw(t, "fashion_200.npy", 1)[i*784:(i+1)*784]), "vertices"))
	}
	size, dem := cutOut([]int{344, 403}, []int{0, 0}, []int{72, 72}, raw(t, "jacksboro_dem.npy", 2))
	check(t, "cubical_dem_block", grid(array(t, size, dem), "vertices"))
	size, mri := cutOut([]int{256, 256}, []int{96, 96}, []int{160, 160}, raw(t, "mri_slice_256.npy", 2))
	check(t, "cubical_mri_block", grid(array(t, size, mri), "cells"))
	size, brain := cutOut([]int{22, 27, 22}, []int{3, 4, 3}, []int{19, 22, 19}, raw(t, "mr_brain_sums_22.npy", 4))
	for i := range brain {
		brain[i] = -brain[i]
	}
	check(t, "cubical_brain_volume", grid(array(t, size, brain), "vertices"))
}

// distances writes a matrix; what the reference calls the value is the distance here.
func distances(t *testing.T, n int, d func(i, j int) float64, degrees int, most float64) source.Spec {
	var b strings.Builder
	for i := range n {
		for j := range n {
			if j > 0 {
				b.WriteByte(',')
			}
			b.WriteString(strconv.FormatFloat(d(i, j), 'g', -1, 64))
		}
		b.WriteByte('\n')
	}
	path := filepath.Join(t.TempDir(), "d.csv")
	require.NoError(t, os.WriteFile(path, []byte(b.String()), 0o644))
	return source.Spec{Kind: source.Distances, Inputs: []string{path}, Degrees: degrees, MaxScale: &most}
}

// squared is the reference's filtration of point sets: squared distances.
func squared(p [][]float64) func(i, j int) float64 {
	return func(i, j int) (sum float64) {
		for d := range p[i] {
			sum += (p[i][d] - p[j][d]) * (p[i][d] - p[j][d])
		}
		return sum
	}
}

// Flag complexes: road distances, points on circles, flowers, digits, earthquakes, a novel.
func TestFlagDiagrams(t *testing.T) {
	road := table(t, "eurodist_km.csv")
	check(t, "rips_eurodist", distances(t, len(road), func(i, j int) float64 { return road[i][j] }, 3, 1e9))
	for _, n := range []int{9, 12, 15} {
		steps := func(i, j int) float64 { k := max(i-j, j-i); return float64(min(k, n-k)) }
		check(t, fmt.Sprintf("circle_%d_steps", n), distances(t, n, steps, n-1, 1e9))
	}
	iris := table(t, "iris_tenths.csv")
	check(t, "rips_iris", distances(t, len(iris), squared(iris), 1, 100))
	var digits, quakes [][]float64
	for _, r := range table(t, "digits.csv")[:64] {
		digits = append(digits, r[1:])
	}
	check(t, "rips_digits_64", distances(t, 64, squared(digits), 2, 1600))
	for _, r := range table(t, "quakes.csv")[:400] {
		quakes = append(quakes, []float64{math.Round(100 * r[0]), math.Round(100 * r[1])})
	}
	check(t, "rips_quakes_400", distances(t, 400, squared(quakes), 1, 10000))
	var b strings.Builder
	for _, e := range table(t, "graph_les_miserables.csv") {
		fmt.Fprintf(&b, "%v,%v,%v\n", e[0], e[1], 32-e[2])
	}
	path := filepath.Join(t.TempDir(), "g.csv")
	require.NoError(t, os.WriteFile(path, []byte(b.String()), 0o644))
	check(t, "flag_les_miserables", source.Spec{Kind: source.Graph, Inputs: []string{path}, Degrees: 8})
}

// classes are the pairwise distances of a polytope's vertices by their rank 1, 2, 3 …:
// shortest first, which tells exactly what rounded coordinates would not.
func classes(p [][]float64) func(i, j int) float64 {
	d := squared(p)
	var all []float64
	for i := range p {
		for j := range i {
			if !slices.ContainsFunc(all, func(v float64) bool { return math.Abs(v-d(i, j)) < 1e-6 }) {
				all = append(all, d(i, j))
			}
		}
	}
	slices.Sort(all)
	return func(i, j int) float64 {
		if i == j {
			return 0
		}
		return 1 + float64(slices.IndexFunc(all, func(v float64) bool { return math.Abs(v-d(i, j)) < 1e-6 }))
	}
}

// signs lists the points (±a, ±b, ±c), each once, with their cyclic shifts if asked.
func signs(a, b, c float64, shifts bool) (out [][]float64) {
	for range map[bool]int{false: 1, true: 3}[shifts] {
		for s := range 8 {
			q := []float64{a * float64(1-2*(s&1)), b * float64(1-(s&2)), c * float64(1-(s&4)/2)}
			if !slices.ContainsFunc(out, func(o []float64) bool { return slices.Equal(o, q) }) {
				out = append(out, q)
			}
		}
		a, b, c = b, c, a
	}
	return out
}

// Polytopes: all simplices of the cube, icosahedron (12 vertices) and dodecahedron (20).
func TestPolytopeDiagrams(t *testing.T) {
	golden := (1 + math.Sqrt(5)) / 2
	cube := signs(1, 1, 1, false)
	ico := signs(0, 1, golden, true)
	dode := append(signs(1, 1, 1, false), signs(0, 1/golden, golden, true)...)
	require.Equal(t, []int{8, 12, 20}, []int{len(cube), len(ico), len(dode)})
	check(t, "polytope_cube", distances(t, 8, classes(cube), 7, 1e9))
	check(t, "polytope_icosahedron", distances(t, 12, classes(ico), 11, 1e9))
	check(t, "polytope_dodecahedron", distances(t, 20, classes(dode), 4, 1e9))
}

// The deaths in degree 0 of a point cloud are the edges of its minimum spanning tree
// (gonum's Kruskal).
func TestComponentsAreASpanningTree(t *testing.T) {
	iris := table(t, "iris_tenths.csv")
	n := len(iris)
	g := simple.NewWeightedUndirectedGraph(0, math.Inf(1))
	d := squared(iris)
	for i := range n {
		for j := range i {
			g.SetWeightedEdge(g.NewWeightedEdge(simple.Node(i), simple.Node(j), d(i, j)))
		}
	}
	tree := simple.NewWeightedUndirectedGraph(0, math.Inf(1))
	path.Kruskal(tree, g)
	var want, got []float64
	for edges := tree.WeightedEdges(); edges.Next(); {
		if w := edges.WeightedEdge().Weight(); w > 0 {
			want = append(want, w)
		}
	}
	rows, _ := reduce(t, distances(t, n, d, 0, 1e9), plan.Options{})
	for _, r := range rows {
		if !math.IsInf(r.death, 1) {
			got = append(got, r.death)
		}
	}
	slices.Sort(want)
	slices.Sort(got)
	require.Equal(t, want, got)
}
