package order

import (
	"context"
	"fmt"
	"io"
	"math"
	"slices"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/market"
)

// coordinates are the odd entries of a matrix as they were read, 8 bytes each;
// repeated ones still stand beside each other.
type coordinates struct {
	path       string
	rows, cols uint32
	entries    []uint64 // column << 32 | row
}

// Matrix reads a chain of Matrix Market files from spec, ∂_k for k = first,
// first+1, …, and publishes the chain complex in dir, which exists. The file of ∂_k
// has (k−1)-cells as rows and k-cells as columns, or the transpose with
// spec.FacesInCols. Entries are taken mod 2 and repeated ones add. The order of the
// cells is that of the columns. With spec.FirstDegree > 1 the degrees below first−1
// are empty and nothing is claimed for degree first−1. Errors: *source.InputError for
// a broken file or shapes that do not chain, *source.UsageError, *source.TooBig.
// Time: O(entries), by counting. Memory: 12 bytes an entry of the matrix in work.
func Matrix(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	first := max(spec.FirstDegree, 1)
	if spec.FacesInCols && spec.FacesInRows {
		return nil, &source.UsageError{Why: "--faces-in-columns and --faces-in-rows exclude each other"}
	}
	if len(spec.ValueFiles) > 0 && len(spec.ValueFiles) != len(spec.Inputs)+1 {
		return nil, &source.UsageError{Why: fmt.Sprintf("--values names %d files; %d matrices need %d, one for each degree", len(spec.ValueFiles), len(spec.Inputs), len(spec.Inputs)+1)}
	}
	shapes, err := shapesOf(spec)
	if err != nil {
		return nil, err
	}
	c := &chain.Complex{Kind: string(source.Matrix), Naming: chain.ByColumn, KeepZero: spec.KeepZeroPairs || len(spec.ValueFiles) == 0}
	m := &matrices{spec: spec, complex: c, first: first, dir: dir, files: spec.Inputs}
	m.plan(shapes)
	if err := m.values(); err != nil {
		return nil, err
	}
	for k := 1; k < len(c.Cells); k++ {
		if err := m.block(ctx, k, p); err != nil {
			return nil, err
		}
	}
	return c, c.Write(dir)
}

type matrices struct {
	spec    source.Spec
	complex *chain.Complex
	first   int // degree of the first file's columns
	dir     string
	files   []string
	value   [][]float64 // by degree; nil: all 0
}

type shape struct {
	rows, cols uint32
	entries    uint64
}

// shapesOf reads the files' headers and checks that the shapes chain.
func shapesOf(spec source.Spec) ([]shape, error) {
	var out []shape
	for _, path := range spec.Inputs {
		r, err := market.Open(path)
		if err != nil {
			return nil, err
		}
		rows, cols, n := r.Shape()
		r.Close()
		if spec.FacesInCols {
			rows, cols = cols, rows
		}
		out = append(out, shape{rows, cols, n})
	}
	straight, turned := chained(out, false), chained(out, true)
	switch {
	case straight < 0:
	case turned < 0 && !spec.FacesInRows && !spec.FacesInCols:
		return nil, source.Broken(spec.Inputs[straight], 0, "its rows do not match the columns of %s, but the transposes chain: use --faces-in-columns", spec.Inputs[straight-1])
	default:
		return nil, source.Broken(spec.Inputs[straight], 0, "it has %d rows (faces) but the matrix before it, %s, has %d columns; give ∂_k and ∂_(k+1) in order", out[straight].rows, spec.Inputs[straight-1], out[straight-1].cols)
	}
	need := uint64(0)
	for _, s := range out {
		need += 16*s.entries + 24*uint64(s.cols)
	}
	if spec.MemoryBytes > 0 && need > spec.MemoryBytes {
		return nil, &source.TooBig{Why: fmt.Sprintf("the matrices need about %d MiB and --memory allows %d MiB", need>>20, spec.MemoryBytes>>20)}
	}
	return out, nil
}

// chained returns the first matrix that does not chain with the one before, or −1.
func chained(s []shape, turned bool) int {
	for i := 1; i < len(s); i++ {
		rows, before := s[i].rows, s[i-1].cols
		if turned {
			rows, before = s[i].cols, s[i-1].rows
		}
		if rows != before {
			return i
		}
	}
	return -1
}

// plan fixes the degrees and cells.
func (m *matrices) plan(shapes []shape) {
	c := m.complex
	c.Cells = make([]uint32, m.first-1, m.first+len(shapes))
	c.Cells = append(c.Cells, shapes[0].rows)
	for _, s := range shapes {
		c.Cells = append(c.Cells, s.cols)
	}
	c.Degrees = len(c.Cells) - 1
	if m.first > 1 {
		c.First = m.first
	}
	if k := m.spec.Degrees; k >= 0 && k < c.Degrees {
		c.Cells, c.Degrees, c.Truncated = c.Cells[:k+2], k, true
	}
	c.RowsAtMost2, c.ColsAtMost2 = make([]bool, len(c.Cells)), make([]bool, len(c.Cells))
}

// block reads one file, sorts it into columns by counting, and publishes ∂_k.
func (m *matrices) block(ctx context.Context, k int, p source.Progress) error {
	x := &coordinates{rows: m.complex.Cells[k-1], cols: m.complex.Cells[k]}
	if k >= m.first {
		x.path = m.files[k-m.first]
		p.Stage("read")
		if err := x.read(ctx, m.spec.FacesInCols, p); err != nil {
			return err
		}
	}
	p.Stage("block")
	columns, offsets := x.columns()
	if err := m.suspicious(x, columns, offsets); err != nil {
		return err
	}
	if err := m.inOrder(k, x, columns, offsets); err != nil {
		return err
	}
	m.shapeOf(k, x, columns, offsets)
	width := common(offsets)
	out, err := block.Create(chain.BlockPath(m.dir, k), x.rows, x.cols, width, uint64(len(columns)))
	if err != nil {
		return err
	}
	defer out.Discard()
	copy(out.Entries, columns)
	if width == 0 {
		copy(out.Offsets, offsets)
	}
	return published(out.Publish(false), out.Close)
}

// read takes the odd entries of the file.
func (x *coordinates) read(ctx context.Context, turned bool, p source.Progress) error {
	r, err := market.Open(x.path)
	if err != nil {
		return err
	}
	defer r.Close()
	for n := 0; ; n++ {
		if n%(1<<16) == 0 {
			p.Advance(r.BytesRead(), r.Size())
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
		}
		row, col, odd, err := r.Next()
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return err
		}
		if turned {
			row, col = col, row
		}
		if row >= x.rows || col >= x.cols {
			return source.Broken(x.path, r.Line(), "the file changed while it was read")
		}
		if odd {
			x.entries = append(x.entries, uint64(col)<<32|uint64(row))
		}
	}
}

// columns sorts the entries into columns, rows ascending; equal ones cancel in pairs.
func (x *coordinates) columns() (rows []uint32, offsets []uint64) {
	offsets = make([]uint64, uint64(x.cols)+1)
	for _, e := range x.entries {
		offsets[e>>32+1]++
	}
	for j := range uint64(x.cols) {
		offsets[j+1] += offsets[j]
	}
	rows = make([]uint32, len(x.entries))
	next := slices.Clone(offsets)
	for _, e := range x.entries {
		at := &next[e>>32]
		rows[*at] = uint32(e)
		*at++
	}
	x.entries = nil
	out, from := uint64(0), uint64(0)
	for j := range uint64(x.cols) {
		to := offsets[j+1]
		col := rows[from:to]
		slices.Sort(col)
		begin := out
		for _, r := range col {
			if out > begin && rows[out-1] == r {
				out--
				continue
			}
			rows[out] = r
			out++
		}
		offsets[j], from = begin, to
	}
	offsets[x.cols] = out
	return rows[:out], offsets
}

// suspicious refuses a matrix that looks like its transpose: all rows have one count
// of entries and the columns do not.
func (m *matrices) suspicious(x *coordinates, rows []uint32, offsets []uint64) error {
	if m.spec.FacesInRows || m.spec.FacesInCols || len(rows) == 0 || x.path == "" {
		return nil
	}
	count := make([]uint32, x.rows)
	for _, r := range rows {
		count[r]++
	}
	for _, n := range count {
		if n != count[0] {
			return nil
		}
	}
	if common(offsets) != 0 {
		return nil
	}
	return source.Broken(x.path, 0, "every row has %d entries and the columns differ, so this looks like a transposed boundary; use --faces-in-columns, or --faces-in-rows to insist", count[0])
}

// common returns the count of entries that all columns have, 0 if there is none.
func common(offsets []uint64) uint32 {
	if len(offsets) < 2 {
		return 0
	}
	n := offsets[1]
	for j := 1; j < len(offsets); j++ {
		if offsets[j]-offsets[j-1] != n {
			return 0
		}
	}
	return uint32(n)
}

// shapeOf tells whether the block is a graph, by columns or by rows.
func (m *matrices) shapeOf(k int, x *coordinates, rows []uint32, offsets []uint64) {
	thin, count := true, make([]uint8, x.rows)
	for _, r := range rows {
		if count[r]++; count[r] > 2 {
			thin = false
			break
		}
	}
	narrow := true
	for j := range uint64(x.cols) {
		narrow = narrow && offsets[j+1]-offsets[j] <= 2
	}
	m.complex.RowsAtMost2[k], m.complex.ColsAtMost2[k] = thin, narrow
}

// values reads the value arrays and writes the cell tables.
func (m *matrices) values() error {
	m.value = make([][]float64, len(m.complex.Cells))
	for i, path := range m.spec.ValueFiles {
		k := m.first - 1 + i
		if k >= len(m.complex.Cells) {
			break // above the cut
		}
		v, err := readFunction(path)
		if err != nil {
			return err
		}
		if uint64(len(v)) != uint64(m.complex.Cells[k]) {
			return source.Broken(path, 0, "%d values; one for each of the %d cells of degree %d was expected", len(v), m.complex.Cells[k], k)
		}
		for j := 1; j < len(v); j++ {
			if v[j] < v[j-1] {
				return source.Broken(path, 0, "value %v of cell %d is below %v of the cell before; columns must stand in the order of their values", v[j], j, v[j-1])
			}
		}
		m.value[k] = v
	}
	if len(m.spec.ValueFiles) == 0 {
		return nil
	}
	for k, v := range m.value {
		if err := writeValues(m.dir, k, m.complex.Cells[k], v); err != nil {
			return err
		}
	}
	return nil
}

func writeValues(dir string, k int, n uint32, v []float64) error {
	out, err := chain.CreateValues(chain.CellsPath(dir, k), n)
	if err != nil {
		return err
	}
	defer out.Discard()
	copy(out.Values, v)
	return published(out.Publish(false), out.Close)
}

// inOrder checks that no face enters after its coface.
func (m *matrices) inOrder(k int, x *coordinates, rows []uint32, offsets []uint64) error {
	low, high := m.value[k-1], m.value[k]
	if low == nil || high == nil {
		return nil
	}
	for j := range uint64(x.cols) {
		for _, r := range rows[offsets[j]:offsets[j+1]] {
			if low[r] > high[j] || math.IsNaN(low[r]) {
				return source.Broken(x.path, 0, "%d-cell %d enters at %v, before its face %d at %v; a face must not be later than its coface", k, j, high[j], r, low[r])
			}
		}
	}
	return nil
}
