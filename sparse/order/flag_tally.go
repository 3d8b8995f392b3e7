package order

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"

	"pairloom/sparse/source"
)

// What cells of a flag complex take while it is built, in bytes: neighbour lists,
// sorting, offsets, and the pages of the files that are written.
const bytesVertex = 32

func bytesEdge(top int) uint64 { return 56 + 4*uint64(min(top, 12)) }

func bytesClique(k, top int) uint64 {
	cells, column, others := 4*(k+1)+8, 4*(k+1), 4*(k-1)
	if k == top {
		others = 0
	}
	return uint64(cells + column + others)
}

// tally counts the simplices of a flag complex by degree and longest edge, before
// anything is built, and stops as soon as they outgrow the budget.
type tally struct {
	flag   *flag
	top    int                  // highest degree counted
	most   uint64               // bytes allowed
	cost   [verticesMost]uint64 // bytes of a simplex by degree
	dim    int                  // highest degree found
	n      [verticesMost]uint64 // simplices by degree, when all are counted
	degree [verticesMost]perEdge
	found  [verticesMost]atomic.Uint64
	bytes  atomic.Uint64 // of what is found
	edges  atomic.Uint64 // done
}

// perEdge is a number for every edge, made when it is first needed: how many simplices
// of one degree have it as their longest; later, how many all edges before it have.
type perEdge struct {
	once sync.Once
	at   []uint32
	own  array[uint32]
}

func newTally(f *flag, top int, budget uint64) *tally {
	t := &tally{flag: f, top: top, most: budget}
	if budget == 0 {
		t.most = math.MaxUint64
	}
	t.cost[0], t.cost[1] = bytesVertex, bytesEdge(top)
	for k := 2; k <= top; k++ {
		t.cost[k] = bytesClique(k, top)
	}
	return t
}

// base is what is needed without edges.
func (t *tally) base() uint64 { return t.flag.held + uint64(t.flag.n)*bytesVertex }

func (t *tally) free() {
	for k := range t.degree {
		t.degree[k].at = nil
		t.degree[k].own.free()
	}
}

// run counts everything. Errors: *source.TooBig, or the end of ctx.
func (t *tally) run(ctx context.Context, threads int, p source.Progress) error {
	t.bytes.Store(t.base())
	err := share(ctx, t.flag.edges(), threads, func() func(lo, hi int) error {
		x := &nest{f: t.flag, top: t.top}
		return func(lo, hi int) error { return t.count(ctx, x, lo, hi, p) }
	})
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	if err != nil && err != errOver {
		return err
	}
	if over := t.sum(); over >= 0 || t.flag.all > uint64(t.flag.edges()) {
		return t.tooBig(over)
	}
	return nil
}

// errOver stops the counting: those who still count finish their stretches, so that
// all edges before any counted one are counted, whatever the number of goroutines.
var errOver = errors.New("order: over budget")

func (t *tally) count(ctx context.Context, x *nest, lo, hi int, p source.Progress) error {
	sum, steps, fits := t.cost[1]*uint64(hi-lo), 0, true
	for e := lo; e < hi && t.top > 1; e++ {
		own := uint64(0)
		var stopped error
		x.walk(uint32(e), func(k int, l *level) bool {
			own += uint64(len(l.at)) * t.cost[k]
			if steps++; steps%(1<<14) == 0 && ctx.Err() != nil {
				stopped = context.Cause(ctx)
			}
			return own <= t.most && x.done[k] < math.MaxUint32 && stopped == nil
		})
		if stopped != nil {
			return stopped
		}
		for k := 2; k <= t.top && x.done[k] > 0; k++ {
			t.of(k)[e] = uint32(min(x.done[k], math.MaxUint32))
			fits = t.found[k].Add(x.done[k]) < math.MaxUint32 && fits
		}
		sum += own
	}
	p.Advance(t.edges.Add(uint64(hi-lo)), uint64(t.flag.edges()))
	if t.bytes.Add(sum) > t.most || !fits {
		return errOver
	}
	return nil
}

func (t *tally) of(k int) []uint32 {
	d := &t.degree[k]
	d.once.Do(func() { d.at = d.own.make(t.flag.edges() + 1) })
	return d.at
}

// sum turns counts into offsets and adds them up. It returns the first edge up to
// which the complex does not fit, or −1; t.n then counts what is up to that edge.
func (t *tally) sum() (over int) {
	t.n[0] = uint64(t.flag.n)
	bytes := t.base()
	if bytes > t.most {
		return 0
	}
	for t.dim = 1; t.dim < t.top && t.degree[t.dim+1].at != nil; t.dim++ {
	}
	for e := range t.flag.edges() {
		t.n[1]++
		bytes += t.cost[1]
		fits := true
		for k := 2; k <= t.dim; k++ {
			c := t.degree[k].at[e]
			t.degree[k].at[e] = uint32(t.n[k])
			t.n[k] += uint64(c)
			bytes += uint64(c) * t.cost[k]
			fits = fits && t.n[k] < math.MaxUint32
		}
		if bytes > t.most || !fits {
			return e
		}
	}
	for k := 2; k <= t.dim; k++ {
		t.degree[k].at[t.flag.edges()] = uint32(t.n[k])
	}
	if t.n[1] == 0 {
		t.dim = 0
	}
	return -1
}

// tooBig says what was counted up to the edge where the complex stops fitting, and the
// largest scale up to which it fits: the length of the longest edges that are all before
// it. With over = −1 all edges here fit, and the whole graph has more.
func (t *tally) tooBig(over int) error {
	f := t.flag
	need, fits := f.held, "no --max-scale fits"
	for k, n := range t.n[:t.dim+1] {
		need += n * t.cost[k]
	}
	need += (f.all - t.n[1]) * t.cost[1]
	last := f.edges() - 1
	if over >= 0 {
		last = over - 1
		for last >= 0 && f.value[last] == f.value[over] {
			last-- // ties stand or fall together
		}
	}
	if last >= 0 {
		fits = "use --max-scale " + strconv.FormatFloat(f.value[last], 'g', -1, 64)
	}
	counts := []string{fmt.Sprintf("%d vertices", f.n), fmt.Sprintf("%d edges", f.all)}
	for k := 2; k <= t.dim; k++ {
		counts = append(counts, fmt.Sprintf("more than %d simplices of degree %d", t.n[k]-min(t.n[k], 1), k))
	}
	allowed := fmt.Sprintf("%d are allowed", t.most)
	if slices.Max(t.n[:]) >= math.MaxUint32 {
		allowed = "a degree can have at most 2^32-2 cells"
	}
	return &source.TooBig{Why: fmt.Sprintf("%s: the flag complex up to degree %d has %s; it needs more than %d bytes and %s: %s, fewer --degrees or more --memory",
		f.path, t.top, strings.Join(counts, ", "), need-min(need, 1), allowed, fits)}
}
