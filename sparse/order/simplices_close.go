package order

import (
	"context"
	"fmt"
	"math"

	"pairloom/sparse/source"
)

// closure counts what closing did.
type closure struct {
	added uint64 // faces that were not given
	left  uint64 // given simplices above the cut
}

// close makes all faces up to the top degree, each once, and sorts every degree. From
// above, each degree is sorted, its repetitions merged, and its facets appended to the
// degree below; simplices above the top give their faces of the top degree at once. An
// added face has the least value of its cofaces. repeated is told each group of equal
// simplices (see sortTable). The size of every step is checked before it is taken.
func (s *simplicial) close(ctx context.Context, spec source.Spec, repeated func(d *degreeTable, first uint32, given, added int) error) (c closure, err error) {
	top := s.top()
	lines := make([]int, len(s.tables))
	for k, d := range s.tables {
		lines[k] = d.len()
	}
	for k := len(s.tables) - 1; k >= 0; k-- {
		if ctx.Err() != nil {
			return c, context.Cause(ctx)
		}
		d, distinct := s.tables[k], lines[k]
		err := sortTable(d, len(s.labels), lines[k], func(first uint32, given, added int) error {
			distinct -= max(given-1, 0)
			return repeated(d, first, given, added)
		})
		if err == nil && k > 0 {
			err = s.stepFits(spec, d, min(k-1, top))
		}
		switch {
		case err != nil:
			return c, err
		case k > top:
			d.facesOf(s.tables[top])
			c.left += uint64(lines[k])
			d.free()
			s.tables = s.tables[:k]
		default:
			c.added += uint64(d.len() - distinct)
			if k > 0 {
				d.facesOf(s.tables[k-1])
			}
		}
	}
	return c, budget(spec, s.tables)
}

// stepFits compares the faces of degree k that d is about to add, and their sorting,
// with the budget.
func (s *simplicial) stepFits(spec source.Spec, d *degreeTable, k int) error {
	faces := float64(s.tables[k].len()) + float64(d.len())*binomial(d.k+1, k+1)
	bytes := faces * float64(8*(k+1)+16)
	if d.values != nil {
		bytes += faces * 16
	}
	for _, t := range s.tables[d.k:] {
		bytes += float64(t.len()) * float64(4*(t.k+1)+8)
	}
	return tooManyFaces(spec, k, faces, bytes)
}

// closureFits refuses a closure of which one simplex's own faces are too many.
func closureFits(spec source.Spec, tables []*degreeTable, top int) error {
	dim := len(tables) - 1
	faces, bytes := 0.0, 0.0
	for k := range top + 1 {
		n := binomial(dim+1, k+1)
		faces, bytes = max(faces, n), bytes+n*float64(bytesListed(k))
	}
	return tooManyFaces(spec, top, faces, bytes)
}

func tooManyFaces(spec source.Spec, k int, faces, bytes float64) error {
	if faces < math.MaxUint32 && (spec.MemoryBytes == 0 || bytes <= float64(spec.MemoryBytes)) {
		return nil
	}
	return &source.TooBig{Why: fmt.Sprintf("%s: closing makes %.0f faces of degree %d, repetitions included, which take about %.0f MiB; --memory allows %d MiB, and 2^32-2 faces fit at most; lower --degrees or raise --memory",
		spec.Inputs[0], faces, k, bytes/(1<<20), spec.MemoryBytes>>20)}
}

// binomial is n over k, in floating point: exact where it matters, large where it is large.
func binomial(n, k int) float64 {
	b := 1.0
	for i := 1; i <= k; i++ {
		b = b * float64(n-k+i) / float64(i)
	}
	return b
}
