package order

import (
	"context"
	"fmt"
	"io"
	"math"
	"math/big"
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
	r := &simplexReader{spec: spec}
	if err := r.read(ctx, p); err != nil {
		return nil, err
	}
	s := &simplicial{path: spec.Inputs[0], tables: r.tables, complex: &chain.Complex{Kind: string(source.Facets), Naming: chain.BySimplex, KeepZero: spec.KeepZeroPairs}}
	for _, d := range s.tables {
		d.lines = nil
	}
	top := len(s.tables) - 1
	if spec.Degrees >= 0 {
		top = min(top, spec.Degrees+1)
	}
	if err := closureFits(spec, s.tables, top); err != nil {
		return nil, err
	}
	s.labels = labelsOf(s.tables)
	densify(s.tables, s.labels)
	if err := s.closeFacets(ctx, top); err != nil {
		return nil, err
	}
	s.complex.Degrees = len(s.tables) - 1
	s.cutAbove(spec)
	if err := budget(spec, s.tables); err != nil {
		return nil, err
	}
	if spec.Function != "" {
		if err := s.lowerStar(spec.Function); err != nil {
			return nil, err
		}
	}
	return s.complex, s.build(ctx, dir, threads, p)
}

// closureFits bounds the faces, with repetitions, before any is made.
func closureFits(spec source.Spec, tables []*degreeTable, top int) error {
	faces, need := new(big.Int), new(big.Int)
	for _, d := range tables {
		for k := 0; k <= min(d.k, top); k++ {
			n := new(big.Int).Binomial(int64(d.k+1), int64(k+1))
			n.Mul(n, big.NewInt(int64(d.len())))
			faces.Add(faces, n)
			need.Add(need, n.Mul(n, big.NewInt(int64(4*(k+1)))))
		}
	}
	limit := new(big.Int).SetUint64(math.MaxUint32)
	if spec.MemoryBytes > 0 && need.Cmp(new(big.Int).SetUint64(spec.MemoryBytes)) > 0 || spec.MemoryBytes == 0 && faces.Cmp(limit) >= 0 {
		return &source.TooBig{Why: fmt.Sprintf("%s: its facets have %d faces up to degree %d, counted with repetition, about %d MiB; --memory allows %d MiB; lower --degrees or raise --memory",
			spec.Inputs[0], faces, top, new(big.Int).Rsh(need, 20), spec.MemoryBytes>>20)}
	}
	return nil
}

// closeFacets makes all faces up to degree top, each once, every degree sorted.
func (s *simplicial) closeFacets(ctx context.Context, top int) error {
	for len(s.tables)-1 > top {
		last := s.tables[len(s.tables)-1]
		s.tables = s.tables[:len(s.tables)-1]
		last.facesOf(s.tables[top])
		s.complex.Truncated = true
	}
	for k := len(s.tables) - 1; k >= 0; k-- {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		d := s.tables[k]
		sortTable(d, len(s.labels))
		d.merge()
		if k > 0 {
			d.facetsOf(s.tables[k-1])
		}
	}
	return nil
}

// facesOf appends all faces of degree to.k of d's simplices.
func (d *degreeTable) facesOf(to *degreeTable) {
	n, m := d.k+1, to.k+1
	pick := make([]int, m)
	for i := range d.len() {
		s := d.simplex(i)
		for q := range pick {
			pick[q] = q
		}
		for {
			for _, q := range pick {
				to.verts = append(to.verts, s[q])
			}
			q := m - 1
			for q >= 0 && pick[q] == n-m+q {
				q--
			}
			if q < 0 {
				break
			}
			pick[q]++
			for q++; q < m; q++ {
				pick[q] = pick[q-1] + 1
			}
		}
	}
}

// lowerStar reads the function and orders the vertices by it.
func (s *simplicial) lowerStar(path string) error {
	values, err := readFunction(path)
	if err != nil {
		return err
	}
	last := s.labels[len(s.labels)-1]
	if uint64(len(values)) != uint64(last)+1 {
		return source.Broken(path, 0, "%d values; one for each vertex 0..%d of %s was expected", len(values), last, s.path)
	}
	items := make([]Item, len(s.labels))
	s.tables[0].values = make([]float64, len(s.labels))
	for v, label := range s.labels {
		s.tables[0].values[v] = values[label]
		items[v] = Item{source.SortKey(values[label]), uint32(v)}
	}
	s.centre = make([]uint32, len(items))
	for r, it := range Sort(items) {
		s.centre[it.Index] = uint32(r)
	}
	s.complex.Naming = chain.ByVertex
	return nil
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
