package order

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"slices"
	"strconv"
	"sync/atomic"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// metric is a finite set of points with distances; its methods may be called side by
// side once prepare has returned.
type metric interface {
	size() int
	// prepare is called before within, with the scale.
	prepare(scale float64)
	// within appends the points v > u that are no farther from u than scale, ascending.
	within(u int, scale float64, to []near) []near
	// farthest is the largest distance from u, or any above most once there is one.
	farthest(u int, most float64) float64
}

// near is a point and its distance.
type near struct {
	v        uint32
	distance float64
}

// edgeSearch finds the edges of the flag complex of a metric.
type edgeSearch struct {
	path     string
	spec     source.Spec
	complex  *chain.Complex
	metric   metric
	held     uint64 // bytes that the metric takes
	threads  int
	progress source.Progress
	done     atomic.Uint64
}

// run counts the edges up to the scale, then lists them, twice as much work as listing
// alone, but in no more memory than they need. Over budget, only the shortest edges
// are listed, as many as fit: enough to find the scale up to which all simplices would.
func (s *edgeSearch) run(ctx context.Context) (*flag, error) {
	s.progress.Stage("order")
	n := s.metric.size()
	if uint64(n) >= math.MaxUint32 {
		return nil, &source.TooBig{Why: fmt.Sprintf("%s: %d points; at most 2^32-2 are possible", s.path, n)}
	}
	scale, err := s.scale(ctx)
	if err != nil {
		return nil, err
	}
	s.metric.prepare(scale)
	var own array[uint64]
	defer own.free()
	first := own.make(n + 1)
	bins, err := s.count(ctx, scale, first)
	if err != nil {
		return nil, err
	}
	all := first[n]
	if short := s.shorter(bins, all); short < scale {
		scale = short
		if _, err := s.count(ctx, scale, first); err != nil {
			return nil, err
		}
	}
	p := newPairs(int(first[n]))
	if err := s.list(ctx, scale, first, p); err != nil {
		p.free()
		return nil, err
	}
	f := newFlag(s.path, uint32(n), p)
	f.all, f.held = all, s.held
	return f, nil
}

// scale is spec.MaxScale or the enclosing radius.
func (s *edgeSearch) scale(ctx context.Context) (float64, error) {
	if s.spec.MaxScale != nil {
		return *s.spec.MaxScale, checkScale(s.spec)
	}
	var least atomic.Uint64 // a distance; bits of floats that are not negative ascend as they do
	least.Store(math.Float64bits(math.Inf(1)))
	n := s.metric.size()
	err := share(ctx, n, s.threads, func() func(lo, hi int) error {
		return func(lo, hi int) error {
			for u := lo; u < hi; u++ {
				far := math.Float64bits(s.metric.farthest(u, math.Float64frombits(least.Load())))
				for old := least.Load(); far < old && !least.CompareAndSwap(old, far); old = least.Load() {
				}
			}
			return nil
		}
	})
	radius := math.Float64frombits(least.Load())
	s.complex.Notes = append(s.complex.Notes, chain.Note{What: "cut at the enclosing radius " + strconv.FormatFloat(radius, 'g', -1, 64) + ", beyond which nothing changes; points", Count: uint64(n)})
	return radius, err
}

func checkScale(spec source.Spec) error {
	if r := spec.MaxScale; r != nil && (math.IsNaN(*r) || math.IsInf(*r, 0) || *r < 0) {
		return &source.UsageError{Why: fmt.Sprintf("--max-scale %v; a finite number of at least 0 was expected", *r)}
	}
	return nil
}

// lengthBins is how many intervals edge lengths are counted in: by their leading bits,
// which tell lengths apart that differ by a sixteenth.
const lengthBins = 1 << 16

func lengthBin(d float64) uint64 { return source.SortKey(d) >> 48 }

// count writes where each point's edges go and returns how many lengths are in each bin.
func (s *edgeSearch) count(ctx context.Context, scale float64, first []uint64) ([]uint64, error) {
	n := s.metric.size()
	bins := make([]atomic.Uint64, lengthBins)
	s.done.Store(0)
	err := share(ctx, n, s.threads, func() func(lo, hi int) error {
		var to []near
		own := make([]uint64, lengthBins)
		return func(lo, hi int) error {
			low, high := uint64(lengthBins), uint64(0)
			for u := lo; u < hi; u++ {
				to = s.metric.within(u, scale, to[:0])
				first[u+1] = uint64(len(to))
				for _, x := range to {
					bin := lengthBin(x.distance)
					low, high = min(low, bin), max(high, bin)
					own[bin]++
				}
			}
			for bin := low; bin <= high; bin++ {
				bins[bin].Add(own[bin])
				own[bin] = 0
			}
			s.progress.Advance(s.done.Add(uint64(hi-lo)), 2*uint64(n))
			return nil
		}
	})
	for u := range n {
		first[u+1] += first[u]
	}
	out := make([]uint64, lengthBins)
	for bin := range bins {
		out[bin] = bins[bin].Load()
	}
	return out, err
}

// shorter returns a length up to which the edges fit the budget, +∞ if all do.
func (s *edgeSearch) shorter(bins []uint64, all uint64) float64 {
	most := uint64(math.MaxUint32 - 1)
	if s.spec.MemoryBytes > 0 {
		base := s.held + bytesVertex*uint64(s.metric.size())
		most = min(most, (max(s.spec.MemoryBytes, base)-base)/bytesEdge(1))
	}
	if all <= most {
		return math.Inf(1)
	}
	bin, sum := uint64(0), uint64(0)
	for ; sum+bins[bin] <= most; bin++ {
		sum += bins[bin]
	}
	if bin <= lengthBin(0) {
		return -1 // not even those of length 0 fit
	}
	return fromSortKey(bin<<48 - 1)
}

// list writes the edges.
func (s *edgeSearch) list(ctx context.Context, scale float64, first []uint64, p *pairs) error {
	n := s.metric.size()
	return share(ctx, n, s.threads, func() func(lo, hi int) error {
		var to []near
		return func(lo, hi int) error {
			for u := lo; u < hi; u++ {
				to = s.metric.within(u, scale, to[:0])
				at := first[u]
				for i, x := range to {
					p.u[at+uint64(i)], p.v[at+uint64(i)], p.value[at+uint64(i)] = uint32(u), x.v, x.distance
				}
			}
			s.progress.Advance(s.done.Add(uint64(hi-lo)), 2*uint64(n))
			return nil
		}
	})
}

// extent is the range of one coordinate.
type extent struct {
	axis      int
	low, high float64
}

func (s *cloud) extents() []extent {
	out := make([]extent, s.d)
	for j := range out {
		out[j] = extent{j, s.at[j], s.at[j]}
	}
	for i := range s.n {
		for j, x := range s.point(i) {
			out[j].low, out[j].high = min(out[j].low, x), max(out[j].high, x)
		}
	}
	return out
}

// buckets is a grid over at most three coordinates, those with the widest range, with
// cells no narrower than the scale: points within it are in the same cell or in
// neighbouring ones.
type buckets struct {
	axes  []extent
	per   []int // cells along each axis
	first []uint32
	of    []uint32 // points by cell, ascending in each
	cell  []uint32 // of each point
}

const (
	bucketAxes = 3
	bucketsMax = 1 << 20 // along one axis: places in the grid are exact to far less than slack
	slack      = 1e-6
)

// prepare implements metric.
func (s *cloud) prepare(scale float64) {
	g := &buckets{axes: s.extents()}
	slices.SortStableFunc(g.axes, func(a, b extent) int { return cmp.Compare(b.high-b.low, a.high-a.low) })
	g.axes = g.axes[:min(len(g.axes), bucketAxes)]
	total := 1.0
	for _, x := range g.axes {
		n := 1.0
		if wide := x.high - x.low; wide > 1e-140 { // below, squares of differences vanish
			n = max(1, math.Floor(min(wide/(scale*(1+slack)), bucketsMax)))
		}
		g.per = append(g.per, int(n))
		total *= n
	}
	for total > float64(2*s.n+1) { // no more cells than points need
		i := slices.Index(g.per, slices.Max(g.per))
		total = total / float64(g.per[i]) * float64((g.per[i]+1)/2)
		g.per[i] = (g.per[i] + 1) / 2
	}
	g.fill(s)
	s.cells = g
}

func (g *buckets) fill(s *cloud) {
	total := 1
	for _, n := range g.per {
		total *= n
	}
	g.first, g.of, g.cell = make([]uint32, total+1), make([]uint32, s.n), make([]uint32, s.n)
	for i := range s.n {
		cell := 0
		for q, n := range g.per {
			cell = cell*n + g.place(q, s.point(i)[g.axes[q].axis])
		}
		g.cell[i] = uint32(cell)
		g.first[cell+1]++
	}
	for cell := range total {
		g.first[cell+1] += g.first[cell]
	}
	next := slices.Clone(g.first)
	for i, cell := range g.cell {
		g.of[next[cell]] = uint32(i)
		next[cell]++
	}
}

// place is the cell of a coordinate along the q-th axis.
func (g *buckets) place(q int, x float64) int {
	n := g.per[q]
	if n == 1 {
		return 0
	}
	a := g.axes[q]
	return min(int((x-a.low)*(float64(n)/(a.high-a.low))), n-1)
}

// within implements metric.
func (s *cloud) within(u int, scale float64, to []near) []near {
	g := s.cells
	limit, a := above(scale), s.point(u)
	var low, high [bucketAxes]int
	rest, runs := int(g.cell[u]), 0
	for q := len(g.per) - 1; q >= 0; q-- {
		at := rest % g.per[q]
		rest /= g.per[q]
		low[q], high[q] = max(at-1, 0), min(at+1, g.per[q]-1)
	}
	for x := low[0]; x <= high[0]; x++ {
		for y := low[1]; y <= high[1]; y++ {
			row := x
			if len(g.per) > 1 {
				row = row*g.per[1] + y
			}
			for z := low[2]; z <= high[2]; z++ {
				cell := row
				if len(g.per) > 2 {
					cell = cell*g.per[2] + z
				}
				before := len(to)
				to = s.scan(g.of[g.first[cell]:g.first[cell+1]], u, a, limit, scale, to)
				if len(to) > before {
					runs++
				}
			}
		}
	}
	if runs > 1 {
		slices.SortFunc(to, func(a, b near) int { return cmp.Compare(a.v, b.v) })
	}
	return to
}

// scan appends the points of one cell after u that are near enough.
func (s *cloud) scan(of []uint32, u int, a []float64, limit, scale float64, to []near) []near {
	at, _ := slices.BinarySearch(of, uint32(u)+1)
	for _, v := range of[at:] {
		sum := square(a, s.point(int(v)))
		if sum > limit {
			continue
		}
		if d := math.Sqrt(sum); d <= scale {
			to = append(to, near{v, d})
		}
	}
	return to
}
