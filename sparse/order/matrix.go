package order

import (
	"context"
	"fmt"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/market"
)

// degreeMost bounds --first-degree: every degree below has an empty block.
const degreeMost = 1000

// Matrix reads a chain of Matrix Market files from spec, ∂_k for k = first,
// first+1, …, and publishes the chain complex in dir, which exists. The file of ∂_k
// has (k−1)-cells as rows and k-cells as columns, or the transpose with
// spec.FacesInCols. Entries are taken mod 2 and repeated ones add. The order of the
// cells is that of the columns. Values come from spec.ValueFiles, one array a degree
// from first−1 on, and must fit that order; without them all cells enter at 0. With spec.FirstDegree > 1 the degrees below first−1
// are empty and nothing is claimed for degree first−1. Errors: *source.InputError for
// a broken file, shapes that do not chain or values out of order; *source.UsageError;
// *source.TooBig. That ∂∂ = 0 is checked later (package evidence). Time: O(entries),
// by counting. Memory: 8 bytes an entry and a column of the matrix in work, beside the
// mapped blocks, where columns are written straight to their place.
func Matrix(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	first := max(spec.FirstDegree, 1)
	if why := senseless(spec, first); why != "" {
		return nil, &source.UsageError{Why: why}
	}
	shapes, err := shapesOf(spec)
	if err != nil {
		return nil, err
	}
	c := &chain.Complex{Kind: string(source.Matrix), Naming: chain.ByColumn, KeepZero: spec.KeepZeroPairs || len(spec.ValueFiles) == 0}
	m := &matrices{spec: spec, complex: c, first: first, dir: dir, files: spec.Inputs}
	m.plan(shapes)
	if err := m.fits(shapes); err != nil {
		return nil, err
	}
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

// senseless says which options of a matrix mean nothing together, or nothing.
func senseless(spec source.Spec, first int) string {
	switch files, values := len(spec.Inputs), len(spec.ValueFiles); {
	case files == 0:
		return "no matrix was given"
	case spec.FacesInCols && spec.FacesInRows:
		return "--faces-in-columns and --faces-in-rows exclude each other"
	case first > degreeMost:
		return fmt.Sprintf("--first-degree %d; at most %d was expected", first, degreeMost)
	case spec.Degrees >= 0 && first > 1 && spec.Degrees < first:
		return fmt.Sprintf("--degrees %d with --first-degree %d; nothing is claimed below degree %d", spec.Degrees, first, first)
	case values > 0 && values != files+1:
		return fmt.Sprintf("--values names %d files; %d matrices need %d, one for each degree", values, files, files+1)
	}
	return ""
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
	case turned < 0 && spec.FacesInCols:
		return nil, source.Broken(spec.Inputs[straight], 0, "its transpose does not chain with that of %s, but the matrices as they are do: leave out --faces-in-columns", spec.Inputs[straight-1])
	case turned < 0 && !spec.FacesInRows:
		return nil, source.Broken(spec.Inputs[straight], 0, "its rows do not match the columns of %s, but the transposes chain: use --faces-in-columns", spec.Inputs[straight-1])
	default:
		return nil, source.Broken(spec.Inputs[straight], 0, "it has %d rows (faces) but the matrix before it, %s, has %d columns; give ∂_k and ∂_(k+1) in order", out[straight].rows, spec.Inputs[straight-1], out[straight-1].cols)
	}
	return out, nil
}

// fits checks the budget: the mapped blocks, and the largest matrix while it is read.
func (m *matrices) fits(shapes []shape) error {
	blocks, work := uint64(0), uint64(0)
	for i, s := range shapes {
		if m.first+i < len(m.complex.Cells) {
			blocks += 4*s.entries + 8*uint64(s.cols)
			work = max(work, 8*s.entries+8*uint64(s.cols)+4*uint64(s.rows))
		}
	}
	if allowed := m.spec.MemoryBytes; allowed > 0 && blocks+work > allowed {
		return &source.TooBig{Why: fmt.Sprintf("the matrices need about %d MiB and --memory allows %d MiB", (blocks+work)>>20, allowed>>20)}
	}
	return nil
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
