package order

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

const testBudget = 1 << 28

func all(*cellOf) bool { return true }

func place(t testing.TB, name, text string) string {
	path := filepath.Join(t.TempDir(), name)
	require.NoError(t, os.WriteFile(path, []byte(text), 0o644))
	return path
}

// files returns the bytes of all files of a folder.
func files(t *testing.T, dir string) map[string]string {
	out := map[string]string{}
	entries, err := os.ReadDir(dir)
	require.NoError(t, err)
	for _, e := range entries {
		b, err := os.ReadFile(filepath.Join(dir, e.Name()))
		require.NoError(t, err)
		out[e.Name()] = string(b)
	}
	return out
}

func listed(path string, degrees int) source.Spec {
	return source.Spec{Kind: source.Simplices, Inputs: []string{path}, Degrees: degrees, ValueFirst: true, MemoryBytes: testBudget}
}

// Hundreds of random complexes agree with the plainest construction; the order of lines
// and of the vertices in them does not matter, nor does the number of threads.
func TestSimplicesTwin(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 1))
	for range 120 {
		want := randomTwin(r)
		degrees := r.IntN(6) - 1
		var first map[string]string
		for threads := 1; threads < 3; threads++ {
			dir := t.TempDir()
			c, err := Simplices(context.Background(), listed(place(t, "in.csv", want.text(r, all)), degrees), dir, threads, source.Quiet{})
			require.NoError(t, err)
			got := files(t, dir)
			if first == nil {
				requireTwin(t, dir, c, want, degrees, spaced)
				first = got
			}
			require.Equal(t, first, got)
		}
	}
}

// Faces that are missing are added at the least value of their cofaces.
func TestSimplicesClose(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 2))
	for range 120 {
		whole := randomTwin(r)
		want, given := twin{}, 0
		text := whole.text(r, func(c *cellOf) bool {
			if r.IntN(2) == 0 && given > 0 {
				return false
			}
			want.addFaces(c.verts, c.value)
			given++
			return true
		})
		dim := want.dim()
		spec := listed(place(t, "in.csv", text), r.IntN(5)-1)
		spec.Close = true
		dir := t.TempDir()
		c, err := Simplices(context.Background(), spec, dir, 2, source.Quiet{})
		require.NoError(t, err)
		requireTwin(t, dir, c, want, spec.Degrees, spaced)
		if spec.Degrees < 0 || spec.Degrees >= dim {
			require.Equal(t, len(want)-given, noted(c, "missing faces added"))
		}
	}
}

func noted(c *chain.Complex, what string) int {
	for _, n := range c.Notes {
		if n.What == what {
			return int(n.Count)
		}
	}
	return 0
}

// A file that is long enough to be read in parts, shuffled: the same bytes for any
// number of threads as from the sorted file; what is wrong in it is named by its line.
func TestSimplicesParts(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 3))
	var lines []string
	value := make([]float64, 80*80)
	for i := range value {
		value[i] = r.NormFloat64()
	}
	put := func(verts ...int) {
		v := math.Inf(-1)
		for _, u := range verts {
			v = max(v, value[u])
		}
		line := fmt.Sprint(v)
		for _, i := range r.Perm(len(verts)) {
			line += fmt.Sprintf(",%d", verts[i])
		}
		lines = append(lines, line)
	}
	for y := range 80 {
		for x := range 80 {
			a, right, up := 80*y+x, x < 79, y < 79
			put(a)
			if right {
				put(a, a+1)
			}
			if up {
				put(a, a+80)
			}
			if right && up {
				put(a, a+81)
				put(a, a+1, a+81)
				put(a, a+80, a+81)
			}
		}
	}
	var first map[string]string
	for _, threads := range []int{1, 2, 5} {
		dir := t.TempDir()
		c, err := Simplices(context.Background(), listed(place(t, "in.csv", strings.Join(lines, "\n")+"\n"), -1), dir, threads, source.Quiet{})
		require.NoError(t, err)
		require.Equal(t, []uint32{6400, 79*80*2 + 79*79, 2 * 79 * 79}, c.Cells)
		require.True(t, c.RowsAtMost2[2])
		got := files(t, dir)
		if first == nil {
			first = got
		}
		require.Equal(t, first, got)
		r.Shuffle(len(lines), func(i, j int) { lines[i], lines[j] = lines[j], lines[i] })
	}
	lines[30_000], lines[33_000] = "0.5,x", "7,5,5"
	for _, threads := range []int{1, 2, 5} {
		_, err := Simplices(context.Background(), listed(place(t, "in.csv", strings.Join(lines, "\n")), -1), t.TempDir(), threads, source.Quiet{})
		require.ErrorContains(t, err, `line 30001: vertex "x"`)
	}
}

const triangleText = "0,0\n0,1\n0,2\n1,0,1\n1,0,2\n1,1,2\n2,0,1,2\n"

// Every kind of broken file has its message, and leaves nothing in the folder.
func TestSimplicesBroken(t *testing.T) {
	for text, want := range map[string]string{
		"":                                     "no simplex in it",
		"# nothing\n":                          "no simplex in it",
		triangleText + "5,1,3\n":               "line 8: simplex [1 3] has the face [3], which is not in the file",
		triangleText + "3,4\n5,1,4,2\n":        "line 9: simplex [1 2 4] has the face [2 4]",
		triangleText + "1,1,0\n":               "line 8: simplex [0 1] stands in line 4 already",
		"1,1\n" + triangleText:                 "line 3: simplex [1] stands in line 1 already",
		triangleText + "5,1,2,1\n":             "line 8: vertex 1 is repeated",
		"0.5,0\n0,1\n0.25,1,0\n":               "line 3: simplex [0 1] enters at 0.25, before its face [0] of line 1 at 0.5",
		"NaN,0\n0,1\n":                         `line 1: value "NaN"; a finite number`,
		"0,0\n\n+Inf,1\n":                      `line 3: value "+Inf"`,
		"0,0\n1e999,1\n":                       `line 2: value "1e999"`,
		"0,0\n0\n":                             "line 2: a value without vertices",
		"0,-1\n":                               `line 1: vertex "-1"; a whole number`,
		"0,4294967295\n":                       `line 1: vertex "4294967295"`,
		"0,1.5\n":                              `line 1: vertex "1.5"`,
		"0,\n":                                 `line 1: vertex ""`,
		"0,0\n0,a\n":                           `line 2: vertex "a"`,
		"0,0\n0,\"1\n":                         "line 2: a quote",
		"0,0\n0,\x001\n":                       "line 2: a zero byte",
		"0,1,2\n1,2,3\n0,2,3\n":                "these look like vertex lists; use --as facets, or --value-first to insist",
		"0" + strings.Repeat(",1", 65) + "\n":  "65 vertices; at most 64",
		"1,0,1,2,3,4\n":                        "simplex [0 1 2 3 4] has the face [1 2 3 4]",
		strings.Repeat("9", 1<<24) + "0\n0,0":  "longer than 16 MiB",
		"value,vertex\n0,0\nvalue,1\n":         `line 3: value "value"`,
		"0,0\n0,3,5\n0,5\n0,7\n0,3,7\n0,5,7\n": "face [3]",
	} {
		spec := listed(place(t, "in.csv", text), -1)
		spec.ValueFirst = strings.HasPrefix(text, "0,0") || strings.HasPrefix(text, "1,1")
		dir := t.TempDir()
		c, err := Simplices(context.Background(), spec, dir, 2, source.Quiet{})
		require.Nil(t, c)
		require.ErrorAs(t, err, new(*source.InputError), "%.40q", text)
		require.ErrorContains(t, err, want, "%.40q", text)
		require.Empty(t, files(t, dir), "%.40q", text)
	}
	_, err := Simplices(context.Background(), listed(filepath.Join(t.TempDir(), "none.csv"), -1), t.TempDir(), 1, source.Quiet{})
	require.ErrorIs(t, err, os.ErrNotExist)
}

// Simplices above the cut are dropped and counted, but not where faces of the cut's
// degree are missing altogether.
func TestSimplicesCut(t *testing.T) {
	dir := t.TempDir()
	c, err := Simplices(context.Background(), listed(place(t, "in.csv", triangleText), 0), dir, 1, source.Quiet{})
	require.NoError(t, err)
	require.Equal(t, []uint32{3, 3}, c.Cells)
	require.Equal(t, []chain.Note{{What: "simplices above degree 1 left out", Count: 1}}, c.Notes)
	_, err = Simplices(context.Background(), listed(place(t, "in.csv", "1,0\n1,0,1,2,3\n"), 0), t.TempDir(), 1, source.Quiet{})
	require.ErrorContains(t, err, "no simplex of degree 1")
}

// What does not fit the budget is refused before the work, and a stop is heard.
func TestSimplicesRefused(t *testing.T) {
	spec := listed(place(t, "in.csv", triangleText), -1)
	spec.MemoryBytes = 300
	dir := t.TempDir()
	_, err := Simplices(context.Background(), spec, dir, 1, source.Quiet{})
	require.ErrorAs(t, err, new(*source.TooBig))
	require.ErrorContains(t, err, "[3 3 1] simplices by degree")
	spec = listed(place(t, "in.csv", "1"+vertices(40)+"\n"), 6)
	spec.Close = true
	_, err = Simplices(context.Background(), spec, dir, 1, source.Quiet{})
	require.ErrorAs(t, err, new(*source.TooBig))
	spec.Degrees = -1
	_, err = Simplices(context.Background(), spec, dir, 1, source.Quiet{})
	require.ErrorContains(t, err, "40 vertices; all faces are made of simplices of up to 25")
	ctx, stop := context.WithCancel(context.Background())
	stop()
	_, err = Simplices(ctx, listed(place(t, "in.csv", triangleText), -1), dir, 1, source.Quiet{})
	require.ErrorIs(t, err, context.Canceled)
	require.Empty(t, files(t, dir))
}

func vertices(n int) string {
	var b strings.Builder
	for v := range n {
		fmt.Fprintf(&b, ",%d", v)
	}
	return b.String()
}

// The word sort agrees with the standard library for keys of every spread, and runs
// of equal leading bits of every length.
func TestSorting(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 4))
	for round := range 200 {
		n := 1 + r.IntN([]int{10, 1000, 20_000}[round%3])
		keys, ties := make([]uint64, n), make([]int, n)
		shift, levels := r.IntN(64), 1+r.IntN(n)
		for i := range keys {
			switch round % 5 {
			case 0:
				keys[i] = r.Uint64() >> shift
			case 1:
				keys[i] = uint64(r.IntN(levels)) << shift
			case 2:
				keys[i] = source.SortKey(1 + 1e-9*r.Float64())
			default:
				keys[i] = source.SortKey(1 + 1e-9*float64(r.IntN(levels)))
			}
			ties[i] = r.IntN(4)
		}
		if round%5 == 2 || round%5 == 4 {
			keys[r.IntN(n)] = 0 // far away: all others agree in the leading bits
		}
		s := &sorting{key: func(i uint32) uint64 { return keys[i] }}
		if round%2 == 0 {
			s.tie = func(i, j uint32) int { return cmp.Compare(ties[i], ties[j]) }
		}
		want, got := make([]uint32, n), make([]uint32, n)
		for i := range want {
			want[i] = uint32(i)
		}
		slices.SortStableFunc(want, func(i, j uint32) int {
			if c := cmp.Compare(keys[i], keys[j]); c != 0 || s.tie == nil {
				return c
			}
			return s.tie(i, j)
		})
		items := make([]uint64, n)
		s.sort(items, make([]uint64, n))
		for i, it := range items {
			got[i] = uint32(it)
		}
		require.Equal(t, want, got, "round %d", round)
	}
}

func FuzzSimplices(f *testing.F) {
	for _, text := range []string{triangleText, "1;0\n2;1 \n2;0;1", "# x\nv w\n-0 5\n", "1," + vertices(4)} {
		f.Add([]byte(text), int8(-1), false)
		f.Add([]byte(text), int8(1), true)
	}
	f.Fuzz(func(t *testing.T, text []byte, degrees int8, closing bool) {
		dir := t.TempDir()
		spec := listed(place(t, "in.csv", string(text)), max(int(degrees), -1))
		spec.Close, spec.MemoryBytes = closing, 1<<22
		requireFolder(t, dir, func() (*chain.Complex, error) {
			return Simplices(context.Background(), spec, dir, 2, source.Quiet{})
		})
	})
}

// requireFolder runs a reader: a whole folder that opens, or an error and no file.
func requireFolder(t *testing.T, dir string, read func() (*chain.Complex, error)) {
	c, err := read()
	if err != nil {
		require.Empty(t, files(t, dir))
		return
	}
	table, err := chain.OpenTable(dir)
	require.NoError(t, err)
	defer table.Close()
	for k := 1; k <= c.Top(); k++ {
		m, err := chain.OpenBlock(dir, k, false)
		require.NoError(t, err)
		require.NoError(t, m.Close())
	}
}

func BenchmarkSimplices(b *testing.B) {
	var text strings.Builder
	const side = 300
	for y := range side {
		for x := range side {
			a := side*y + x
			v := 1 + math.Sin(float64(a))
			fmt.Fprintf(&text, "%.9g,%d\n", v, a)
			if x > 0 {
				fmt.Fprintf(&text, "%.9g,%d,%d\n", 2+v, a-1, a)
			}
			if y > 0 {
				fmt.Fprintf(&text, "%.9g,%d,%d\n", 2+v, a-side, a)
			}
		}
	}
	path := place(b, "in.csv", text.String())
	b.SetBytes(int64(text.Len()))
	b.ReportAllocs()
	for b.Loop() {
		dir := b.TempDir()
		spec := listed(path, -1)
		_, err := Simplices(context.Background(), spec, dir, 1, source.Quiet{})
		require.NoError(b, err)
	}
}
