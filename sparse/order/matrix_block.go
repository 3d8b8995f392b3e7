package order

import (
	"context"
	"io"
	"slices"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/market"
)

const (
	chunkEntries = 1 << 17 // entries are kept in pieces of 1 MiB, so that none is moved by growth
	breath       = 1 << 16 // entries or columns between two looks at the context
)

// coordinates are the odd entries of a matrix as they were read, repeated ones too:
// column << 32 | row.
type coordinates struct {
	path       string // empty: no file, no entries
	rows, cols uint32
	chunks     [][]uint64
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
	out, err := x.columns(ctx, chain.BlockPath(m.dir, k))
	if err != nil {
		return err
	}
	defer out.Discard()
	even, thin := rowCounts(out)
	if even > 0 && out.Width == 0 && x.path != "" && !m.spec.FacesInRows && !m.spec.FacesInCols {
		return source.Broken(x.path, 0, "every row has %d entries and the columns differ, so this looks like a transposed boundary; use --faces-in-columns, or --faces-in-rows to insist", even)
	}
	if err := m.inOrder(k, x.path, out); err != nil {
		return err
	}
	m.complex.RowsAtMost2[k], m.complex.ColsAtMost2[k] = thin, narrow(out)
	return published(out.Publish(false), out.Close)
}

// read takes the odd entries of the file.
func (x *coordinates) read(ctx context.Context, turned bool, p source.Progress) error {
	r, err := market.Open(x.path)
	if err != nil {
		return err
	}
	defer r.Close()
	_, _, announced := r.Shape()
	var chunk []uint64
	for n := 0; ; n++ {
		if n%breath == 0 {
			p.Advance(r.BytesRead(), r.Size())
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
		}
		row, col, odd, err := r.Next()
		if err == io.EOF {
			x.chunks = append(x.chunks, chunk)
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
		if len(chunk) == chunkEntries {
			x.chunks, chunk = append(x.chunks, chunk), nil
		}
		if odd {
			if chunk == nil {
				chunk = make([]uint64, 0, min(announced, chunkEntries))
			}
			chunk = append(chunk, uint64(col)<<32|uint64(row))
		}
	}
}

// columns lays out a block with the entries sorted into columns, rows ascending, equal
// ones cancelled in pairs. The entries are given up.
func (x *coordinates) columns(ctx context.Context, path string) (*block.Matrix, error) {
	next := make([]uint64, uint64(x.cols)+1)
	for _, chunk := range x.chunks {
		for _, e := range chunk {
			next[e>>32+1]++
		}
	}
	for j := range uint64(x.cols) {
		next[j+1] += next[j]
	}
	out, err := created(path, x.rows, next)
	if err != nil {
		return nil, err
	}
	for i, chunk := range x.chunks {
		for _, e := range chunk {
			at := &next[e>>32]
			out.Entries[*at] = uint32(e)
			*at++
		}
		x.chunks[i] = nil
		if ctx.Err() != nil {
			out.Discard()
			return nil, context.Cause(ctx)
		}
	}
	repeated, err := sortColumns(ctx, out)
	if err != nil {
		out.Discard()
		return nil, err
	}
	if repeated {
		return cancelled(path, out)
	}
	return out, nil
}

// created lays out a block whose columns begin at offsets.
func created(path string, rows uint32, offsets []uint64) (*block.Matrix, error) {
	cols := uint32(len(offsets) - 1)
	width := common(offsets)
	out, err := block.Create(path, rows, cols, width, offsets[cols])
	if err == nil && width == 0 {
		copy(out.Offsets, offsets)
	}
	return out, err
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

// sortColumns makes rows ascend in each column and says whether one stands there twice.
func sortColumns(ctx context.Context, m *block.Matrix) (repeated bool, err error) {
	for j := range m.Cols {
		if j%breath == 0 && ctx.Err() != nil {
			return false, context.Cause(ctx)
		}
		column := m.Column(j, nil)
		if !slices.IsSorted(column) {
			slices.Sort(column)
		}
		for i := 1; i < len(column); i++ {
			repeated = repeated || column[i] == column[i-1]
		}
	}
	return repeated, nil
}

// cancelled replaces a block by one in which equal entries cancel in pairs.
func cancelled(path string, m *block.Matrix) (*block.Matrix, error) {
	rows, offsets := make([]uint32, 0, len(m.Entries)), make([]uint64, 1, uint64(m.Cols)+1)
	for j := range m.Cols {
		begin := len(rows)
		for _, r := range m.Column(j, nil) {
			if n := len(rows); n > begin && rows[n-1] == r {
				rows = rows[:n-1]
				continue
			}
			rows = append(rows, r)
		}
		offsets = append(offsets, uint64(len(rows)))
	}
	shape := m.Rows
	m.Discard()
	out, err := created(path, shape, offsets)
	if err == nil {
		copy(out.Entries, rows)
	}
	return out, err
}

// rowCounts returns the count of entries that all rows have (0 if they differ), and
// whether every row has at most two.
func rowCounts(m *block.Matrix) (even uint32, thin bool) {
	count := make([]uint32, m.Rows)
	for _, r := range m.Entries {
		count[r]++
	}
	if len(count) == 0 {
		return 0, true
	}
	even, thin = count[0], true
	for _, n := range count {
		if n != count[0] {
			even = 0
		}
		thin = thin && n <= 2
	}
	return even, thin
}

// narrow says whether every column has at most two entries.
func narrow(m *block.Matrix) bool {
	if m.Width > 0 {
		return m.Width <= 2
	}
	for j := range m.Cols {
		if m.Offsets[j+1]-m.Offsets[j] > 2 {
			return false
		}
	}
	return true
}
