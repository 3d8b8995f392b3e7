package order

import (
	"context"
	"fmt"
	"math"
	"slices"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/table"
)

// verticesMost is the largest simplex that is read.
const verticesMost = 64

// Simplices reads lines value,v0,v1,… from the one input of spec and publishes the
// filtered complex in dir, which exists. Order within a degree: (value, vertices
// ascending). Errors: *source.InputError for a broken file, a missing face (unless
// spec.Close), a duplicate, a face above its coface; *source.TooBig over budget.
// Time: O(entries · log) and sorting by radix; memory about 60 bytes a simplex.
func Simplices(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	p.Stage("read")
	r := &simplexReader{spec: spec, lists: true}
	if err := r.read(ctx, p); err != nil {
		return nil, err
	}
	s := &simplicial{path: spec.Inputs[0], complex: &chain.Complex{Kind: string(source.Simplices), Naming: chain.BySimplex, KeepZero: spec.KeepZeroPairs}}
	s.tables = r.tables
	if !spec.Close { // closing needs the simplices above the cut
		s.cutAbove(spec)
	}
	if err := budget(spec, s.tables); err != nil {
		return nil, err
	}
	s.labels = labelsOf(s.tables)
	densify(s.tables, s.labels)
	if err := s.sortAll(spec, threads); err != nil {
		return nil, err
	}
	if spec.Close {
		s.cutAbove(spec)
	}
	return s.complex, s.build(ctx, dir, threads, p)
}

// cutAbove drops simplices above degree K+1.
func (s *simplicial) cutAbove(spec source.Spec) {
	dim, c := len(s.tables)-1, s.complex
	c.Degrees = dim
	if spec.Degrees >= 0 && spec.Degrees < dim {
		c.Degrees, c.Truncated = spec.Degrees, true
		left := uint64(0)
		for k := spec.Degrees + 2; k <= dim; k++ {
			left += uint64(s.tables[k].len())
		}
		s.tables = s.tables[:spec.Degrees+2]
		if left > 0 {
			c.Notes = append(c.Notes, chain.Note{What: fmt.Sprintf("simplices above degree %d left out", spec.Degrees+1), Count: left})
		}
	}
}

// bytesSimplex estimates the memory for a simplex of degree k, mapped pages included.
func bytesSimplex(k int) uint64 { return uint64(12*(k+1) + 56) }

func budget(spec source.Spec, tables []*degreeTable) error {
	need := uint64(0)
	for _, d := range tables {
		need += uint64(d.len()) * bytesSimplex(d.k)
		if uint64(d.len()) >= math.MaxUint32 {
			return &source.TooBig{Why: fmt.Sprintf("%d simplices of degree %d; at most 2^32-2 fit", d.len(), d.k)}
		}
	}
	if spec.MemoryBytes > 0 && need > spec.MemoryBytes {
		return &source.TooBig{Why: fmt.Sprintf("%s: about %d MiB are needed and --memory allows %d MiB; lower --degrees or raise --memory", spec.Inputs[0], need>>20, spec.MemoryBytes>>20)}
	}
	return nil
}

// sortAll sorts every degree, closes the complex if asked, and looks for duplicates.
func (s *simplicial) sortAll(spec source.Spec, threads int) error {
	n := len(s.tables)
	if !spec.Close {
		return parallel(n, threads, func(k int) error {
			sortTable(s.tables[k], len(s.labels))
			return s.duplicate(s.tables[k])
		})
	}
	added := uint64(0)
	for k := n - 1; k >= 0; k-- {
		d := s.tables[k]
		sortTable(d, len(s.labels))
		if err := s.duplicateGiven(d); err != nil {
			return err
		}
		before := d.len()
		added += uint64(before) - d.merge() - s.given(d)
		if k > 0 {
			if s.tables[k-1].lines == nil {
				s.tables[k-1].lines = []uint32{}
			}
			d.facetsOf(s.tables[k-1])
		}
	}
	if added > 0 {
		s.complex.Notes = append(s.complex.Notes, chain.Note{What: "missing faces added", Count: added})
	}
	return nil
}

// given counts the simplices that have a line.
func (s *simplicial) given(d *degreeTable) (n uint64) {
	for _, l := range d.lines {
		if l > 0 {
			n++
		}
	}
	return n
}

// duplicateGiven looks for simplices given twice among equal neighbours.
func (s *simplicial) duplicateGiven(d *degreeTable) error {
	last := -1
	for i := range d.len() {
		if d.lines[i] == 0 {
			continue
		}
		if last >= 0 && slices.Equal(d.simplex(last), d.simplex(i)) {
			return source.Broken(s.path, max(d.line(last), d.line(i)), "simplex %s stands in line %d already; each simplex is given once", s.name(d.simplex(i)), min(d.line(last), d.line(i)))
		}
		last = i
	}
	return nil
}

// simplexReader reads lines of vertices, with a value first (lists) or without (facets).
type simplexReader struct {
	spec   source.Spec
	lists  bool
	tables []*degreeTable
	in     *table.Reader
	vertex [verticesMost]uint32
	first  float64 // value of the first line
	varied bool    // values differ
	whole  bool    // all values are whole and below the first vertex
}

func (r *simplexReader) read(ctx context.Context, p source.Progress) error {
	in, err := table.Open(r.spec.Inputs[0])
	if err != nil {
		return err
	}
	defer in.Close()
	r.in, r.whole = in, true
	n := 0
	for in.Next() {
		if n++; n%(1<<15) == 0 {
			p.Advance(in.BytesRead(), in.Size())
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
		}
		if err := r.line(in.Fields(), n == 1); err != nil {
			return err
		}
	}
	p.Advance(in.BytesRead(), in.Size())
	switch {
	case in.Err() != nil:
		return in.Err()
	case n == 0:
		return source.Broken(r.spec.Inputs[0], 0, "no simplex in it; one a line was expected")
	case r.lists && r.varied && r.whole && !r.spec.ValueFirst:
		return source.Broken(r.spec.Inputs[0], 0, "these look like vertex lists; use --as facets, or --value-first to insist")
	}
	return nil
}

func (r *simplexReader) broken(format string, args ...any) error {
	return source.Broken(r.spec.Inputs[0], r.in.Line(), format, args...)
}

// line takes one simplex.
func (r *simplexReader) line(f [][]byte, first bool) error {
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
	if len(f) > verticesMost {
		return r.broken("%d vertices; at most %d make a simplex", len(f), verticesMost)
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
		r.look(value, s[0], first)
	}
	sortSmall(s)
	for i := 1; i < len(s); i++ {
		if s[i-1] == s[i] {
			return r.broken("vertex %d is repeated; the vertices of a simplex differ", s[i])
		}
	}
	return r.add(value, s)
}

// look gathers whether the values could be vertices.
func (r *simplexReader) look(value float64, next uint32, first bool) {
	if first {
		r.first = value
	}
	r.varied = r.varied || value != r.first
	r.whole = r.whole && value == math.Trunc(value) && value >= 0 && value < float64(next)
}

func (r *simplexReader) add(value float64, s []uint32) error {
	for len(r.tables) < len(s) {
		r.tables = append(r.tables, &degreeTable{k: len(r.tables)})
	}
	d := r.tables[len(s)-1]
	d.verts = append(d.verts, s...)
	if r.lists {
		d.values = append(d.values, value)
	}
	d.lines = append(d.lines, uint32(r.in.Line()))
	return nil
}
