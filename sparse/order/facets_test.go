package order

import (
	"context"
	"encoding/binary"
	"encoding/csv"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

func faceted(path string, degrees int) source.Spec {
	return source.Spec{Kind: source.Facets, Inputs: []string{path}, Degrees: degrees, MemoryBytes: testBudget}
}

// facetLines draws a random list of facets with repetitions and faces of others; it
// returns the text, the twin of the closure, and how many lines say nothing new.
func facetLines(r *rand.Rand, from twin) (text string, want twin, merged int) {
	want = twin{}
	var lines [][]uint32
	for _, c := range from {
		if r.IntN(3) == 0 || len(lines) == 0 {
			lines = append(lines, c.verts)
			want.addFaces(c.verts, 0)
		}
	}
	for range r.IntN(3) {
		lines = append(lines, lines[r.IntN(len(lines))])
	}
	for i, line := range lines {
		for j, other := range lines {
			if i != j && contains(other, line) && (len(other) > len(line) || j < i) {
				merged++
				break
			}
		}
	}
	r.Shuffle(len(lines), func(i, j int) { lines[i], lines[j] = lines[j], lines[i] })
	for _, line := range lines {
		line = slices.Clone(line)
		r.Shuffle(len(line), func(i, j int) { line[i], line[j] = line[j], line[i] })
		text += strings.Trim(fmt.Sprint(line), "[]") + "\n"
	}
	return text, want, merged
}

func contains(of, part []uint32) bool {
	for _, v := range part {
		if !slices.Contains(of, v) {
			return false
		}
	}
	return true
}

// Facets give the closure; the same cells listed with value 0 give the same tables and
// blocks, byte by byte.
func TestFacetsTwin(t *testing.T) {
	r := rand.New(rand.NewPCG(12, 1))
	const note = "lines that repeat a simplex or a face of one, merged"
	for range 120 {
		text, want, merged := facetLines(r, randomTwin(r))
		degrees := r.IntN(6) - 1
		dir, other := t.TempDir(), t.TempDir()
		c, err := Facets(context.Background(), faceted(place(t, "in.csv", text), degrees), dir, 1+r.IntN(3), source.Quiet{})
		require.NoError(t, err)
		requireTwin(t, dir, c, want, degrees, spaced)
		if !c.Truncated {
			require.Equal(t, merged, noted(c, note), text)
		}
		_, err = Simplices(context.Background(), listed(place(t, "in.csv", want.text(r, all)), degrees), other, 1, source.Quiet{})
		require.NoError(t, err)
		a, b := files(t, dir), files(t, other)
		delete(a, "complex.json")
		delete(b, "complex.json")
		require.Equal(t, b, a)
	}
}

// Lower stars: vertices by (value, number), a cell by the ranks of its vertices,
// latest first; it is called after its latest vertex.
func TestFacetsFunction(t *testing.T) {
	r := rand.New(rand.NewPCG(12, 2))
	for range 120 {
		text, want, _ := facetLines(r, smallNumbers(randomTwin(r)))
		most := uint32(0)
		for _, c := range want {
			most = max(most, slices.Max(c.verts))
		}
		values := make([]float64, most+1)
		lines := ""
		for v := range values {
			values[v] = float64(r.IntN(5)) - 2
			lines += fmt.Sprintln(values[v])
		}
		latest := want.lowerStar(values)
		spec := faceted(place(t, "in.csv", text), r.IntN(5)-1)
		spec.Function = place(t, "f.csv", lines)
		dir := t.TempDir()
		c, err := Facets(context.Background(), spec, dir, 2, source.Quiet{})
		require.NoError(t, err)
		requireTwin(t, dir, c, want, spec.Degrees, func(c *cellOf) string { return fmt.Sprint(latest[c]) })
		require.Equal(t, chain.ByVertex, c.Naming)
	}
}

// The function may be an array: the same folder as from text.
func TestFacetsFunctionArray(t *testing.T) {
	values := []float64{2, -1, 0.5, -1}
	array := []byte("\x93NUMPY\x01\x00\x76\x00" + fmt.Sprintf("%-117s\n", "{'descr': '<f8', 'fortran_order': False, 'shape': (4,), }"))
	text := ""
	for _, v := range values {
		array = binary.LittleEndian.AppendUint64(array, math.Float64bits(v))
		text += fmt.Sprintln(v)
	}
	spec := faceted(place(t, "in.csv", "0,1,2\n2,3\n"), -1)
	var folders []map[string]string
	for _, spec.Function = range []string{place(t, "f.npy", string(array)), place(t, "f.csv", text)} {
		dir := t.TempDir()
		_, err := Facets(context.Background(), spec, dir, 1, source.Quiet{})
		require.NoError(t, err)
		folders = append(folders, files(t, dir))
	}
	require.Equal(t, folders[0], folders[1])
	copy(array[len(array)-8:], "\x00\x00\x00\x00\x00\x00\xf8\x7f") // NaN
	spec.Function = place(t, "f.npy", string(array))
	_, err := Facets(context.Background(), spec, t.TempDir(), 1, source.Quiet{})
	require.ErrorContains(t, err, "value 3 is NaN")
}

// smallNumbers gives the vertices small numbers, some of them unused.
func smallNumbers(t twin) twin {
	out := twin{}
	for _, c := range t {
		verts := slices.Clone(c.verts)
		for i, v := range verts {
			verts[i] = v % 20
		}
		out.add(verts, 0)
	}
	return out
}

// lowerStar sets value and key of all cells; it returns their latest vertices.
func (t twin) lowerStar(values []float64) map[*cellOf]uint32 {
	var vertices []uint32
	for _, c := range t {
		if len(c.verts) == 1 {
			vertices = append(vertices, c.verts[0])
		}
	}
	slices.Sort(vertices)
	slices.SortStableFunc(vertices, func(a, b uint32) int { return int(values[a]) - int(values[b]) })
	latest := map[*cellOf]uint32{}
	for _, c := range t {
		for _, v := range c.verts {
			c.key = append(c.key, uint32(slices.Index(vertices, v)))
		}
		slices.Sort(c.key)
		slices.Reverse(c.key)
		latest[c] = vertices[c.key[0]]
		c.value = values[latest[c]]
	}
	return latest
}

// The f-vectors of 49 triangulations. Source: the list of check values, whose column
// "source" cites the publication of each (e.g. Moebius 1861 and Csaszar 1949 for the
// 7-vertex torus); counts there were verified with PARI.
func TestFacetsTriangulations(t *testing.T) {
	folder := filepath.Join("testdata", "simplices_triangulations")
	f, err := os.Open(filepath.Join(folder, "triangulations.csv"))
	require.NoError(t, err)
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	require.NoError(t, err)
	require.Len(t, rows, 50)
	for _, row := range rows[1:] {
		dir := t.TempDir()
		c, err := Facets(context.Background(), faceted(filepath.Join(folder, filepath.Base(row[1])), -1), dir, 2, source.Quiet{})
		require.NoError(t, err, row[0])
		var want []uint32
		euler := 0
		for k, n := range strings.Fields(row[6]) {
			v, err := strconv.ParseUint(n, 10, 32)
			require.NoError(t, err)
			want = append(want, uint32(v))
			euler += int(v) * (1 - 2*(k%2))
		}
		require.Equal(t, want, c.Cells, row[0])
		require.Equal(t, row[7], strconv.Itoa(euler), row[0])
		if row[2] == "closed manifold" { // every ridge in two facets
			require.True(t, c.RowsAtMost2[c.Top()], row[0])
		}
	}
}

// Every kind of broken file has its message, and leaves nothing in the folder.
func TestFacetsBroken(t *testing.T) {
	for _, c := range []struct{ text, function, want string }{
		{"", "", "no simplex in it"},
		{"0,1\n1,1,2\n", "", "line 2: vertex 1 is repeated"},
		{"0,1\n0.5,1\n", "", `line 2: vertex "0.5"`},
		{"0 1\n0 1 2,3\n", "", `line 2: vertex "2,3"`},
		{vertices(26)[1:] + "\n", "", "line 1: 26 vertices; all faces are made of simplices of up to 25"},
		{"0,1\n1,2\n", "1\n2\n", "2 values; one for each vertex 0..2"},
		{"0,1\n1,2\n", "1\n2\n3\n4\n", "4 values; one for each vertex 0..2"},
		{"0,1\n1,2\n", "1\nNaN\n3\n", "line 2: one finite value was expected, for vertex 1"},
		{"0,1\n1,2\n", "1\n2\n+Inf\n", "line 3: one finite value"},
		{"0,1\n1,2\n", "1\n2,3\n4\n", "line 2: one finite value"},
	} {
		spec := faceted(place(t, "in.csv", c.text), -1)
		if c.function != "" {
			spec.Function = place(t, "f.csv", c.function)
		}
		dir := t.TempDir()
		_, err := Facets(context.Background(), spec, dir, 2, source.Quiet{})
		require.ErrorAs(t, err, new(*source.InputError), c.want)
		require.ErrorContains(t, err, c.want)
		require.Empty(t, files(t, dir))
	}
}

// Closures are refused by size before they are made; a cut makes only what is kept.
func TestFacetsSize(t *testing.T) {
	path := place(t, "in.csv", vertices(25)[1:]+"\n")
	_, err := Facets(context.Background(), faceted(path, -1), t.TempDir(), 1, source.Quiet{})
	require.ErrorAs(t, err, new(*source.TooBig))
	path = place(t, "in.csv", vertices(60)[1:]+"\n"+vertices(60)[1:]+"\n3\n")
	dir := t.TempDir()
	c, err := Facets(context.Background(), faceted(path, 1), dir, 1, source.Quiet{})
	require.NoError(t, err)
	require.Equal(t, []uint32{60, 60 * 59 / 2, 60 * 59 * 58 / 6}, c.Cells)
	require.Equal(t, 2, noted(c, "lines that repeat a simplex or a face of one, merged"))
	require.True(t, c.Truncated)
	_, err = Facets(context.Background(), faceted(path, 9), dir, 1, source.Quiet{})
	require.ErrorAs(t, err, new(*source.TooBig))
}

func FuzzFacets(f *testing.F) {
	for _, text := range []string{"0 1 2\n2 3\n", "0;1\n1;2;0\n7\n", "4294967294,0\n", vertices(9)[1:]} {
		f.Add([]byte(text), []byte("1\n0\n-0\n2"), int8(-1), false)
		f.Add([]byte(text), []byte("v\n1\n0\n-0"), int8(1), true)
	}
	f.Fuzz(func(t *testing.T, text, function []byte, degrees int8, star bool) {
		dir := t.TempDir()
		spec := faceted(place(t, "in.csv", string(text)), max(int(degrees), -1))
		spec.MemoryBytes = 1 << 22
		if star {
			spec.Function = place(t, "f.csv", string(function))
		}
		requireFolder(t, dir, func() (*chain.Complex, error) {
			return Facets(context.Background(), spec, dir, 2, source.Quiet{})
		})
	})
}
