package order

import (
	"context"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/npy"
	"pairloom/sparse/source/table"
)

// bytesEdge is what an edge takes while a flag complex is prepared.
const bytesEdge = 64

// rows is a dense array of numbers, one point or one line of a matrix a row.
type rows struct {
	path string
	n, d int
	at   []float64 // n × d
}

func (r *rows) row(i int) []float64 { return r.at[i*r.d : (i+1)*r.d] }

// Points reads points (one a line of text, or .npy of shape N × d or N) and publishes
// their flag complex in dir, which exists: edges by Euclidean distance up to
// spec.MaxScale, or up to the enclosing radius, beyond which the diagram does not
// change. Degrees: K, default 1; simplices up to degree K+1 are made. Errors:
// *source.InputError, *source.TooBig. Time: O(N²·d) and what the complex takes, or,
// with a scale, the pairs whose first coordinates are within it.
func Points(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	p.Stage("read")
	pts, err := readRows(ctx, spec.Inputs[0], p)
	if err != nil {
		return nil, err
	}
	c := &chain.Complex{Kind: string(source.Points), KeepZero: spec.KeepZeroPairs}
	scale, err := scaleOf(ctx, spec, c, pts.n, threads, func(i int, most float64) (float64, error) {
		far := 0.0
		for j := range pts.n {
			if far = max(far, distance(pts.row(i), pts.row(j))); far > most {
				break
			}
		}
		return far, nil
	})
	if err != nil {
		return nil, err
	}
	edges, err := pts.edges(ctx, spec, scale)
	if err != nil {
		return nil, err
	}
	return newFlag(spec.Inputs[0], uint32(pts.n), edges).complex(ctx, spec, c, dir, threads, p)
}

// distance is the Euclidean distance of two points.
func distance(a, b []float64) float64 {
	sum := 0.0
	for i, x := range a {
		sum += (x - b[i]) * (x - b[i])
	}
	return math.Sqrt(sum)
}

// edges lists the pairs within scale: points are walked along their first coordinate,
// so that pairs further apart in it alone are never looked at.
func (r *rows) edges(ctx context.Context, spec source.Spec, scale float64) ([]edge, error) {
	order := make([]int, r.n)
	for i := range order {
		order[i] = i
	}
	slices.SortFunc(order, func(a, b int) int {
		if r.row(a)[0] != r.row(b)[0] {
			if r.row(a)[0] < r.row(b)[0] {
				return -1
			}
			return 1
		}
		return a - b
	})
	var edges []edge
	for i, a := range order {
		if i%64 == 0 && ctx.Err() != nil {
			return nil, context.Cause(ctx)
		}
		for _, b := range order[i+1:] {
			if r.row(b)[0]-r.row(a)[0] > scale {
				break
			}
			if d := distance(r.row(a), r.row(b)); d <= scale {
				edges = append(edges, edge{uint32(min(a, b)), uint32(max(a, b)), d})
			}
		}
		if err := edgesFit(spec, len(edges)); err != nil {
			return nil, err
		}
	}
	return edges, nil
}

func edgesFit(spec source.Spec, n int) error {
	if need := uint64(n) * bytesEdge; spec.MemoryBytes > 0 && need > spec.MemoryBytes {
		return &source.TooBig{Why: fmt.Sprintf("%s: more than %d edges, %d MiB, and --memory allows %d MiB; use a smaller --max-scale", spec.Inputs[0], n, need>>20, spec.MemoryBytes>>20)}
	}
	return nil
}

// scaleOf returns the longest edge to keep: spec.MaxScale, or the enclosing radius,
// the least over all vertices of the distance to the farthest other one. far(i, most)
// returns that distance for vertex i, or anything above most once it exceeds it.
func scaleOf(ctx context.Context, spec source.Spec, c *chain.Complex, n, threads int, far func(i int, most float64) (float64, error)) (float64, error) {
	if spec.MaxScale != nil {
		return *spec.MaxScale, nil
	}
	radius := math.Inf(1)
	for i := range n {
		if i%64 == 0 && ctx.Err() != nil {
			return 0, context.Cause(ctx)
		}
		r, err := far(i, radius)
		if err != nil {
			return 0, err
		}
		radius = min(radius, r)
	}
	c.Notes = append(c.Notes, chain.Note{What: "cut at the enclosing radius " + strconv.FormatFloat(radius, 'g', -1, 64) + ", beyond which nothing changes; points", Count: uint64(n)})
	return radius, nil
}

// readRows reads a table of finite numbers with equally many in each line, or an array
// of one or two axes.
func readRows(ctx context.Context, path string, p source.Progress) (*rows, error) {
	if strings.HasSuffix(path, ".npy") {
		return readArrayRows(path)
	}
	in, err := table.Open(path)
	if err != nil {
		return nil, err
	}
	defer in.Close()
	r := &rows{path: path}
	for in.Next() {
		if r.n%4096 == 0 {
			p.Advance(in.BytesRead(), in.Size())
			if ctx.Err() != nil {
				return nil, context.Cause(ctx)
			}
		}
		if r.n == 0 {
			r.d = len(in.Fields())
		}
		if len(in.Fields()) != r.d {
			return nil, source.Broken(path, in.Line(), "%d numbers; %d were expected, as in the lines before", len(in.Fields()), r.d)
		}
		if r.at, err = numbers(path, in, r.at); err != nil {
			return nil, err
		}
		r.n++
	}
	if in.Err() == nil && r.n == 0 {
		return nil, source.Broken(path, 0, "no data in it; one line of numbers for each point was expected")
	}
	return r, in.Err()
}

// numbers appends the finite numbers of a line.
func numbers(path string, in *table.Reader, to []float64) ([]float64, error) {
	for i, f := range in.Fields() {
		v, ok := table.ParseFloat(f)
		if !ok || math.IsNaN(v) || math.IsInf(v, 0) {
			return nil, source.Broken(path, in.Line(), "column %d: %q; a finite number was expected", i+1, f)
		}
		to = append(to, source.Clean(v))
	}
	return to, nil
}

func readArrayRows(path string) (*rows, error) {
	in, err := npy.Open(path)
	if err != nil {
		return nil, err
	}
	defer in.Close()
	h := in.Header()
	r := &rows{path: path, d: 1}
	switch len(h.Shape) {
	case 1:
		r.n = h.Shape[0]
	case 2:
		r.n, r.d = h.Shape[0], h.Shape[1]
	default:
		return nil, source.Broken(path, 0, "%d axes; an array of shape N × d was expected", len(h.Shape))
	}
	flat := make([]float64, in.Len())
	for at := 0; at < len(flat); {
		n, err := in.Read(flat[at:])
		at += n
		if err != nil && (err != io.EOF || at < len(flat)) {
			return nil, err
		}
	}
	r.at = flat
	if h.Fortran && len(h.Shape) == 2 {
		r.at = make([]float64, len(flat))
		for i, v := range flat {
			r.at[i%r.n*r.d+i/r.n] = v
		}
	}
	for i, v := range r.at {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return nil, source.Broken(path, 0, "entry [%d, %d] is %v; finite numbers were expected", i/r.d, i%r.d, v)
		}
	}
	if r.n == 0 || r.d == 0 {
		return nil, source.Broken(path, 0, "no data in it; an array of shape N × d was expected")
	}
	return r, nil
}
