package order

import (
	"context"
	"io"
	"math"
	"slices"
	"strings"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/npy"
	"pairloom/sparse/source/table"
)

// Facets reads one simplex a line (vertices only) from the one input of spec, closes
// it, and publishes the filtered complex in dir, which exists. Every value is 0, or,
// with spec.Function (a file of one value a vertex), a simplex enters with its latest
// vertex (lower star), vertices ordered by (value, number). Only faces up to degree
// K+1 are made. Errors: *source.InputError, *source.TooBig (counted before work).
// Time and memory: as Simplices, for the faces with repetitions.
func Facets(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	p.Stage("read")
	r := &simplexReader{spec: spec, widest: verticesMost}
	if err := r.run(ctx, threads, p); err != nil {
		return nil, err
	}
	s := newSimplicial(spec, source.Facets, r)
	defer s.free()
	if err := s.closeFacets(ctx, spec); err != nil {
		return nil, err
	}
	if err := s.build(ctx, dir, threads, p); err != nil {
		return nil, err
	}
	return s.complex, nil
}

// closeFacets numbers the vertices and makes all faces.
func (s *simplicial) closeFacets(ctx context.Context, spec source.Spec) error {
	top := s.top()
	if err := closureFits(spec, s.tables, top); err != nil {
		return err
	}
	s.labels = labelsOf(s.tables)
	var rank []uint32
	if spec.Function != "" {
		var err error
		if rank, err = s.lowerStar(spec.Function); err != nil {
			return err
		}
	}
	densify(s.tables, s.labels)
	if rank != nil {
		s.rankVertices(rank)
	}
	merged := uint64(0)
	done, err := s.close(ctx, spec, func(_ *degreeTable, _ uint32, given, added int) error {
		if added == 0 {
			given--
		}
		merged += uint64(given)
		return nil
	})
	s.note(merged, "lines that repeat a simplex or a face of one, merged")
	s.note(done.left, "simplices above degree %d left out, their faces kept", top)
	return err
}

// lowerStar reads the function and returns the rank of each vertex by (value, number).
func (s *simplicial) lowerStar(path string) ([]uint32, error) {
	values, err := readFunction(path)
	if err != nil {
		return nil, err
	}
	last := s.labels[len(s.labels)-1]
	if uint64(len(values)) != uint64(last)+1 {
		return nil, source.Broken(path, 0, "%d values; one for each vertex 0..%d of %s was expected", len(values), last, s.path)
	}
	items := make([]Item, len(s.labels))
	for v, label := range s.labels {
		items[v] = Item{source.SortKey(values[label]), uint32(v)}
	}
	s.complex.Naming = chain.ByVertex
	s.centres = make([]float64, len(items))
	rank := make([]uint32, len(items))
	for r, it := range Sort(items) {
		s.centres[r] = values[s.labels[it.Index]]
		rank[it.Index] = uint32(r)
	}
	return rank, nil
}

// rankVertices makes ranks of the dense numbers; each simplex then has its latest
// vertex first, so that the lexicographic order is the order of the lower star.
func (s *simplicial) rankVertices(rank []uint32) {
	for _, d := range s.tables {
		for i := range d.len() {
			simplex := d.simplex(i)
			for q, v := range simplex {
				simplex[q] = rank[v]
			}
			sortSmall(simplex)
			slices.Reverse(simplex)
		}
	}
	labels := make([]uint32, len(rank))
	for v, r := range rank {
		labels[r] = s.labels[v]
	}
	s.labels = labels
}

// readFunction reads one finite value a vertex, from .npy (one axis) or text (one a line).
func readFunction(path string) ([]float64, error) {
	if strings.HasSuffix(path, ".npy") {
		return readArray(path)
	}
	in, err := table.Open(path)
	if err != nil {
		return nil, err
	}
	defer in.Close()
	var values []float64
	for in.Next() {
		v, ok := table.ParseFloat(in.Fields()[0])
		if !ok || math.IsNaN(v) || math.IsInf(v, 0) || len(in.Fields()) != 1 {
			return nil, source.Broken(path, in.Line(), "one finite value was expected, for vertex %d", len(values))
		}
		values = append(values, source.Clean(v))
	}
	return values, in.Err()
}

// readArray reads a one-dimensional array of finite values.
func readArray(path string) ([]float64, error) {
	r, err := npy.Open(path)
	if err != nil {
		return nil, err
	}
	defer r.Close()
	if len(r.Header().Shape) != 1 {
		return nil, source.Broken(path, 0, "%d axes; one value after the other, on one axis, was expected", len(r.Header().Shape))
	}
	values := make([]float64, r.Len())
	for at := 0; at < len(values); {
		n, err := r.Read(values[at:])
		at += n
		if err != nil && (err != io.EOF || at < len(values)) {
			return nil, err
		}
	}
	for i, v := range values {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return nil, source.Broken(path, 0, "value %d is %v; finite values were expected", i, v)
		}
	}
	return values, nil
}
