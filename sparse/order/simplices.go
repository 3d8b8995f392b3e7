package order

import (
	"context"
	"fmt"
	"math"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// Simplices reads lines value,v0,v1,… from the one input of spec and publishes the
// filtered complex in dir, which exists. Order within a degree: (value, vertices
// ascending). Vertices are any numbers below 2^32−1, at most 64 a simplex; simplices
// above degree K+1 are left out and counted. Errors: *source.InputError for a broken
// file, a missing face (unless spec.Close, which adds it at the least value of its
// cofaces), a duplicate, a face above its coface; *source.TooBig over budget.
//
// Time: O(entries · log of a vertex's simplices); sorting is by radix. Memory: about
// 8(k+1) + 40 bytes a k-simplex, pages of the written files included.
func Simplices(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	p.Stage("read")
	r := &simplexReader{spec: spec, lists: true, widest: verticesMost}
	if spec.Degrees >= 0 && !spec.Close {
		r.widest = min(spec.Degrees+2, verticesMost)
	}
	if err := r.run(ctx, threads, p); err != nil {
		return nil, err
	}
	s := newSimplicial(spec, source.Simplices, r)
	defer s.free()
	if err := s.prepare(ctx, spec, r, threads); err != nil {
		return nil, err
	}
	if err := s.build(ctx, dir, threads, p); err != nil {
		return nil, err
	}
	return s.complex, nil
}

// newSimplicial takes over the tables that were read.
func newSimplicial(spec source.Spec, kind source.Kind, r *simplexReader) *simplicial {
	c := &chain.Complex{Kind: string(kind), Naming: chain.BySimplex, KeepZero: spec.KeepZeroPairs, Degrees: r.dim}
	if spec.Degrees >= 0 && spec.Degrees < r.dim {
		c.Degrees, c.Truncated = spec.Degrees, true
	}
	s := &simplicial{path: spec.Inputs[0], tables: r.tables, complex: c}
	for k := len(s.tables); k <= s.top(); k++ {
		s.tables = append(s.tables, &degreeTable{k: k})
	}
	return s
}

// top is the highest degree that is published.
func (s *simplicial) top() int {
	if s.complex.Truncated {
		return s.complex.Degrees + 1
	}
	return s.complex.Degrees
}

func (s *simplicial) note(count uint64, format string, args ...any) {
	if count > 0 {
		s.complex.Notes = append(s.complex.Notes, chain.Note{What: fmt.Sprintf(format, args...), Count: count})
	}
}

// prepare numbers the vertices, sorts every degree and closes or refuses what is open.
func (s *simplicial) prepare(ctx context.Context, spec source.Spec, r *simplexReader, threads int) error {
	top := s.top()
	if spec.Close {
		if err := closureFits(spec, s.tables, top); err != nil {
			return err
		}
	} else if err := s.fits(spec, top); err != nil {
		return err
	}
	s.labels = labelsOf(s.tables)
	densify(s.tables, s.labels)
	if spec.Close {
		done, err := s.close(ctx, spec, func(d *degreeTable, first uint32, given, _ int) error {
			if given > 1 {
				return s.duplicate(d.simplex(int(first)))
			}
			return nil
		})
		s.note(done.added, "missing faces added")
		s.note(done.left, "simplices above degree %d left out", top)
		return err
	}
	s.note(r.left, "simplices above degree %d left out", top)
	return parallel(len(s.tables), threads, func(k int) error {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		d := s.tables[k]
		return sortTable(d, len(s.labels), d.len(), func(first uint32, _, _ int) error { return s.duplicate(d.simplex(int(first))) })
	})
}

// fits refuses what is over budget, and simplices that have no faces at all where the
// complex is cut: those above are not kept, so their faces are not looked for.
func (s *simplicial) fits(spec source.Spec, top int) error {
	if s.tables[top].len() == 0 {
		return source.Broken(s.path, 0, "no simplex of degree %d, which those of higher degree have as faces; add them, or let --close add missing faces", top)
	}
	return budget(spec, s.tables)
}

// bytesListed estimates the memory for a simplex of degree k of a list: vertices,
// value, rank; then sorting items and either a sorted copy or written pages.
func bytesListed(k int) uint64 { return uint64(8*(k+1) + 40) }

func budget(spec source.Spec, tables []*degreeTable) error {
	need, counts := uint64(0), make([]int, len(tables))
	for k, d := range tables {
		counts[k] = d.len()
		need += uint64(d.len()) * bytesListed(d.k)
		if uint64(d.len()) >= math.MaxUint32 {
			return &source.TooBig{Why: fmt.Sprintf("%s: %d simplices of degree %d; at most 2^32-2 fit", spec.Inputs[0], d.len(), d.k)}
		}
	}
	if spec.MemoryBytes > 0 && need > spec.MemoryBytes {
		return &source.TooBig{Why: fmt.Sprintf("%s: %v simplices by degree need about %d MiB and --memory allows %d MiB; lower --degrees or raise --memory",
			spec.Inputs[0], counts, need>>20, spec.MemoryBytes>>20)}
	}
	return nil
}
