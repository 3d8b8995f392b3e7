package order

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync/atomic"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// flagBuild writes the tables and blocks of a flag complex, degree by degree: where the
// simplices of an edge begin is known from the tally, and facets are found in the
// degree below, which is finished.
type flagBuild struct {
	flag     *flag
	tally    *tally
	complex  *chain.Complex
	dir      string
	threads  int
	progress source.Progress

	others []array[uint32] // per degree 2..top−1: vertices beside the longest edge, descending
	list   [][]uint32      // the slices of others
	made   []string        // files published so far
	done   atomic.Uint64
	total  uint64
}

func (b *flagBuild) free() {
	for k := range b.others {
		b.others[k].free()
	}
}

func (b *flagBuild) run(ctx context.Context) error {
	b.progress.Stage("block")
	dim, c := b.tally.dim, b.complex
	for _, n := range b.tally.n[:dim+1] {
		c.Cells = append(c.Cells, uint32(n))
		b.total += n
	}
	c.RowsAtMost2, c.ColsAtMost2 = make([]bool, dim+1), make([]bool, dim+1)
	b.others, b.list = make([]array[uint32], dim+1), make([][]uint32, dim+1)
	if err := b.vertices(); err != nil {
		return err
	}
	for k := 1; k <= dim; k++ {
		if err := b.degree(ctx, k); err != nil {
			return err
		}
	}
	path := filepath.Join(b.dir, "complex.json")
	if _, err := os.Lstat(path); !errors.Is(err, os.ErrNotExist) {
		return fmt.Errorf("%s: there is a complex already", b.dir)
	}
	b.made = append(b.made, path)
	return c.Write(b.dir)
}

// publish seals a file, unmaps it, and remembers it, to be removed should something
// fail later.
func (b *flagBuild) publish(path string, f gridFile) error {
	if err := f.Publish(false); err != nil {
		return err
	}
	b.made = append(b.made, path)
	return f.Close()
}

func (b *flagBuild) vertices() error {
	path := chain.CellsPath(b.dir, 0)
	cells, err := chain.CreateSimplices(path, b.flag.n, 0)
	if err != nil {
		return err
	}
	defer cells.Discard()
	for v := range cells.Vertices {
		cells.Vertices[v] = uint32(v)
	}
	return b.publish(path, cells)
}

// degree writes the table of degree k and ∂_k.
func (b *flagBuild) degree(ctx context.Context, k int) error {
	rows, cols := b.complex.Cells[k-1], b.complex.Cells[k]
	cells, err := chain.CreateSimplices(chain.CellsPath(b.dir, k), cols, k)
	if err != nil {
		return err
	}
	defer cells.Discard()
	m, err := block.Create(chain.BlockPath(b.dir, k), rows, cols, uint32(k+1), 0)
	if err != nil {
		return err
	}
	defer m.Discard()
	if k == 1 {
		copy(cells.Vertices, b.flag.ends)
		copy(cells.Values, b.flag.value)
		copy(m.Entries, b.flag.ends)
	} else if err := b.cliques(ctx, k, cells, m); err != nil {
		return err
	}
	b.progress.Advance(b.done.Add(uint64(cols)), b.total)
	b.complex.ColsAtMost2[k] = k == 1
	if b.complex.RowsAtMost2[k], err = thinRows(ctx, m); err != nil {
		return err
	}
	if err := b.publish(chain.CellsPath(b.dir, k), cells); err != nil {
		return err
	}
	return b.publish(chain.BlockPath(b.dir, k), m)
}

// thinRows says whether every row has at most two entries; it stops at the first that
// has three.
func thinRows(ctx context.Context, m *block.Matrix) (bool, error) {
	var own array[uint32]
	defer own.free()
	count := own.make(int(m.Rows))
	for i, r := range m.Entries {
		if count[r]++; count[r] > 2 {
			return false, nil
		}
		if i%(1<<20) == 0 && ctx.Err() != nil {
			return false, context.Cause(ctx)
		}
	}
	return true, nil
}

// cliques fills degree k ≥ 2.
func (b *flagBuild) cliques(ctx context.Context, k int, cells *chain.Cells, m *block.Matrix) error {
	if k < b.tally.dim {
		b.list[k] = b.others[k].make(len(cells.Values) * (k - 1))
	}
	err := share(ctx, b.flag.edges(), b.threads, func() func(lo, hi int) error {
		w := &cliqueWriter{k: k, flag: b.flag, low: b.tally.degree[k-1].at, below: b.list[k-1], verts: cells.Vertices, entries: m.Entries, others: b.list[k]}
		w.nest = nest{f: b.flag, top: k}
		at := b.tally.degree[k].at
		return func(lo, hi int) error {
			for e := lo; e < hi; e++ {
				if at[e] == at[e+1] {
					continue
				}
				w.edge, w.at = uint32(e), int(at[e])
				w.nest.walk(w.edge, w.visit)
				for r := at[e]; r < at[e+1]; r++ {
					cells.Values[r] = b.flag.value[e]
				}
			}
			return nil
		}
	})
	b.others[k-1].free()
	b.list[k-1] = nil
	return err
}

// cliqueWriter writes the k-simplices of one longest edge after the other.
type cliqueWriter struct {
	k       int
	nest    nest
	flag    *flag
	edge    uint32
	at      int      // rank of the edge's first k-simplex
	low     []uint32 // offsets of degree k−1 by longest edge
	below   []uint32 // others of degree k−1
	verts   []uint32
	entries []uint32
	others  []uint32 // nil at the top
	chosen  [verticesMost]uint32
	face    [verticesMost]uint32
}

func (w *cliqueWriter) visit(k int, l *level) bool {
	if k != w.k {
		return true
	}
	x := &w.nest
	chosen := w.chosen[:k-1] // vertices beside the edge, descending
	for q, i := range x.path {
		chosen[q] = x.w[i]
	}
	r := w.at + int(l.base)
	for p, i := range l.at {
		chosen[k-2] = x.w[i]
		w.simplex(w.verts[(r+p)*(k+1):(r+p+1)*(k+1)], chosen)
		if w.others != nil {
			copy(w.others[(r+p)*(k-1):], chosen)
		}
		w.column(w.entries[(r+p)*(k+1):(r+p+1)*(k+1)], l, p, chosen)
	}
	return true
}

// simplex merges the ends of the edge and the chosen vertices into ascending order.
func (w *cliqueWriter) simplex(to, chosen []uint32) {
	ends := w.flag.ends[2*w.edge : 2*w.edge+2]
	q, e := len(chosen)-1, 0
	for at := range to {
		if e == 2 || q >= 0 && chosen[q] < ends[e] {
			to[at] = chosen[q]
			q--
		} else {
			to[at] = ends[e]
			e++
		}
	}
}

// column writes the ranks of the facets of the p-th simplex of a level, ascending. The
// two without an end of the longest edge come first, as their longest edges are
// earlier; the others follow in the order of the vertices they lack, latest first; the
// one without the last vertex is the path.
func (w *cliqueWriter) column(to []uint32, l *level, p int, chosen []uint32) {
	x, k, i := &w.nest, w.k, l.at[p]
	toA, toB := max(l.toA, x.ra[i]), max(l.toB, x.rb[i])
	if k == 2 {
		to[0], to[1], to[2] = min(toA, toB), max(toA, toB), w.edge
		return
	}
	inner := max(l.inner, l.most[p])
	a, b := w.flag.ends[2*w.edge], w.flag.ends[2*w.edge+1]
	sideA, sideB := w.side(max(inner, toA), a, chosen), w.side(max(inner, toB), b, chosen)
	to[0], to[1] = min(sideA, sideB), max(sideA, sideB)
	if k == 3 {
		to[2] = w.low[w.edge] + i // the common neighbours are the triangles
	} else {
		for q := range k - 2 {
			face := append(w.face[:0], chosen[:q]...)
			to[2+q] = w.find(w.edge, append(face, chosen[q+1:]...))
		}
	}
	to[k] = w.low[w.edge] + uint32(l.parent)
}

// side is the rank of the facet of the chosen vertices and one end of the edge; the
// facet's longest edge is given.
func (w *cliqueWriter) side(longest, end uint32, chosen []uint32) uint32 {
	a, b := w.flag.ends[2*longest], w.flag.ends[2*longest+1]
	face, pending := w.face[:0], end != a && end != b
	for _, v := range chosen {
		if pending && end > v {
			face, pending = append(face, end), false
		}
		if v != a && v != b {
			face = append(face, v)
		}
	}
	if pending {
		face = append(face, end)
	}
	return w.find(longest, face)
}

// find is the rank of the (k−1)-simplex of a longest edge and other vertices,
// descending.
func (w *cliqueWriter) find(longest uint32, others []uint32) uint32 {
	lo, hi, width := w.low[longest], w.low[longest+1], len(others)
	for first := others[0]; lo < hi; {
		mid := (lo + hi) >> 1
		at := uint64(mid) * uint64(width)
		q, v := 0, w.below[at]
		for want := first; v == want && q+1 < width; {
			q++
			v, want = w.below[at+uint64(q)], others[q]
		}
		switch {
		case v < others[q]:
			lo = mid + 1
		case v > others[q]:
			hi = mid
		default:
			return mid
		}
	}
	panic(fmt.Sprintf("order: a facet of a flag complex is missing: longest edge %d, others %v", longest, others))
}
