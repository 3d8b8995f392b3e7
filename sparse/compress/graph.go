package compress

import (
	"context"
	"fmt"

	"pairloom/sparse/block"
	"pairloom/sparse/column"
)

// forest is union–find by the elder rule: the root of a tree is its oldest node.
type forest []uint32

func newForest(n uint64) forest {
	up := make(forest, n)
	for i := range up {
		up[i] = uint32(i)
	}
	return up
}

// find returns the root of x, halving the path on its way (Tarjan, van Leeuwen 1984).
func (up forest) find(x uint32) uint32 {
	for up[x] != x {
		up[x] = up[up[x]]
		x = up[x]
	}
	return x
}

// join merges the trees of x and y; the elder root stays. It returns the younger
// root, which dies, and false if there was one tree already.
func (up forest) join(x, y uint32) (dies uint32, ok bool) {
	x, y = up.find(x), up.find(y)
	if x == y {
		return 0, false
	}
	if x < y {
		x, y = y, x
	}
	up[x] = y
	return x, true
}

// Graph pairs a block whose columns have at most two entries: rows are nodes, a
// column of one entry hangs on a ground node older than all. It fills pivotOf
// (length rows): row → the column that has it as pivot, or block.None.
// Time: O(columns · α). Memory: 4 bytes a row.
func Graph(ctx context.Context, m block.Columns, pivotOf []uint32) error {
	rows, cols := m.Shape()
	up := newForest(uint64(rows) + 1) // node r+1 is row r, node 0 the ground
	for r := range pivotOf {
		pivotOf[r] = block.None
	}
	var buf []uint32
	for j := range cols {
		if j%checkEvery == 0 && ctx.Err() != nil {
			return context.Cause(ctx)
		}
		col := m.Column(j, buf)
		ground := uint32(0)
		switch len(col) {
		case 0:
			continue
		case 1:
		case 2:
			ground = col[0] + 1
		default:
			return fmt.Errorf("compress: column %d has %d entries; a graph block has at most 2", j, len(col))
		}
		if dies, ok := up.join(col[len(col)-1]+1, ground); ok {
			pivotOf[dies-1] = j
		}
	}
	return nil
}

// DualGraph pairs a block whose rows have at most two entries, by duality: columns
// are nodes, a row joins the columns that hold it, or one column and a node for
// the outside; rows are taken from last to first and the eldest node is the latest
// column. Rows in dropped (known deaths of the degree below) are skipped: their
// column in the coboundary route is zero. It fills pivotOf (length rows) like Graph.
// Time: O(entries + rows · α). Memory: 8 bytes a row and 4 bytes a column.
func DualGraph(ctx context.Context, m block.Columns, dropped column.Bits, pivotOf []uint32) error {
	rows, cols := m.Shape()
	ends, err := cofacets(ctx, m)
	if err != nil {
		return err
	}
	// Node n is column cols−n, so that a smaller node is a later column; 0 is the outside.
	up := newForest(uint64(cols) + 1)
	node := func(j uint32) uint32 {
		if j == block.None {
			return 0
		}
		return cols - j
	}
	for r := rows; r > 0; {
		r--
		a, b := ends[2*uint64(r)], ends[2*uint64(r)+1]
		pivotOf[r] = block.None
		if a == block.None || dropped.Has(r) {
			continue
		}
		if dies, ok := up.join(node(a), node(b)); ok {
			pivotOf[r] = cols - dies
		}
		if r%checkEvery == 0 && ctx.Err() != nil {
			return context.Cause(ctx)
		}
	}
	return nil
}

// cofacets lists the at most two columns that hold each row.
func cofacets(ctx context.Context, m block.Columns) ([]uint32, error) {
	rows, cols := m.Shape()
	ends := make([]uint32, 2*uint64(rows))
	for i := range ends {
		ends[i] = block.None
	}
	var buf []uint32
	for j := range cols {
		if j%checkEvery == 0 && ctx.Err() != nil {
			return nil, context.Cause(ctx)
		}
		for _, r := range m.Column(j, buf) {
			e := ends[2*uint64(r) : 2*uint64(r)+2]
			switch {
			case e[0] == block.None:
				e[0] = j
			case e[1] == block.None:
				e[1] = j
			default:
				return nil, fmt.Errorf("compress: row %d has more than 2 entries; it is not a graph by duality", r)
			}
		}
	}
	return ends, nil
}
