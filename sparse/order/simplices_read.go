package order

import (
	"context"
	"fmt"
	"math"
	"sync/atomic"

	"pairloom/sparse/source"
	"pairloom/sparse/source/table"
)

const (
	verticesMost = 64 // largest simplex that is read
	facetsMost   = 25 // largest facet that is closed in all degrees
)

// simplexReader reads lines of vertices, with a value first (lists) or without
// (facets), into one table a degree.
type simplexReader struct {
	spec   source.Spec
	lists  bool
	widest int // simplices of more vertices are counted, not kept
	tables []*degreeTable
	left   uint64 // simplices not kept
	dim    int    // highest degree seen
	parts  []*simplexPart
	read   atomic.Uint64
	size   uint64
	held   atomic.Uint64 // bytes of the tables
}

// simplexPart is what one goroutine reads.
type simplexPart struct {
	*simplexReader
	in     *table.Reader
	tables []*degreeTable
	n      int    // lines read
	left   uint64 // simplices not kept
	dim    int
	vertex [verticesMost]uint32
	first  float64 // value of the first line
	varied bool    // values differ
	whole  bool    // all values are whole and below the first vertex
}

// run reads the file in parts, one a thread; what it finds does not depend on their
// number.
func (r *simplexReader) run(ctx context.Context, threads int, p source.Progress) error {
	inputs, err := table.OpenParts(r.spec.Inputs[0], threads)
	if err != nil {
		return err
	}
	for _, in := range inputs {
		defer in.Close()
		r.size += in.Size()
		r.parts = append(r.parts, &simplexPart{simplexReader: r, in: in, whole: true, dim: -1})
	}
	err = parallel(len(r.parts), threads, func(i int) error { return r.parts[i].run(ctx, p) })
	if err == nil {
		err = r.judge()
	}
	if err != nil {
		for _, part := range r.parts {
			part.free()
		}
		return err
	}
	r.join()
	return nil
}

func (r *simplexPart) free() {
	for _, d := range r.tables {
		d.free()
	}
}

func (r *simplexPart) run(ctx context.Context, p source.Progress) error {
	last := uint64(0)
	for r.in.Next() {
		if r.n++; r.n%(1<<15) == 0 {
			p.Advance(r.read.Add(r.in.BytesRead()-last), r.size)
			last = r.in.BytesRead()
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
			if err := r.fits(); err != nil {
				return err
			}
		}
		if err := r.line(r.in.Fields()); err != nil {
			return err
		}
	}
	p.Advance(r.read.Add(r.in.BytesRead()-last), r.size)
	return r.in.Err()
}

// fits compares what was read so far with the budget.
func (r *simplexPart) fits() error {
	held := r.held.Load() // of this and the other parts, as of their last call
	if r.spec.MemoryBytes > 0 && held > r.spec.MemoryBytes {
		return &source.TooBig{Why: fmt.Sprintf("%s: the simplices read so far take %d MiB and --memory allows %d MiB; lower --degrees or raise --memory", r.spec.Inputs[0], held>>20, r.spec.MemoryBytes>>20)}
	}
	return nil
}

// judge looks at all lines together.
func (r *simplexReader) judge() error {
	n, varied, whole := 0, false, true
	for _, part := range r.parts {
		n += part.n
		whole = whole && part.whole
		varied = varied || part.varied || part.n > 0 && part.first != r.parts[0].first
		r.dim, r.left = max(r.dim, part.dim), r.left+part.left
	}
	switch {
	case n == 0:
		return source.Broken(r.spec.Inputs[0], 0, "no simplex in it; one a line was expected")
	case r.lists && varied && whole && !r.spec.ValueFirst:
		return source.Broken(r.spec.Inputs[0], 0, "these look like vertex lists; use --as facets, or --value-first to insist")
	}
	return nil
}

// join appends the tables of the parts, one degree after the other.
func (r *simplexReader) join() {
	r.tables = r.parts[0].tables
	for _, part := range r.parts[1:] {
		for k, d := range part.tables {
			if k == len(r.tables) {
				r.tables = append(r.tables, &degreeTable{k: k})
			}
			to := r.tables[k]
			to.room(d.len(), r.lists)
			to.verts = append(to.verts, d.verts...)
			to.values = append(to.values, d.values...)
			d.free()
		}
	}
}

func (r *simplexPart) broken(format string, args ...any) error {
	return source.Broken(r.spec.Inputs[0], r.in.Line(), format, args...)
}

// line takes one simplex.
func (r *simplexPart) line(f [][]byte) error {
	value := 0.0
	if r.lists {
		v, ok := table.ParseFloat(f[0])
		switch {
		case !ok || math.IsNaN(v) || math.IsInf(v, 0):
			return r.broken("value %q; a finite number was expected first, then the vertices", f[0])
		case len(f) < 2:
			return r.broken("a value without vertices; value,v0,v1,… was expected (lists of vertices alone: --as facets)")
		}
		value, f = source.Clean(v), f[1:]
	}
	if err := r.lengthFits(len(f)); err != nil {
		return err
	}
	s := r.vertex[:len(f)]
	for i, b := range f {
		v, ok := table.ParseUint32(b)
		if !ok {
			return r.broken("vertex %q; a whole number from 0 to 4294967294 was expected", b)
		}
		s[i] = v
	}
	if r.lists {
		r.look(value, s[0])
	}
	sortSmall(s)
	for i := 1; i < len(s); i++ {
		if s[i-1] == s[i] {
			return r.broken("vertex %d is repeated; the vertices of a simplex differ", s[i])
		}
	}
	r.keep(s, value)
	return nil
}

func (r *simplexPart) lengthFits(n int) error {
	switch {
	case n > verticesMost:
		return r.broken("%d vertices; at most %d make a simplex", n, verticesMost)
	case n > facetsMost && r.closing() && r.spec.Degrees < 0:
		return r.broken("%d vertices; all faces are made of simplices of up to %d, larger ones need --degrees", n, facetsMost)
	}
	return nil
}

// closing says whether faces are added.
func (r *simplexReader) closing() bool { return !r.lists || r.spec.Close }

// look gathers whether the values could be vertices.
func (r *simplexPart) look(value float64, next uint32) {
	if r.n == 1 {
		r.first = value
	}
	r.varied = r.varied || value != r.first
	r.whole = r.whole && value == math.Trunc(value) && value >= 0 && value < float64(next)
}

func (r *simplexPart) keep(s []uint32, value float64) {
	r.dim = max(r.dim, len(s)-1)
	if len(s) > r.widest {
		r.left++
		return
	}
	for len(r.tables) < len(s) {
		r.tables = append(r.tables, &degreeTable{k: len(r.tables)})
	}
	d := r.tables[len(s)-1]
	if len(d.verts)+len(s) > cap(d.verts) {
		r.held.Add(uint64(max(d.len(), 1<<10)) * uint64(4*len(s)+8))
	}
	d.add(s, value, r.lists)
}
