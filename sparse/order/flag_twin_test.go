package order

import (
	"cmp"
	"encoding/binary"
	"fmt"
	"math"
	"math/bits"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// joined is a graph in the plainest form: the length of the edge of each two vertices,
// +∞ where there is none.
type joined [][]float64

func newJoined(n int) joined {
	g := make(joined, n)
	for u := range g {
		g[u] = slices.Repeat([]float64{math.Inf(1)}, n)
		g[u][u] = 0
	}
	return g
}

func (g joined) set(u, v int, d float64) { g[u][v], g[v][u] = d, d }

// twin takes all sets of vertices that are joined two by two by edges up to a scale, and
// orders them as the contract says: edges by (value, ends), simplices by (rank of the
// longest edge, other vertices descending).
func (g joined) twin(scale float64) twin {
	type side struct{ u, v int }
	var edges []side
	for u := range g {
		for v := u + 1; v < len(g); v++ {
			if g[u][v] <= scale && !math.IsInf(g[u][v], 1) {
				edges = append(edges, side{u, v})
			}
		}
	}
	slices.SortFunc(edges, func(a, b side) int {
		return cmp.Or(cmp.Compare(g[a.u][a.v], g[b.u][b.v]), cmp.Compare(a.u, b.u), cmp.Compare(a.v, b.v))
	})
	out := twin{}
	for set := 1; set < 1<<len(g); set++ {
		c, found := &cellOf{}, 0
		var longest side
		for v := range g {
			if set>>v&1 == 1 {
				c.verts = append(c.verts, uint32(v))
			}
		}
		for r, e := range edges {
			if set>>e.u&1 == 1 && set>>e.v&1 == 1 {
				found++
				longest, c.value, c.key = e, g[e.u][e.v], []uint32{uint32(r)}
			}
		}
		if k := bits.OnesCount(uint(set)); found != k*(k-1)/2 {
			continue
		}
		for _, v := range slices.Backward(c.verts) {
			if len(c.verts) > 1 && (int(v) == longest.u || int(v) == longest.v) {
				continue
			}
			c.key = append(c.key, v)
		}
		out[fmt.Sprint(c.verts)] = c
	}
	return out
}

// radius is the enclosing radius.
func (g joined) radius() float64 {
	least := math.Inf(1)
	for _, row := range g {
		least = min(least, slices.Max(row))
	}
	return least
}

// text writes the matrix in one of three shapes.
func (g joined) text(shape string) string {
	var b strings.Builder
	for i, row := range g {
		switch shape {
		case "lower":
			row = row[:i]
		case "diagonal":
			row = row[:i+1]
		}
		for j, d := range row {
			if j > 0 {
				b.WriteByte(' ')
			}
			b.WriteString(strconv.FormatFloat(d, 'g', -1, 64))
		}
		b.WriteByte('\n')
	}
	return b.String()
}

// flagArray writes a .npy file of f64.
func flagArray(shape []int, fortran bool, values []float64) string {
	order := map[bool]string{false: "False", true: "True"}[fortran]
	head := fmt.Sprintf("{'descr': '<f8', 'fortran_order': %s, 'shape': (%s,), }", order, strings.Trim(strings.ReplaceAll(fmt.Sprint(shape), " ", ", "), "[]"))
	head += strings.Repeat(" ", 63-(10+len(head))%64) + "\n"
	b := append([]byte("\x93NUMPY\x01\x00"), byte(len(head)), byte(len(head)>>8))
	b = append(b, head...)
	for _, v := range values {
		b = binary.LittleEndian.AppendUint64(b, math.Float64bits(v))
	}
	return string(b)
}

// flagSpec asks for the flag complex of a file, -1 for no scale.
func flagSpec(kind source.Kind, path string, degrees int, scale float64) source.Spec {
	spec := source.Spec{Kind: kind, Inputs: []string{path}, Degrees: degrees, MemoryBytes: testBudget}
	if scale >= 0 {
		spec.MaxScale = &scale
	}
	return spec
}

// flagFolder builds the complex of a file that holds text, and returns the folder.
func flagFolder(t *testing.T, spec source.Spec, name, text string, threads int) (*chain.Complex, string) {
	spec.Inputs = []string{place(t, name, text)}
	build := map[source.Kind]func(string) (*chain.Complex, error){
		source.Points: func(dir string) (*chain.Complex, error) {
			return Points(t.Context(), spec, dir, threads, source.Quiet{})
		},
		source.Distances: func(dir string) (*chain.Complex, error) {
			return Distances(t.Context(), spec, dir, threads, source.Quiet{})
		},
		source.Graph: func(dir string) (*chain.Complex, error) {
			return Graph(t.Context(), spec, dir, threads, source.Quiet{})
		},
	}[spec.Kind]
	dir := t.TempDir()
	c, err := build(dir)
	require.NoError(t, err)
	return c, dir
}

func defaulted(degrees int) int {
	if degrees < 0 {
		return 1
	}
	return degrees
}

// Hundreds of random matrices with many ties, cut at random scales or the enclosing
// radius, agree with all subsets, whatever the form of the file.
func TestDistancesTwin(t *testing.T) {
	r := rand.New(rand.NewPCG(21, 1))
	for round := range 120 {
		n := 1 + r.IntN(8)
		g, levels := newJoined(n), 1+r.IntN(6)
		for u := range n {
			for v := range u {
				g.set(u, v, float64(1+r.IntN(levels))*0.3)
			}
		}
		degrees, scale := r.IntN(n+2)-1, float64(r.IntN(levels+1))*0.3
		if r.IntN(2) == 0 {
			scale = -1
		}
		spec := flagSpec(source.Distances, "", degrees, scale)
		c, dir := flagFolder(t, spec, "in.csv", g.text("square"), 1+round%2)
		if scale < 0 {
			scale = g.radius()
			require.Contains(t, c.Notes[0].What, "enclosing radius "+strconv.FormatFloat(scale, 'g', -1, 64))
		}
		requireTwin(t, dir, c, g.twin(scale), defaulted(degrees), spaced)
		if round%4 > 0 {
			continue
		}
		want := files(t, dir)
		flat := slices.Concat(g...)
		for _, form := range []struct{ name, text string }{{"in.csv", g.text("diagonal")}, {"in.npy", flagArray([]int{n, n}, false, flat)}, {"in.npy", flagArray([]int{n, n}, true, flat)}} {
			_, dir := flagFolder(t, spec, form.name, form.text, 2)
			require.Equal(t, want, files(t, dir))
		}
		if n > 1 {
			c, dir := flagFolder(t, spec, "in.csv", g.text("lower"), 1)
			require.Equal(t, "read as a lower triangle without its diagonal; points", c.Notes[0].What)
			got := files(t, dir)
			delete(got, "complex.json")
			for name, text := range got {
				require.Equal(t, want[name], text)
			}
			require.Len(t, want, len(got)+1)
		}
	}
}

// Points give what their distances give, in any form; coordinates on a small grid, so
// that many distances agree.
func TestPointsTwin(t *testing.T) {
	r := rand.New(rand.NewPCG(21, 2))
	for round := range 100 {
		n, d := 1+r.IntN(8), 1+r.IntN(5)
		flat, turned := make([]float64, n*d), make([]float64, n*d)
		var text strings.Builder
		for i := range flat {
			flat[i] = float64(r.IntN(4)) - 1
			turned[i%d*n+i/d] = flat[i]
			fmt.Fprint(&text, flat[i], []string{"\t", "\n"}[min((i%d+1)/d, 1)])
		}
		g := newJoined(n)
		for u := range n {
			for v := range u {
				sum := 0.0
				for j := range d {
					sum += (flat[u*d+j] - flat[v*d+j]) * (flat[u*d+j] - flat[v*d+j])
				}
				g.set(u, v, math.Sqrt(sum))
			}
		}
		degrees, scale := r.IntN(n+2)-1, []float64{-1, 0, 1, math.Sqrt2, 2, 1.7}[r.IntN(6)]
		spec := flagSpec(source.Points, "", degrees, scale)
		c, dir := flagFolder(t, spec, "in.csv", text.String(), 1+round%2)
		if scale < 0 {
			scale = g.radius()
		}
		requireTwin(t, dir, c, g.twin(scale), defaulted(degrees), spaced)
		if round%4 > 0 {
			continue
		}
		want := files(t, dir)
		for fortran, values := range map[bool][]float64{false: flat, true: turned} {
			_, dir := flagFolder(t, spec, "in.npy", flagArray([]int{n, d}, fortran, values), 2)
			require.Equal(t, want, files(t, dir))
		}
		if d == 1 {
			_, dir := flagFolder(t, spec, "in.npy", flagArray([]int{n}, false, flat), 2)
			require.Equal(t, want, files(t, dir))
		}
		spec.Kind = source.Distances
		_, dir = flagFolder(t, spec, "in.csv", g.text("square"), 1)
		got := files(t, dir)
		require.Equal(t, strings.Replace(want["complex.json"], `"points"`, `"distances"`, 1), got["complex.json"])
		want["complex.json"] = got["complex.json"]
		require.Equal(t, want, got)
	}
}

// Random graphs with loops, parallel edges and isolated vertices agree with all
// subsets; shuffling lines and turning edges round changes no byte, whether vertices
// are numbers or names.
func TestGraphTwin(t *testing.T) {
	r := rand.New(rand.NewPCG(21, 3))
	for round := range 120 {
		n := 1 + r.IntN(9)
		g, levels, valued := newJoined(n), 1+r.IntN(4), r.IntN(3) > 0
		names, spec := flagNames(r, n, valued)
		var lines []string
		loops, parallel, used := uint64(0), uint64(0), map[int]bool{}
		for range 1 + r.IntN(3*n*n) {
			u, v, d := r.IntN(n), r.IntN(n), float64(r.IntN(levels))/4
			used[u], used[v] = true, true
			line := names[u] + "," + names[v]
			if valued {
				line += "," + fmt.Sprint(d)
			} else {
				d = 1
			}
			lines = append(lines, line)
			switch {
			case u == v:
				loops++
			case math.IsInf(g[u][v], 1):
				g.set(u, v, d)
			default:
				parallel++
				g.set(u, v, min(g[u][v], d))
			}
		}
		if spec.Vertices == 0 && len(used) < n {
			continue // vertices that nothing names
		}
		degrees, scale := r.IntN(n+2)-1, []float64{-1, 0.25, 2}[r.IntN(3)]
		vertices := spec.Vertices
		spec = flagSpec(source.Graph, "", degrees, scale)
		spec.Vertices = vertices
		head := "from,to\n"
		c, dir := flagFolder(t, spec, "in.csv", head+strings.Join(lines, "\n"), 1+round%2)
		if scale < 0 {
			scale = math.Inf(1)
		}
		named := func(c *cellOf) string {
			out := make([]string, len(c.verts))
			for i, v := range c.verts {
				out[i] = names[v]
			}
			return strings.Join(out, " ")
		}
		requireTwin(t, dir, c, g.twin(scale), defaulted(degrees), named)
		require.EqualValues(t, loops, noted(c, "self-loops left out"))
		require.EqualValues(t, parallel, noted(c, "parallel edges merged"))
		if round%3 > 0 {
			continue
		}
		want := files(t, dir)
		r.Shuffle(len(lines), func(i, j int) { lines[i], lines[j] = lines[j], lines[i] })
		for i, line := range lines {
			if f := strings.Split(line, ","); r.IntN(2) == 0 {
				f[0], f[1] = f[1], f[0]
				lines[i] = strings.Join(f, ",")
			}
		}
		_, dir = flagFolder(t, spec, "in.csv", head+strings.Join(lines, "\r\n"), 2)
		require.Equal(t, want, files(t, dir))
	}
}

// flagNames draws how vertices are called: 0..n−1 with --vertices, other numbers, or
// words, in ascending order.
func flagNames(r *rand.Rand, n int, valued bool) ([]string, source.Spec) {
	names, spec := make([]string, n), source.Spec{}
	switch r.IntN(3) {
	case 0:
		spec.Vertices = n
		for v := range names {
			names[v] = fmt.Sprint(v)
		}
	case 1:
		at := uint32(0)
		for v := range names {
			at += 1 + uint32(r.IntN(9)*r.IntN(50_000_000))
			names[v] = fmt.Sprint(at)
		}
	default:
		for v := range names {
			names[v] = fmt.Sprintf("v%c", 'a'+v)
		}
		if !valued || r.IntN(2) == 0 {
			names[0] = "10" // numbers among words are words
		}
	}
	return names, spec
}
