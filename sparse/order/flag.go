package order

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/bits"
	"slices"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// edge is an edge of the graph of a flag complex, u < v.
type edge struct {
	u, v  uint32
	value float64
}

// flag is the graph of a flag complex: every set of vertices that are joined two by
// two is a simplex, and enters with its longest edge. Edges are ranked by (value,
// smaller, larger endpoint); a simplex is ordered by (rank of its longest edge, its
// other vertices, descending).
type flag struct {
	path  string
	n     uint32
	edges []edge   // by rank
	first []uint32 // vertex u → its part of to: neighbours above u
	to    []uint32 // neighbours, ascending
	rank  []uint32 // rank of the edge to each neighbour
	width int      // bits of a vertex number
}

// newFlag ranks the edges (each given once, u < v).
func newFlag(path string, n uint32, edges []edge) *flag {
	slices.SortFunc(edges, func(a, b edge) int {
		return cmp.Or(cmp.Compare(a.value, b.value), cmp.Compare(a.u, b.u), cmp.Compare(a.v, b.v))
	})
	f := &flag{path: path, n: n, edges: edges, width: max(bits.Len32(n), 1)}
	f.link(len(edges))
	return f
}

// link builds the neighbour lists of the first m edges.
func (f *flag) link(m int) {
	f.first = make([]uint32, f.n+1)
	for _, e := range f.edges[:m] {
		f.first[e.u+1]++
	}
	for u := range f.n {
		f.first[u+1] += f.first[u]
	}
	items := make([]Item, m) // by (u, v)
	for r, e := range f.edges[:m] {
		items[r] = Item{uint64(e.u)<<32 | uint64(e.v), uint32(r)}
	}
	items = Sort(items)
	f.to, f.rank = make([]uint32, m), make([]uint32, m)
	for i, it := range items {
		f.to[i], f.rank[i] = uint32(it.Key), it.Index
	}
}

// level is one step of the search for cliques: the vertices that extend it, and the
// rank of the longest edge that each would bring.
type level struct{ to, rank []uint32 }

// walk lists the cliques of up to top+1 vertices in lexicographic order, depth first:
// visit gets the vertices and the rank of the longest edge (undefined for a vertex).
// With leaves unset, the largest cliques are not visited one by one but counted:
// count gets their degree and number. Both return false to stop.
func (f *flag) walk(ctx context.Context, top int, leaves bool, visit func(s []uint32, longest uint32) bool, count func(k int, n uint64) bool) error {
	stack := make([]level, top+2)
	s := make([]uint32, 0, top+1)
	var extend func(depth int, longest uint32) bool
	extend = func(depth int, longest uint32) bool {
		if visit != nil && !visit(s, longest) {
			return false
		}
		if !count(depth, 1) {
			return false
		}
		if depth == top {
			return true
		}
		here := &stack[depth]
		if depth+1 == top && !leaves {
			return count(top, uint64(len(here.to)))
		}
		for i, v := range here.to {
			if depth+1 < top {
				f.narrow(here, i, &stack[depth+1])
			}
			s = append(s, v)
			l := here.rank[i]
			if depth > 0 {
				l = max(l, longest)
			}
			if !extend(depth+1, l) {
				return false
			}
			s = s[:depth+1]
		}
		return true
	}
	for u := range f.n {
		if u%64 == 0 && ctx.Err() != nil {
			return context.Cause(ctx)
		}
		lo, hi := f.first[u], f.first[u+1]
		stack[0] = level{f.to[lo:hi], f.rank[lo:hi]}
		s = append(s[:0], u)
		if !extend(0, 0) {
			break
		}
	}
	return context.Cause(ctx)
}

// narrow fills next with the candidates after the i-th that are neighbours of it.
func (f *flag) narrow(here *level, i int, next *level) {
	v := here.to[i]
	next.to, next.rank = next.to[:0], next.rank[:0]
	a, b := i+1, f.first[v]
	end := f.first[v+1]
	for a < len(here.to) && b < end {
		switch x, y := here.to[a], f.to[b]; {
		case x < y:
			a++
		case x > y:
			b++
		default:
			next.to = append(next.to, x)
			next.rank = append(next.rank, max(here.rank[a], f.rank[b]))
			a++
			b++
		}
	}
}

// counts returns the simplices by degree 0..top; ok is false when they outgrow bytes.
func (f *flag) counts(ctx context.Context, top int, most uint64) (n []uint64, ok bool, err error) {
	n = make([]uint64, top+1)
	total := uint64(0)
	err = f.walk(ctx, top, false, nil, func(k int, m uint64) bool {
		n[k] += m
		total += m * bytesSimplex(k)
		return total <= most && n[k] < math.MaxUint32
	})
	return n, err == nil && total <= most && slices.Max(n) < math.MaxUint32, err
}

// fits counts before work, and over budget says which scale would fit.
func (f *flag) fits(ctx context.Context, spec source.Spec, top int) ([]uint64, error) {
	most := spec.MemoryBytes
	if most == 0 {
		most = math.MaxUint64
	}
	n, ok, err := f.counts(ctx, top, most)
	if err != nil || ok {
		return n, err
	}
	lo, hi := 0, len(f.edges) // lo edges fit
	for hi-lo > max(1, len(f.edges)/256) {
		mid := (lo + hi) / 2
		f.link(mid)
		if _, ok, err := f.counts(ctx, top, most); err != nil {
			return nil, err
		} else if ok {
			lo = mid
		} else {
			hi = mid
		}
	}
	return nil, &source.TooBig{Why: f.tooBig(n, lo, top, most)}
}

func (f *flag) tooBig(n []uint64, lo, top int, most uint64) string {
	why := fmt.Sprintf("%s: the flag complex up to degree %d has more than %v simplices by degree and needs more than the %d MiB that --memory allows", f.path, top, n, most>>20)
	for lo > 0 && lo < len(f.edges) && f.edges[lo-1].value == f.edges[lo].value {
		lo-- // ties stand or fall together
	}
	if lo == 0 {
		return why + "; lower --degrees or raise --memory"
	}
	return fmt.Sprintf("%s; --max-scale %v fits, as do fewer --degrees", why, f.edges[lo-1].value)
}

// complex builds the flag complex for degrees 0..K and publishes it.
func (f *flag) complex(ctx context.Context, spec source.Spec, c *chain.Complex, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	p.Stage("order")
	degrees := spec.Degrees
	if degrees < 0 {
		degrees = 1
	}
	top := min(degrees+1, verticesMost-1)
	n, err := f.fits(ctx, spec, top)
	if err != nil {
		return nil, err
	}
	s := &simplicial{path: f.path, complex: c, flag: f, labels: make([]uint32, f.n)}
	for v := range s.labels {
		s.labels[v] = uint32(v)
	}
	for k := 0; k <= top && n[k] > 0; k++ {
		s.tables = append(s.tables, &degreeTable{k: k, verts: make([]uint32, 0, n[k]*uint64(k+1)), values: make([]float64, 0, n[k]), longest: make([]uint32, 0, n[k])})
	}
	err = f.walk(ctx, len(s.tables)-1, true, func(simplex []uint32, longest uint32) bool {
		d := s.tables[len(simplex)-1]
		d.verts = append(d.verts, simplex...)
		value := 0.0
		if d.k > 0 {
			value = f.edges[longest].value
		}
		d.values, d.longest = append(d.values, value), append(d.longest, longest)
		return true
	}, func(int, uint64) bool { return true })
	if err != nil {
		return nil, err
	}
	c.Naming = chain.BySimplex
	dim := len(s.tables) - 1
	c.Degrees, c.Truncated = min(degrees, dim), dim > degrees
	return c, s.build(ctx, dir, threads, p)
}

// sorted orders the simplices of a degree by (longest edge, other vertices descending),
// from the last vertex that counts to the first, then by edge: each pass is stable.
func (f *flag) sorted(d *degreeTable, items []Item) []Item {
	if d.k == 0 {
		return items
	}
	for hi := d.k - 1; hi > 0; {
		lo := max(hi-64/f.width, 0)
		for i, it := range items {
			items[i].Key = f.others(d.simplex(int(it.Index)), f.edges[d.longest[it.Index]], lo, hi)
		}
		items = Sort(items)
		hi = lo
	}
	for i, it := range items {
		items[i].Key = uint64(d.longest[it.Index])
	}
	return Sort(items)
}

// others packs the lo-th to hi-th of the vertices off the longest edge, descending.
func (f *flag) others(s []uint32, e edge, lo, hi int) (key uint64) {
	at := 0
	for i := len(s) - 1; i >= 0; i-- {
		if s[i] == e.u || s[i] == e.v {
			continue
		}
		if at >= lo && at < hi {
			key = key<<f.width | uint64(s[i])
		}
		at++
	}
	return key
}
