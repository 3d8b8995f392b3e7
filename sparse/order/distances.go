package order

import (
	"context"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/npy"
	"pairloom/sparse/source/table"
)

// Distances reads a matrix of distances and publishes its flag complex in dir, cut,
// numbered and ordered as Points does. Text: square, or a lower triangle, row i with
// the i distances to the points before it, or with a 0 for itself after them. (A
// triangle that starts with one number is read with its diagonal if every line ends in
// 0, else without: N lines are N + 1 points then, which a note says.) .npy: square. The
// matrix must be symmetric, 0 on the diagonal, finite, not negative; the triangle
// inequality is not asked for.
//
// Errors: as Points; *source.InputError names line and column, or the entry of an
// array. Time: O(N²) and what the complex takes. Memory: 4 N² bytes, given back before
// the complex is built.
func Distances(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	path, err := oneInput(spec)
	if err != nil {
		return nil, err
	}
	p.Stage("read")
	t := &triangle{path: path, budget: spec.MemoryBytes}
	defer t.free()
	read := t.text
	if strings.HasSuffix(path, ".npy") {
		read = t.array
	}
	if err := read(ctx, p); err != nil {
		return nil, err
	}
	c := &chain.Complex{Kind: string(source.Distances)}
	if !t.square && !t.diagonal {
		c.Notes = append(c.Notes, chain.Note{What: "read as a lower triangle without its diagonal; points", Count: uint64(t.n)})
	}
	e := &edgeSearch{path: path, spec: spec, complex: c, metric: t, held: 8 * uint64(len(t.at)), threads: threads, progress: p}
	f, err := e.run(ctx)
	if err != nil {
		return nil, err
	}
	t.free()
	return f.complex(ctx, spec, c, dir, threads, p)
}

// triangle holds each distance once: above the diagonal, row by row, where a square was
// read; below it, as it stands in the file, else.
type triangle struct {
	path     string
	budget   uint64
	n        int
	square   bool
	diagonal bool // of a lower triangle: rows end with the 0 of the point itself
	at       []float64
	own      array[float64]
	lines    []int // of each row; nil: the file is an array
	turned   bool  // of an array: columns come first
}

func (t *triangle) free() {
	t.at = nil
	t.own.free()
}

// row is where the distances from u to the points after it (of a square), or before it
// (of a lower triangle), begin.
func (t *triangle) row(u int) int {
	switch {
	case t.square:
		return u*t.n - u*(u+1)/2
	case t.diagonal:
		return u * (u + 1) / 2
	}
	return u * (u - 1) / 2
}

// grow makes room for n more numbers, within the budget.
func (t *triangle) grow(n int) error {
	if len(t.at)+n <= cap(t.at) {
		return nil
	}
	if need := 8 * uint64(len(t.at)+n); t.budget > 0 && need > t.budget {
		return &source.TooBig{Why: fmt.Sprintf("%s: the distances alone take more than %d bytes, %d are allowed; raise --memory", t.path, need-1, t.budget)}
	}
	t.at = t.own.grow(t.at, len(t.at)+max(n, min(len(t.at), 1<<24), 1<<12))
	return nil
}

// text reads lines; the first says whether the matrix is square.
func (t *triangle) text(ctx context.Context, p source.Progress) error {
	in, err := table.Open(t.path)
	if err != nil {
		return err
	}
	defer in.Close()
	var row []float64
	for in.Next() {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		p.Advance(in.BytesRead(), in.Size())
		n, i := len(in.Fields()), len(t.lines)
		if i == 0 && n > 1 {
			t.square, t.n = true, n
		}
		t.lines = append(t.lines, in.Line())
		if err := t.lengthFits(i, n); err != nil {
			return err
		}
		if row, err = numbers(t.path, in, row[:0]); err != nil {
			return err
		}
		if err := t.add(i, row); err != nil {
			return err
		}
	}
	return t.end(in.Err())
}

// lengthFits checks the number n of fields in row i.
func (t *triangle) lengthFits(i, n int) error {
	line := t.lines[i]
	switch {
	case t.square && n != t.n:
		return source.Broken(t.path, line, "%d numbers; %d were expected, as in the lines before", n, t.n)
	case t.square && i == t.n:
		return source.Broken(t.path, line, "more lines than the %d numbers in each; a square matrix was expected", t.n)
	case !t.square && n != i+1:
		return source.Broken(t.path, line, "%d numbers; %d were expected in this line of a lower triangular matrix", n, i+1)
	}
	return nil
}

// end checks what only the last line shows.
func (t *triangle) end(err error) error {
	rows := len(t.lines)
	switch {
	case err != nil:
		return err
	case rows == 0:
		return source.Broken(t.path, 0, "no data in it; a distance matrix was expected")
	case t.square && rows < t.n:
		return source.Broken(t.path, t.lines[rows-1], "the matrix ends after %d lines of %d numbers; it must be square", rows, t.n)
	case t.square:
		return nil
	}
	t.diagonal = true
	for i := range rows {
		t.diagonal = t.diagonal && t.at[i*(i+1)/2+i] == 0
	}
	if t.n = rows; !t.diagonal {
		t.n++
	}
	return nil
}

// add takes row i, which has the right length. Of a square it keeps what is above the
// diagonal and compares the rest with what it kept before.
func (t *triangle) add(i int, row []float64) error {
	if err := t.grow(len(row)); err != nil {
		return err
	}
	for j, v := range row {
		if why := wrong(v, t.square && i == j); why != "" {
			return t.broken(i, j, fmt.Sprintf("%v; %s", v, why))
		}
		if !t.square || j >= i {
			continue
		}
		if w := t.at[t.row(j)+i-j-1]; v != w {
			return t.broken(i, j, fmt.Sprintf("%v, but %s is %v; distances must be symmetric", v, t.entry(j, i), w))
		}
	}
	if t.square {
		row = row[i+1:]
	}
	t.at = append(t.at, row...)
	return nil
}

// wrong says what is wrong with a distance, "" for nothing.
func wrong(v float64, diagonal bool) string {
	switch {
	case math.IsNaN(v) || math.IsInf(v, 0):
		return "a finite distance was expected"
	case v < 0:
		return "a distance is not negative"
	case diagonal && v != 0:
		return "the diagonal of a distance matrix is 0"
	}
	return ""
}

// entry names a place in the file.
func (t *triangle) entry(i, j int) string {
	switch {
	case t.lines != nil:
		return fmt.Sprintf("line %d, column %d", t.lines[i], j+1)
	case t.turned:
		i, j = j, i
	}
	return fmt.Sprintf("entry [%d, %d]", i, j)
}

func (t *triangle) broken(i, j int, why string) error {
	return &source.InputError{Path: t.path, Where: t.entry(i, j), Why: why}
}

// array reads a square array; as it must be symmetric, rows may as well be columns.
func (t *triangle) array(ctx context.Context, p source.Progress) error {
	in, err := npy.Open(t.path)
	if err != nil {
		return err
	}
	defer in.Close()
	h := in.Header()
	if len(h.Shape) != 2 || h.Shape[0] != h.Shape[1] {
		return source.Broken(t.path, 0, "shape %v; a square matrix was expected", h.Shape)
	}
	t.n, t.square, t.turned = h.Shape[0], true, h.Fortran
	if err := t.grow(t.n * (t.n - 1) / 2); err != nil {
		return err
	}
	row := make([]float64, t.n)
	for i := range t.n {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		if _, err := in.Read(row); err != nil && err != io.EOF {
			return err
		}
		for j, v := range row {
			row[j] = source.Clean(v)
		}
		if err := t.add(i, row); err != nil {
			return err
		}
		p.Advance(uint64(i+1), uint64(t.n))
	}
	return nil
}

// size implements metric.
func (t *triangle) size() int { return t.n }

// prepare implements metric.
func (t *triangle) prepare(float64) {}

// within implements metric.
func (t *triangle) within(u int, scale float64, to []near) []near {
	to = slices.Grow(to, t.n-u)
	if t.square {
		at := t.row(u)
		for i, d := range t.at[at : at+t.n-u-1] {
			if d <= scale {
				to = append(to, near{uint32(u + 1 + i), d})
			}
		}
		return to
	}
	for v := u + 1; v < t.n; v++ {
		if d := t.at[t.row(v)+u]; d <= scale {
			to = append(to, near{uint32(v), d})
		}
	}
	return to
}

// farthest implements metric.
func (t *triangle) farthest(u int, most float64) (far float64) {
	for v := 0; v < t.n && far <= most; v++ {
		switch a, b := min(u, v), max(u, v); {
		case a == b:
		case t.square:
			far = max(far, t.at[t.row(a)+b-a-1])
		default:
			far = max(far, t.at[t.row(b)+a])
		}
	}
	return far
}
