package order

import (
	"context"
	"os"
	"sync/atomic"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// flag is the graph of a flag complex: every set of vertices that are joined two by
// two is a simplex, and enters with its longest edge. Edges are ranked by (value,
// smaller, larger endpoint); a simplex is ordered by (rank of its longest edge, its
// other vertices, descending).
//
// Method. The simplices with the longest edge e = {a, b} are a and b with the cliques
// among the common neighbours of a and b, if edges of rank ≥ e are taken away. So each
// simplex is found once, from its longest edge, and, with the vertices of the cliques
// taken in descending order, in the order of the complex: nothing is sorted but the
// edges. Cliques are listed by intersecting sorted neighbour lists (Chiba, Nishizeki
// 1985). One pass counts per edge and degree; sums of the counts say where each edge's
// simplices go, so edges are worked on in any order, by any number of goroutines, and
// a facet is found among the simplices of its own longest edge.
//
// A flag is read-only once made; safe for concurrent use.
type flag struct {
	path  string
	n     uint32
	all   uint64    // edges of the whole graph; more than are here where it is over budget
	held  uint64    // bytes that the input took while edges were found
	ends  []uint32  // edge r joins ends[2r] < ends[2r+1]
	value []float64 // of edge r
	first []uint64  // vertex → its part of to and rank
	to    []uint32  // neighbours, ascending
	rank  []uint32  // of the edge to each neighbour

	endsAt, toAt, rankAt array[uint32]
	valueAt              array[float64]
	firstAt              array[uint64]
}

// pairs are edges u < v, each once, in ascending order.
type pairs struct {
	u, v     []uint32
	value    []float64
	uAt, vAt array[uint32]
	valueAt  array[float64]
}

func newPairs(m int) *pairs {
	p := new(pairs)
	p.u, p.v, p.value = p.uAt.make(m), p.vAt.make(m), p.valueAt.make(m)
	return p
}

func (p *pairs) free() {
	p.u, p.v, p.value = nil, nil, nil
	p.uAt.free()
	p.vAt.free()
	p.valueAt.free()
}

// newFlag ranks edges and builds the neighbour lists; the pairs are used up.
func newFlag(path string, n uint32, p *pairs) *flag {
	m := len(p.u)
	f := &flag{path: path, n: n, all: uint64(m)}
	var items, other array[uint64]
	sorted := items.make(m)
	byValue := &sorting{key: func(i uint32) uint64 { return source.SortKey(p.value[i]) }}
	byValue.sort(sorted, other.make(m))
	other.free()
	var ranks array[uint32]
	rankOf := ranks.make(m)
	f.ends, f.value = f.endsAt.make(2*m), f.valueAt.make(m)
	for r, it := range sorted {
		i := uint32(it)
		f.ends[2*r], f.ends[2*r+1], f.value[r] = p.u[i], p.v[i], p.value[i]
		rankOf[i] = uint32(r)
	}
	items.free()
	f.link(p, rankOf)
	ranks.free()
	p.free()
	return f
}

// link fills the neighbour lists. As pairs ascend, a vertex gets its lower neighbours
// first, then the others, both in order.
func (f *flag) link(p *pairs, rankOf []uint32) {
	f.first = f.firstAt.make(int(f.n) + 1)
	for _, v := range f.ends {
		f.first[v+1]++
	}
	for v := range f.n {
		f.first[v+1] += f.first[v]
	}
	var nextAt array[uint64]
	next := nextAt.make(int(f.n))
	copy(next, f.first)
	f.to, f.rank = f.toAt.make(len(f.ends)), f.rankAt.make(len(f.ends))
	for i, u := range p.u {
		v := p.v[i]
		f.to[next[u]], f.rank[next[u]] = v, rankOf[i]
		f.to[next[v]], f.rank[next[v]] = u, rankOf[i]
		next[u]++
		next[v]++
	}
	nextAt.free()
}

func (f *flag) edges() int { return len(f.value) }

func (f *flag) free() {
	f.ends, f.value, f.first, f.to, f.rank = nil, nil, nil, nil, nil
	for _, a := range []*array[uint32]{&f.endsAt, &f.toAt, &f.rankAt} {
		a.free()
	}
	f.valueAt.free()
	f.firstAt.free()
}

// complex counts, and if all fits builds and publishes the complex for degrees 0..K
// (spec.Degrees, default 1): simplices up to degree K+1, as far as there are any. The
// flag is used up. On an error no file is left in dir.
func (f *flag) complex(ctx context.Context, spec source.Spec, c *chain.Complex, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	defer f.free()
	degrees := spec.Degrees
	if degrees < 0 {
		degrees = 1
	}
	// Beyond 64 vertices there are too many faces of middle degree to count anyway.
	t := newTally(f, min(degrees+1, verticesMost-1), spec.MemoryBytes)
	defer t.free()
	if err := t.run(ctx, threads, p); err != nil {
		return nil, err
	}
	c.Naming, c.KeepZero = chain.BySimplex, spec.KeepZeroPairs
	c.Degrees, c.Truncated = min(degrees, t.dim), t.dim > degrees
	b := &flagBuild{flag: f, tally: t, complex: c, dir: dir, threads: threads, progress: p}
	defer b.free()
	if err := b.run(ctx); err != nil {
		for _, path := range b.made {
			os.Remove(path)
		}
		return nil, err
	}
	return c, nil
}

// stretch is how many edges or points a goroutine takes at a time.
const stretch = 256

// share cuts 0..n−1 into stretches and works on them with up to threads goroutines,
// first ones first; start makes each goroutine's own worker. An error, or the end of
// ctx, stops all before their next stretch. A worker that returns an error of its own
// was given the stretch's number; the error of the lowest goroutine is returned.
func share(ctx context.Context, n, threads int, start func() func(lo, hi int) error) error {
	var next atomic.Int64
	var failed atomic.Bool
	threads = max(1, min(threads, (n+stretch-1)/stretch))
	return parallel(threads, threads, func(int) error {
		work := start()
		for !failed.Load() {
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
			lo := int(next.Add(stretch)) - stretch
			if lo >= n {
				return nil
			}
			if err := work(lo, min(lo+stretch, n)); err != nil {
				failed.Store(true)
				return err
			}
		}
		return nil
	})
}
