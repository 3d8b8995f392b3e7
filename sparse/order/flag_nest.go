package order

import "slices"

// nest lists the simplices whose longest edge is a given one, in their order, degree
// by degree and depth first. Vertices beside the edge are called by their place among
// the common neighbours of its ends. One goroutine uses a nest; it allocates only
// while its lists grow.
type nest struct {
	f    *flag
	top  int // highest degree listed
	edge uint32

	w, ra, rb []uint32 // common neighbours of the edge's ends, ascending; rank of the edge to each end
	start     []int    // place → its part of at and rk
	at, rk    []uint32 // lower neighbours among w, as places, ascending; rank of the edge
	levels    [verticesMost]level
	path      []uint32 // places of the vertices chosen, descending
	done      [verticesMost]uint64
}

// level holds the vertices that extend the path to a simplex of its degree.
type level struct {
	at     []uint32 // places, ascending
	most   []uint32 // highest rank of an edge to the path
	base   uint64   // simplices of this degree and edge before these
	parent uint64   // place of the path among the simplices of the degree below
	// Highest ranks of edges within the path, and from it to the ends.
	inner, toA, toB uint32
	atOwn, mostOwn  []uint32 // memory of at and most, where they are not parts of the nest's lists
}

// room returns s with length n, its content undefined.
func room(s []uint32, n int) []uint32 {
	if n > cap(s) {
		return make([]uint32, n, n+n/2+16)
	}
	return s[:n]
}

// walk visits every simplex of degree 2..top whose longest edge is e: those of degree
// k that extend one path by one vertex each are shown together, as l. It returns false
// as soon as visit does.
func (x *nest) walk(e uint32, visit func(k int, l *level) bool) bool {
	x.open(e)
	x.path, x.done = x.path[:0], [verticesMost]uint64{}
	return x.descend(2, visit)
}

// open finds the common neighbours of the ends of e over edges of lower rank.
func (x *nest) open(e uint32) {
	f := x.f
	a, b := f.ends[2*e], f.ends[2*e+1]
	toA, rankA := f.to[f.first[a]:f.first[a+1]], f.rank[f.first[a]:f.first[a+1]]
	toB, rankB := f.to[f.first[b]:f.first[b+1]], f.rank[f.first[b]:f.first[b+1]]
	most := min(len(toA), len(toB))
	x.edge, x.w, x.ra, x.rb = e, room(x.w, most), room(x.ra, most), room(x.rb, most)
	n := 0
	for i := range intersect(toA, toB, rankB, e, x.ra, x.rb) {
		if p := x.ra[i]; rankA[p] < e {
			x.w[n], x.ra[n], x.rb[n] = toA[p], rankA[p], x.rb[i]
			n++
		}
	}
	x.w, x.ra, x.rb = x.w[:n], x.ra[:n], x.rb[:n]
	l := &x.levels[2]
	l.atOwn, l.mostOwn = room(l.atOwn, n), room(l.mostOwn, n)
	for i := range n {
		l.atOwn[i], l.mostOwn[i] = uint32(i), 0
	}
	l.at, l.most, l.base, l.inner, l.toA, l.toB = l.atOwn, l.mostOwn, 0, 0, 0, 0
	x.start = append(x.start[:0], 0)
}

func (x *nest) descend(k int, visit func(k int, l *level) bool) bool {
	l := &x.levels[k]
	if len(l.at) == 0 {
		return true
	}
	l.base = x.done[k]
	x.done[k] += uint64(len(l.at))
	if !visit(k, l) {
		return false
	}
	if k == x.top {
		return true
	}
	next := &x.levels[k+1]
	for p, i := range l.at {
		x.narrow(k, p)
		next.parent = l.base + uint64(p)
		next.inner, next.toA, next.toB = max(l.inner, l.most[p]), max(l.toA, x.ra[i]), max(l.toB, x.rb[i])
		x.path = append(x.path, i)
		ok := x.descend(k+1, visit)
		x.path = x.path[:k-2]
		if !ok {
			return false
		}
	}
	return true
}

// narrow finds the vertices that extend the path and the p-th vertex of level k.
func (x *nest) narrow(k, p int) {
	l, next := &x.levels[k], &x.levels[k+1]
	i := int(l.at[p])
	if k == 2 {
		next.at, next.most = x.list(i)
		return
	}
	at, rk := x.at[x.start[i]:x.start[i+1]], x.rk[x.start[i]:x.start[i+1]]
	most := min(p, len(at))
	next.atOwn, next.mostOwn = room(next.atOwn, most), room(next.mostOwn, most)
	n := intersect(l.at[:p], at, rk, x.edge, next.atOwn, next.mostOwn)
	for q, place := range next.atOwn[:n] {
		next.atOwn[q], next.mostOwn[q] = l.at[place], max(l.most[place], next.mostOwn[q])
	}
	next.at, next.most = next.atOwn[:n], next.mostOwn[:n]
}

// list finds the lower neighbours of the i-th common neighbour among the common ones.
// Lists are kept for the levels above, which come back to them, if there are any.
func (x *nest) list(i int) (at, rk []uint32) {
	f, v := x.f, x.w[i]
	from := 0
	if x.top > 3 {
		from = x.start[i]
	}
	lo, hi := f.first[v], f.first[v+1]
	most := from + min(i, int(hi-lo))
	if most > cap(x.at) {
		x.at, x.rk = slices.Grow(x.at[:from], 2*most-from), slices.Grow(x.rk[:from], 2*most-from)
	}
	x.at, x.rk = x.at[:most], x.rk[:most]
	n := intersect(x.w[:i], f.to[lo:hi], f.rank[lo:hi], x.edge, x.at[from:], x.rk[from:])
	x.start = append(x.start, from+n)
	return x.at[from : from+n], x.rk[from : from+n]
}

// steep is how much longer one list must be for its entries to be searched, not walked.
const steep = 16

// intersect writes, for every common number of the ascending lists x and y whose
// ranky is below a bound, its place in x and its ranky, and returns how many there are.
func intersect(x, y, ranky []uint32, below uint32, place, rank []uint32) (n int) {
	if len(y) > steep*len(x) || len(x) > steep*len(y) {
		return intersectSearch(x, y, ranky, below, place, rank)
	}
	ranky = ranky[:len(y)]
	for i, j := 0, 0; i < len(x) && j < len(y); {
		a, b := x[i], y[j]
		if a == b && ranky[j] < below {
			place[n], rank[n] = uint32(i), ranky[j]
			n++
		}
		if a <= b {
			i++
		}
		if b <= a {
			j++
		}
	}
	return n
}

// intersectSearch is intersect for lists of very different lengths.
func intersectSearch(x, y, ranky []uint32, below uint32, place, rank []uint32) (n int) {
	short, long := x, y
	if len(y) < len(x) {
		short, long = y, x
	}
	at := 0
	for s, v := range short {
		q, ok := slices.BinarySearch(long[at:], v)
		at += q
		if !ok {
			continue
		}
		i, j := s, at
		if len(y) < len(x) {
			i, j = at, s
		}
		if ranky[j] < below {
			place[n], rank[n] = uint32(i), ranky[j]
			n++
		}
	}
	return n
}
