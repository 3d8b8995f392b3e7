package order

import (
	"cmp"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
)

// cellOf is a simplex of the slow twin: vertices ascending, value, and what it is
// compared by within its degree.
type cellOf struct {
	verts []uint32
	value float64
	key   []uint32 // lower stars: ranks, latest first
}

// twin is a filtered complex in the plainest form: cells by key.
type twin map[string]*cellOf

func (t twin) add(verts []uint32, value float64) {
	verts = slices.Clone(verts)
	slices.Sort(verts)
	name := fmt.Sprint(verts)
	if c, ok := t[name]; ok {
		c.value = min(c.value, value)
		return
	}
	t[name] = &cellOf{verts: verts, value: value}
}

// addFaces adds a simplex and all its faces at a value, or at the least they have.
func (t twin) addFaces(verts []uint32, value float64) {
	for set := 1; set < 1<<len(verts); set++ {
		var face []uint32
		for i, v := range verts {
			if set>>i&1 == 1 {
				face = append(face, v)
			}
		}
		t.add(face, value)
	}
}

// degrees lists the cells by degree, in the order of the contract.
func (t twin) degrees(top int) [][]*cellOf {
	out := make([][]*cellOf, top+1)
	for _, c := range t {
		if k := len(c.verts) - 1; k <= top {
			out[k] = append(out[k], c)
		}
	}
	for _, cells := range out {
		slices.SortFunc(cells, func(a, b *cellOf) int {
			return cmp.Or(slices.Compare(a.key, b.key), cmp.Compare(a.value, b.value), slices.Compare(a.verts, b.verts))
		})
	}
	return out
}

func (t twin) dim() (d int) {
	for _, c := range t {
		d = max(d, len(c.verts)-1)
	}
	return d
}

// requireTwin compares a published folder with the twin, cell by cell.
func requireTwin(t *testing.T, dir string, c *chain.Complex, want twin, degrees int, named func(*cellOf) string) {
	dim := want.dim()
	k, top := dim, dim
	if degrees >= 0 && degrees < dim {
		k, top = degrees, degrees+1
	}
	cells := want.degrees(top)
	require.Equal(t, k, c.Degrees)
	require.Equal(t, k < dim, c.Truncated)
	require.Equal(t, top, c.Top())
	table, err := chain.OpenTable(dir)
	require.NoError(t, err)
	defer table.Close()
	rank := map[string]uint32{}
	for k := range cells {
		require.EqualValues(t, len(cells[k]), c.Cells[k])
		for r, cell := range cells[k] {
			rank[fmt.Sprint(cell.verts)] = uint32(r)
			require.Equal(t, math.Float64bits(cell.value), math.Float64bits(table.Value(k, uint32(r))))
			require.Equal(t, named(cell), string(table.AppendName(nil, k, uint32(r))))
		}
	}
	for k := 1; k <= top; k++ {
		requireBlock(t, dir, c, k, cells, rank)
	}
}

// requireBlock compares ∂_k with the twin's facets, and takes ∂∂.
func requireBlock(t *testing.T, dir string, c *chain.Complex, k int, cells [][]*cellOf, rank map[string]uint32) {
	m, err := chain.OpenBlock(dir, k, false)
	require.NoError(t, err)
	defer m.Close()
	require.EqualValues(t, k+1, m.Width)
	rows := make([]int, len(cells[k-1]))
	for r, cell := range cells[k] {
		var column []uint32
		twice := map[string]int{}
		for q := range cell.verts {
			face := slices.Delete(slices.Clone(cell.verts), q, q+1)
			column = append(column, rank[fmt.Sprint(face)])
			rows[rank[fmt.Sprint(face)]]++
		}
		slices.Sort(column)
		require.Equal(t, column, m.Column(uint32(r), nil))
		for _, i := range m.Column(uint32(r), nil) {
			face := cells[k-1][i].verts
			for q := range face {
				twice[fmt.Sprint(slices.Delete(slices.Clone(face), q, q+1))]++
			}
		}
		for name, n := range twice {
			require.Zero(t, n%2, "k = %d: %s", k, name)
		}
	}
	require.Equal(t, k == 1, c.ColsAtMost2[k])
	require.Equal(t, slices.Max(rows) <= 2, c.RowsAtMost2[k])
}

func spaced(c *cellOf) string { return strings.Trim(fmt.Sprint(c.verts), "[]") }

// randomTwin draws facets on a few vertices with odd numbers, values that never fall.
func randomTwin(r *rand.Rand) twin {
	t := twin{}
	verts := make([]uint32, 3+r.IntN(6))
	for i, v := range r.Perm(len(verts)) {
		verts[i] = uint32(v)
		if r.IntN(3) == 0 {
			verts[i] = uint32(v) + 20*uint32(r.IntN(200_000_000))
		}
	}
	slices.Sort(verts)
	verts = slices.Compact(verts)
	for range 1 + r.IntN(6) {
		r.Shuffle(len(verts), func(i, j int) { verts[i], verts[j] = verts[j], verts[i] })
		t.addFaces(verts[:1+r.IntN(min(len(verts), 5))], 0)
	}
	steps, scale := 1+r.IntN(9), []float64{1, -3, 0.1, 1e-300, 1e300}[r.IntN(5)]
	for _, c := range t {
		c.value = math.Abs(scale) * float64(r.IntN(steps)-2)
	}
	for k, cells := range t.degrees(t.dim()) {
		for _, c := range cells {
			for q := 0; k > 0 && q <= k; q++ {
				c.value = max(c.value, t[fmt.Sprint(slices.Delete(slices.Clone(c.verts), q, q+1))].value)
			}
		}
	}
	return t
}

// text writes the cells that keep says as lines, lines and vertices shuffled.
func (t twin) text(r *rand.Rand, keep func(*cellOf) bool) string {
	var lines []string
	delimiter := []string{",", ";", "\t", " ", " , "}[r.IntN(5)]
	for _, c := range t {
		if !keep(c) {
			continue
		}
		verts := slices.Clone(c.verts)
		r.Shuffle(len(verts), func(i, j int) { verts[i], verts[j] = verts[j], verts[i] })
		line := fmt.Sprint(c.value)
		if c.value == 0 && r.IntN(2) == 0 {
			line = "-0"
		}
		for _, v := range verts {
			line += delimiter + fmt.Sprint(v)
		}
		lines = append(lines, line)
	}
	slices.Sort(lines)
	r.Shuffle(len(lines), func(i, j int) { lines[i], lines[j] = lines[j], lines[i] })
	return "# simplices\n" + strings.Join(lines, []string{"\n", "\r\n"}[r.IntN(2)])
}
