package order

import (
	"context"
	"io"
	"math"
	"strings"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/npy"
	"pairloom/sparse/source/table"
)

// Points reads points (one a line of text, or .npy of shape N × d or N), numbered from
// 0, and publishes their flag complex in dir, which exists: edges by Euclidean distance
// up to spec.MaxScale, or up to the enclosing radius (the least over all points of the
// distance to the farthest other one), beyond which the diagram does not change.
// Vertices enter at 0, a simplex with its longest edge. Degrees K, default 1; simplices
// up to degree K+1 are made. threads goroutines at most, all ended on return.
//
// Errors: *source.InputError for the file, *source.TooBig, with the counts and the
// scale that would fit, before anything is built; ctx's cause; what the system says.
// After an error no file is left in dir.
//
// Time: with a scale, the pairs within it and those in neighbouring cells of a grid;
// without, up to O(N²·d). Then O(Σ over edges of the degrees of their ends) and what
// the complex takes. Memory: 8 bytes a coordinate, about 60 an edge, 8k + 16 a
// k-simplex, 4(k−1) more below the highest degree; the written pages are in it.
func Points(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	path, err := oneInput(spec)
	if err != nil {
		return nil, err
	}
	p.Stage("read")
	s := &cloud{path: path, budget: spec.MemoryBytes}
	defer s.free()
	if err := s.read(ctx, p); err != nil {
		return nil, err
	}
	c := &chain.Complex{Kind: string(source.Points)}
	e := &edgeSearch{path: path, spec: spec, complex: c, metric: s, held: 8 * uint64(len(s.at)), threads: threads, progress: p}
	f, err := e.run(ctx)
	if err != nil {
		return nil, err
	}
	s.free()
	return f.complex(ctx, spec, c, dir, threads, p)
}

func oneInput(spec source.Spec) (string, error) {
	if len(spec.Inputs) != 1 {
		return "", &source.UsageError{Why: string(spec.Kind) + ": exactly one input file was expected"}
	}
	return spec.Inputs[0], nil
}

// cloud is a set of points.
type cloud struct {
	path   string
	budget uint64
	n, d   int
	at     []float64 // n × d
	own    array[float64]
	cells  *buckets // set by prepare
}

func (s *cloud) free() {
	s.at, s.cells = nil, nil
	s.own.free()
}

func (s *cloud) point(i int) []float64 { return s.at[i*s.d : i*s.d+s.d] }

func (s *cloud) read(ctx context.Context, p source.Progress) error {
	read := s.text
	if strings.HasSuffix(s.path, ".npy") {
		read = s.array
	}
	if err := read(ctx, p); err != nil {
		return err
	}
	return s.checkSpread()
}

// grow makes room for n more numbers, within the budget.
func (s *cloud) grow(n int) error {
	if len(s.at)+n <= cap(s.at) {
		return nil
	}
	to := len(s.at) + max(n, min(len(s.at), 1<<24), 1<<12)
	if s.budget > 0 && 8*uint64(len(s.at)+n) > s.budget {
		return &source.TooBig{Why: source.Broken(s.path, 0, "the numbers in it alone take more than the %d bytes allowed; raise --memory", s.budget).Error()}
	}
	s.at = s.own.grow(s.at, to)
	return nil
}

func (s *cloud) text(ctx context.Context, p source.Progress) error {
	in, err := table.Open(s.path)
	if err != nil {
		return err
	}
	defer in.Close()
	for ; in.Next(); s.n++ {
		if s.n%4096 == 0 {
			p.Advance(in.BytesRead(), in.Size())
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
		}
		if s.n == 0 {
			s.d = len(in.Fields())
		}
		if len(in.Fields()) != s.d {
			return source.Broken(s.path, in.Line(), "%d numbers; %d were expected, as in the lines before", len(in.Fields()), s.d)
		}
		if err := s.grow(s.d); err != nil {
			return err
		}
		if s.at, err = numbers(s.path, in, s.at); err != nil {
			return err
		}
	}
	if in.Err() == nil && s.n == 0 {
		return source.Broken(s.path, 0, "no data in it; one line of numbers for each point was expected")
	}
	return in.Err()
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

func (s *cloud) array(ctx context.Context, p source.Progress) error {
	in, err := npy.Open(s.path)
	if err != nil {
		return err
	}
	defer in.Close()
	h := in.Header()
	switch s.n, s.d = 0, 1; len(h.Shape) {
	case 1:
		s.n = h.Shape[0]
	case 2:
		s.n, s.d = h.Shape[0], h.Shape[1]
	default:
		return source.Broken(s.path, 0, "%d axes; an array of shape N × d was expected, one point a row", len(h.Shape))
	}
	if err := s.grow(in.Len()); err != nil {
		return err
	}
	s.at = s.at[:in.Len()]
	buf := make([]float64, 1<<14)
	for at := 0; at < len(s.at); {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		n, err := in.Read(buf)
		if err != nil && err != io.EOF {
			return err
		}
		for q, v := range buf[:n] {
			i, j := (at+q)/s.d, (at+q)%s.d
			if h.Fortran && len(h.Shape) == 2 {
				i, j = (at+q)%s.n, (at+q)/s.n
			}
			if math.IsNaN(v) || math.IsInf(v, 0) {
				return source.Broken(s.path, 0, "entry [%d, %d] is %v; a finite number was expected", i, j, v)
			}
			s.at[i*s.d+j] = v
		}
		at += n
		p.Advance(uint64(at), uint64(len(s.at)))
	}
	return nil
}

// checkSpread refuses points so far apart that squares of distances overflow.
func (s *cloud) checkSpread() error {
	sum := 0.0
	for _, x := range s.extents() {
		sum += (x.high - x.low) * (x.high - x.low)
	}
	if math.IsInf(sum, 1) {
		return source.Broken(s.path, 0, "the points are so far apart that squares of distances overflow; scale the coordinates down")
	}
	return nil
}

// size implements metric.
func (s *cloud) size() int { return s.n }

// square is the squared Euclidean distance; the conversion forbids fused operations, so
// that all machines round alike.
func square(a, b []float64) (sum float64) {
	b = b[:len(a)]
	for i, x := range a {
		sum += float64((x - b[i]) * (x - b[i]))
	}
	return sum
}

// farthest implements metric.
func (s *cloud) farthest(u int, most float64) float64 {
	far, a := 0.0, s.point(u)
	limit := above(most)
	for v := range s.n {
		if far = max(far, square(a, s.point(v))); far > limit {
			break
		}
	}
	return math.Sqrt(far)
}

// above is a bound for the squares of distances up to a scale: what is above it is
// above the scale, whatever was rounded.
func above(scale float64) float64 {
	return scale*scale*(1+1e-9) + math.SmallestNonzeroFloat64
}
