package order

import (
	"cmp"
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
)

// gridArray is a small array; values in C order.
type gridArray struct {
	shape  []int
	values []float64
}

// gridCell is a cell of the slow twin.
type gridCell struct {
	coord   []int // on the doubled grid
	centre  int   // C-order index of the voxel that gives the value
	centres []int // ranks of all vertices, latest first, or of all top cells, earliest first
}

// coordsOf and indexOf go between C-order indices and coordinates.
func coordsOf(shape []int, at int) []int {
	c := make([]int, len(shape))
	for a := len(shape) - 1; a >= 0; a-- {
		c[a], at = at%shape[a], at/shape[a]
	}
	return c
}

func indexOf(shape, coord []int) (at int) {
	for a, n := range shape {
		at = at*n + coord[a]
	}
	return at
}

// ranks orders the voxels that are inside by (value, index): rank by index, −1 outside.
func (g gridArray) ranks() []int {
	var order []int
	for i, v := range g.values {
		if !math.IsNaN(v) {
			order = append(order, i)
		}
	}
	slices.SortFunc(order, func(i, j int) int {
		return cmp.Or(cmp.Compare(g.values[i], g.values[j]), i-j)
	})
	ranks := slices.Repeat([]int{-1}, len(g.values))
	for r, i := range order {
		ranks[i] = r
	}
	return ranks
}

// around lists the voxels whose vertex or top cell touches the cell at coord.
func (g gridArray) around(coord []int, top bool) []int {
	sets := [][]int{{}}
	for a, z := range coord {
		var along []int
		switch {
		case top && z%2 == 1, !top && z%2 == 0:
			along = []int{z / 2}
		case top:
			along = []int{z/2 - 1, z / 2}
		default:
			along = []int{z / 2, z/2 + 1}
		}
		var next [][]int
		for _, s := range sets {
			for _, x := range along {
				if x >= 0 && x < g.shape[a] {
					next = append(next, append(slices.Clone(s), x))
				}
			}
		}
		sets = next
	}
	var out []int
	for _, s := range sets {
		out = append(out, indexOf(g.shape, s))
	}
	return out
}

// cells enumerates the complex by degree, in the order that Grid takes.
func (g gridArray) cells(top bool) [][]gridCell {
	size, all := make([]int, len(g.shape)), 1
	for a, n := range g.shape {
		size[a] = 2*n - 1
		if top {
			size[a] = 2*n + 1
		}
		all *= size[a]
	}
	ranks := g.ranks()
	out := make([][]gridCell, len(g.shape)+1)
	for at := range all {
		c := gridCell{coord: coordsOf(size, at), centre: -1}
		whole := true
		for _, v := range g.around(c.coord, top) {
			if ranks[v] < 0 {
				whole = false
				continue
			}
			c.centres = append(c.centres, ranks[v])
			if c.centre < 0 || (ranks[v] < ranks[c.centre]) == top {
				c.centre = v
			}
		}
		if len(c.centres) == 0 || (!top && !whole) {
			continue
		}
		slices.Sort(c.centres)
		if !top {
			slices.Reverse(c.centres)
		}
		out[c.degree()] = append(out[c.degree()], c)
	}
	for _, cells := range out {
		slices.SortStableFunc(cells, func(a, b gridCell) int { return a.centres[0] - b.centres[0] })
	}
	for len(out) > 1 && len(out[len(out)-1]) == 0 {
		out = out[:len(out)-1]
	}
	return out
}

func (c gridCell) degree() (k int) {
	for _, z := range c.coord {
		k += z % 2
	}
	return k
}

func (c gridCell) name(shape []int) string {
	return strings.Trim(fmt.Sprint(coordsOf(shape, c.centre)), "[]")
}

// gridBoundary lists the facets of all cells as ranks in the order given.
func gridBoundary(cells [][]gridCell) [][][]uint32 {
	out := make([][][]uint32, len(cells))
	for k := range cells {
		rank := map[string]uint32{}
		if k > 0 {
			for r, c := range cells[k-1] {
				rank[fmt.Sprint(c.coord)] = uint32(r)
			}
		}
		for _, c := range cells[k] {
			col := []uint32{}
			for a, z := range c.coord {
				for _, s := range []int{-1, 1} {
					if z%2 == 1 {
						f := slices.Clone(c.coord)
						f[a] += s
						col = append(col, rank[fmt.Sprint(f)])
					}
				}
			}
			slices.Sort(col)
			out[k] = append(out[k], col)
		}
	}
	return out
}

// requireGrid compares a folder with the twin: counts, names, values, every column.
func requireGrid(t *testing.T, dir string, c *chain.Complex, g gridArray, top bool, degrees int) {
	cells := g.cells(top)
	dim := len(cells) - 1
	require.Equal(t, degrees >= 0 && degrees < dim, c.Truncated)
	if c.Truncated {
		cells, dim = cells[:degrees+2], degrees
	}
	require.Equal(t, dim, c.Degrees)
	require.Len(t, c.Cells, len(cells))
	table, err := chain.OpenTable(dir)
	require.NoError(t, err)
	defer table.Close()
	require.Equal(t, c, table.Complex)
	boundary := gridBoundary(cells)
	for k := range cells {
		require.Len(t, cells[k], int(c.Cells[k]))
		for r, cell := range cells[k] {
			got := fmt.Sprint(table.Value(k, uint32(r)), " ", string(table.AppendName(nil, k, uint32(r))))
			if want := fmt.Sprint(g.values[cell.centre]+0, " ", cell.name(g.shape)); got != want {
				require.Equal(t, want, got, "cell %d of degree %d", r, k)
			}
		}
		if k > 0 {
			requireGridBlock(t, dir, c, k, boundary[k])
		}
	}
}

func requireGridBlock(t *testing.T, dir string, c *chain.Complex, k int, want [][]uint32) {
	m, err := chain.OpenBlock(dir, k, false)
	require.NoError(t, err)
	defer m.Close()
	rows, cols := m.Shape()
	require.Equal(t, []uint32{c.Cells[k-1], c.Cells[k]}, []uint32{rows, cols})
	uses, most := make([]int, rows), 0
	for j, col := range want {
		if got := m.Column(uint32(j), nil); !slices.Equal(col, got) {
			require.Equal(t, col, got, "column %d of block %d", j, k)
		}
		for _, r := range col {
			uses[r]++
			most = max(most, uses[r])
		}
	}
	require.Equal(t, most <= 2, c.RowsAtMost2[k], "rows of block %d have up to %d entries", k, most)
	require.Equal(t, k == 1, c.ColsAtMost2[k])
}

// randomGrid makes an array of 1–4 axes with many ties, some −0 and, if asked, NaN.
func randomGrid(r *rand.Rand, outside bool) gridArray {
	g := gridArray{shape: make([]int, 1+r.IntN(axesMost))}
	n := 1
	for a := range g.shape {
		g.shape[a] = 1 + r.IntN([]int{0, 12, 6, 4, 3}[len(g.shape)])
		n *= g.shape[a]
	}
	levels := 1 + r.IntN(3*n)
	for range n {
		v := float64(r.IntN(levels) - levels/2)
		if v == 0 && r.IntN(2) == 0 {
			v = math.Copysign(0, -1)
		}
		if outside && r.IntN(5) == 0 {
			v = math.NaN()
		}
		g.values = append(g.values, v)
	}
	return g
}

// text is the array as a file: descr such as "<f4", C or Fortran order.
func (g gridArray) text(descr string, fortran bool) string {
	shape := strings.Trim(strings.Join(strings.Fields(fmt.Sprint(g.shape)), ","), "[]")
	order := map[bool]string{false: "False", true: "True"}[fortran]
	head := fmt.Sprintf("{'descr': '%s', 'fortran_order': %s, 'shape': (%s,), }\n", descr, order, shape)
	out := append([]byte("\x93NUMPY\x01\x00"), byte(len(head)), byte(len(head)>>8))
	out = append(out, head...)
	var bytes binary.AppendByteOrder = binary.LittleEndian
	if descr[0] == '>' {
		bytes = binary.BigEndian
	}
	for i := range g.values {
		at := i
		if fortran { // the i-th value in the order first axis fastest
			coord := make([]int, len(g.shape))
			for a, rest := 0, i; a < len(coord); a++ {
				coord[a], rest = rest%g.shape[a], rest/g.shape[a]
			}
			at = indexOf(g.shape, coord)
		}
		v := g.values[at]
		switch descr[1:] {
		case "u1":
			out = append(out, byte(v))
		case "u2", "i2":
			out = bytes.AppendUint16(out, uint16(int16(v)))
		case "i4":
			out = bytes.AppendUint32(out, uint32(int32(v)))
		case "i8":
			out = bytes.AppendUint64(out, uint64(int64(v)))
		case "f4":
			out = bytes.AppendUint32(out, math.Float32bits(float32(v)))
		case "f8":
			out = bytes.AppendUint64(out, math.Float64bits(v))
		}
	}
	return string(out)
}
