package order

import (
	"context"
	"math"
	"strings"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/table"
)

// triangle is a symmetric matrix, its part below the diagonal row by row.
type triangle struct {
	n  int
	at []float64 // d(i, j) for j < i at i(i−1)/2 + j
}

func (t *triangle) d(i, j int) float64 {
	if i == j {
		return 0
	}
	if i < j {
		i, j = j, i
	}
	return t.at[i*(i-1)/2+j]
}

// Distances reads a matrix of distances (text: square, or lower triangular with or
// without its diagonal; .npy: square) and publishes the flag complex in dir, cut as
// Points does. It must be symmetric, zero on the diagonal, finite and not negative.
// Memory: 8 bytes a pair and the complex. Errors: *source.InputError naming line and
// column, *source.TooBig.
func Distances(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	p.Stage("read")
	t, err := readDistances(ctx, spec.Inputs[0], p)
	if err != nil {
		return nil, err
	}
	c := &chain.Complex{Kind: string(source.Distances), KeepZero: spec.KeepZeroPairs}
	scale, err := scaleOf(ctx, spec, c, t.n, threads, func(i int, most float64) (float64, error) {
		far := 0.0
		for j := range t.n {
			if far = max(far, t.d(i, j)); far > most {
				break
			}
		}
		return far, nil
	})
	if err != nil {
		return nil, err
	}
	var edges []edge
	for i := range t.n {
		for j := range i {
			if d := t.d(i, j); d <= scale {
				edges = append(edges, edge{uint32(j), uint32(i), d})
			}
		}
		if err := edgesFit(spec, len(edges)); err != nil {
			return nil, err
		}
	}
	return newFlag(spec.Inputs[0], uint32(t.n), edges).complex(ctx, spec, c, dir, threads, p)
}

func readDistances(ctx context.Context, path string, p source.Progress) (*triangle, error) {
	if strings.HasSuffix(path, ".npy") {
		r, err := readArrayRows(path)
		if err != nil {
			return nil, err
		}
		if r.n != r.d {
			return nil, source.Broken(path, 0, "shape %d × %d; a square matrix was expected", r.n, r.d)
		}
		return r.triangle()
	}
	return readTriangle(ctx, path, p)
}

// triangle checks a square array and keeps its lower half.
func (r *rows) triangle() (*triangle, error) {
	t := &triangle{n: r.n, at: make([]float64, 0, r.n*(r.n-1)/2)}
	for i := range r.n {
		for j, v := range r.row(i)[:i+1] {
			if why := wrong(i, j, v); why != "" {
				return nil, source.Broken(r.path, 0, "entry [%d, %d] is %v; %s", i, j, v, why)
			}
			if w := r.row(j)[i]; v != w {
				return nil, source.Broken(r.path, 0, "entry [%d, %d] is %v but [%d, %d] is %v; distances must be symmetric", i, j, v, j, i, w)
			}
			if j < i {
				t.at = append(t.at, source.Clean(v))
			}
		}
	}
	return t, nil
}

// wrong says what is wrong with a distance, "" for nothing.
func wrong(i, j int, v float64) string {
	switch {
	case math.IsNaN(v) || math.IsInf(v, 0):
		return "a finite distance was expected"
	case v < 0:
		return "a distance is not negative"
	case i == j && v != 0:
		return "the diagonal of a distance matrix is 0"
	}
	return ""
}

// readTriangle reads text: square, or lower triangular.
func readTriangle(ctx context.Context, path string, p source.Progress) (*triangle, error) {
	in, err := table.Open(path)
	if err != nil {
		return nil, err
	}
	defer in.Close()
	var flat []float64
	var lines []int // line of each row
	width := 0      // of a square matrix; 0: triangular
	for in.Next() {
		if ctx.Err() != nil {
			return nil, context.Cause(ctx)
		}
		p.Advance(in.BytesRead(), in.Size())
		n, i := len(in.Fields()), len(lines)
		if i == 0 && n > 1 {
			width = n
		}
		switch {
		case width > 0 && n != width:
			return nil, source.Broken(path, in.Line(), "%d numbers; %d were expected, as in the lines before", n, width)
		case width > 0 && i == width:
			return nil, source.Broken(path, in.Line(), "more lines than the %d numbers in each; a square matrix was expected", width)
		case width == 0 && n != i+1:
			return nil, source.Broken(path, in.Line(), "%d numbers; %d were expected in this line of a lower triangular matrix", n, i+1)
		}
		if flat, err = numbers(path, in, flat); err != nil {
			return nil, err
		}
		lines = append(lines, in.Line())
	}
	switch {
	case in.Err() != nil:
		return nil, in.Err()
	case len(lines) == 0:
		return nil, source.Broken(path, 0, "no data in it; a distance matrix was expected")
	case width > 0 && len(lines) != width:
		return nil, source.Broken(path, lines[len(lines)-1], "the matrix ends after %d lines of %d numbers; it must be square", len(lines), width)
	case width > 0:
		return square(path, flat, lines)
	}
	return lower(path, flat, lines)
}

// square checks a square matrix and keeps its lower half, in place.
func square(path string, flat []float64, lines []int) (*triangle, error) {
	n := len(lines)
	for i := range n {
		for j := range i + 1 {
			v := flat[i*n+j]
			if why := wrong(i, j, v); why != "" {
				return nil, source.Broken(path, lines[i], "column %d: %v; %s", j+1, v, why)
			}
			if w := flat[j*n+i]; v != w {
				return nil, source.Broken(path, lines[i], "column %d is %v but line %d, column %d is %v; distances must be symmetric", j+1, v, lines[j], i+1, w)
			}
		}
	}
	to := 0
	for i := range n {
		to += copy(flat[to:], flat[i*n:i*n+i])
	}
	return &triangle{n: n, at: flat[:to]}, nil
}

// lower takes a lower triangle: with its diagonal if every line ends in 0, without it else.
func lower(path string, flat []float64, lines []int) (*triangle, error) {
	diagonal := true
	for i := range lines {
		diagonal = diagonal && flat[i*(i+1)/2+i] == 0
	}
	t := &triangle{n: len(lines) + 1, at: flat}
	for i, line := range lines {
		for j, v := range flat[i*(i+1)/2 : i*(i+1)/2+i+1] {
			if why := wrong(i+1, j, v); why != "" {
				return nil, source.Broken(path, line, "column %d: %v; %s", j+1, v, why)
			}
		}
	}
	if !diagonal {
		return t, nil
	}
	to := 0
	for i := range lines {
		to += copy(flat[to:], flat[i*(i+1)/2:i*(i+1)/2+i])
	}
	return &triangle{n: len(lines), at: flat[:to]}, nil
}
