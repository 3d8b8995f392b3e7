package order

import (
	"math/bits"
	"slices"

	"pairloom/sparse/source"
)

// degreeTable holds the simplices of one degree, flat: k+1 dense vertex numbers a
// simplex. All simplices of a complex hold them ascending, or, for a lower star whose
// dense numbers are ranks by the function, all descending (latest first).
type degreeTable struct {
	k      int
	verts  []uint32
	values []float64 // one a simplex; nil where every value is 0 or comes from centres

	vertsAt  array[uint32] // memory of verts and values, unless they are on the heap
	valuesAt array[float64]
}

func (d *degreeTable) len() int { return len(d.verts) / (d.k + 1) }

func (d *degreeTable) simplex(i int) []uint32 { return d.verts[i*(d.k+1) : (i+1)*(d.k+1)] }

func (d *degreeTable) value(i int) float64 {
	if d.values == nil {
		return 0
	}
	return d.values[i]
}

// room makes room for n more simplices, with values or without.
func (d *degreeTable) room(n int, valued bool) {
	if need := len(d.verts) + n*(d.k+1); need > cap(d.verts) {
		d.verts = d.vertsAt.grow(d.verts, need)
	}
	if valued && len(d.values)+n > cap(d.values) {
		d.values = d.valuesAt.grow(d.values, len(d.values)+n)
	}
}

// add appends a simplex; room doubles.
func (d *degreeTable) add(s []uint32, value float64, valued bool) {
	if len(d.verts)+len(s) > cap(d.verts) || valued && len(d.values) == cap(d.values) {
		d.room(max(d.len(), 1<<10), valued)
	}
	d.verts = append(d.verts, s...)
	if valued {
		d.values = append(d.values, value)
	}
}

// free drops the simplices and their memory.
func (d *degreeTable) free() {
	d.verts, d.values = nil, nil
	d.vertsAt.free()
	d.valuesAt.free()
}

// ascends says whether the simplices stand in strict lexicographic order.
func (d *degreeTable) ascends() bool {
	w := d.k + 1
	for at := w; at < len(d.verts); at += w {
		x := 0
		for x < w && d.verts[at-w+x] == d.verts[at+x] {
			x++
		}
		if x == w || d.verts[at-w+x] > d.verts[at+x] {
			return false
		}
	}
	return true
}

// sortTable puts a table in lexicographic order, dropping repetitions. The first
// given simplices count as given, the others as added: merged is told each group of
// equal ones by the index of its first (given before added) and the numbers of both,
// and says whether to go on. A group has the value of its first if that is given, or
// its least.
func sortTable(d *degreeTable, vertices, given int, merged func(first uint32, given, added int) error) error {
	if d.ascends() {
		return nil
	}
	n, w := d.len(), d.k+1
	var a, b array[uint64]
	defer a.free()
	defer b.free()
	items := a.make(n)
	d.lexicographic(vertices).sort(items, b.make(n))
	b.free()
	sorted := &degreeTable{k: d.k}
	sorted.room(n, d.values != nil)
	for i := 0; i < n; {
		first := uint32(items[i])
		simplex, value := d.simplex(int(first)), d.value(int(first))
		old, j := 0, i
		for ; j < n && (j == i || slices.Equal(d.simplex(int(uint32(items[j]))), simplex)); j++ {
			if at := uint32(items[j]); int(at) < given {
				old++
			} else if old == 0 {
				value = min(value, d.value(int(at)))
			}
		}
		if j-i > 1 {
			if err := merged(first, old, j-i-old); err != nil {
				sorted.free()
				return err
			}
		}
		sorted.verts = append(sorted.verts, d.verts[int(first)*w:int(first)*w+w]...)
		if d.values != nil {
			sorted.values = append(sorted.values, value)
		}
		i = j
	}
	d.free()
	*d = *sorted
	return nil
}

// lexicographic is the order by vertices: as many as fit packed into the key.
func (d *degreeTable) lexicographic(vertices int) *sorting {
	w := d.k + 1
	width := max(bits.Len(uint(max(vertices-1, 0))), 1)
	m := min(w, 64/width)
	s := &sorting{key: func(i uint32) (key uint64) {
		at := int(i) * w
		for _, v := range d.verts[at : at+m] {
			key = key<<width | uint64(v)
		}
		return key
	}}
	if m < w {
		s.tie = func(i, j uint32) int { return slices.Compare(d.simplex(int(i))[m:], d.simplex(int(j))[m:]) }
	}
	return s
}

// byValue is the order by value; ties stay in lexicographic order.
func (d *degreeTable) byValue() *sorting {
	return &sorting{key: func(i uint32) uint64 { return source.SortKey(d.values[i]) }}
}

// firsts returns, for each vertex, the first simplex that begins with it.
func (d *degreeTable) firsts(vertices int) []uint32 {
	start := make([]uint32, vertices+1)
	for i := 0; i < len(d.verts); i += d.k + 1 {
		start[d.verts[i]+1]++
	}
	for v := range vertices {
		start[v+1] += start[v]
	}
	return start
}

// find returns the index of simplex s in a sorted table.
func (d *degreeTable) find(s, start []uint32) (int, bool) {
	w := d.k + 1
	lo, hi := int(start[s[0]]), int(start[s[0]+1])
	for lo < hi {
		mid := int(uint(lo+hi) >> 1)
		h, x := d.verts[mid*w:mid*w+w], 1
		for x < w && h[x] == s[x] {
			x++
		}
		if x == w {
			return mid, true
		}
		if h[x] < s[x] {
			lo = mid + 1
		} else {
			hi = mid
		}
	}
	return lo, false
}

// facesOf appends all faces of degree to.k of the simplices of d, with their values.
func (d *degreeTable) facesOf(to *degreeTable) {
	n, m := d.k+1, to.k+1
	pick, face := make([]int, m), make([]uint32, m)
	for i := range d.len() {
		s := d.simplex(i)
		for q := range pick {
			pick[q] = q
		}
		for more := true; more; more = nextPick(pick, n) {
			for x, q := range pick {
				face[x] = s[q]
			}
			to.add(face, d.value(i), d.values != nil)
		}
	}
}

// nextPick moves to the next choice of len(pick) out of n positions.
func nextPick(pick []int, n int) bool {
	m := len(pick)
	q := m - 1
	for q >= 0 && pick[q] == n-m+q {
		q--
	}
	if q < 0 {
		return false
	}
	pick[q]++
	for q++; q < m; q++ {
		pick[q] = pick[q-1] + 1
	}
	return true
}

// labelsOf lists the vertices in use, ascending.
func labelsOf(tables []*degreeTable) []uint32 {
	top := uint32(0)
	total := 0
	for _, d := range tables {
		total += len(d.verts)
		for _, v := range d.verts {
			top = max(top, v)
		}
	}
	if uint64(top) < 64+32*uint64(total) { // a bit a number costs less than sorting
		return markedOf(tables, top)
	}
	all := make([]uint32, 0, total)
	for _, d := range tables {
		all = append(all, d.verts...)
	}
	slices.Sort(all)
	return slices.Clip(slices.Compact(all))
}

func markedOf(tables []*degreeTable, top uint32) []uint32 {
	seen := make([]uint64, top/64+1)
	for _, d := range tables {
		for _, v := range d.verts {
			seen[v/64] |= 1 << (v % 64)
		}
	}
	n := 0
	for _, w := range seen {
		n += bits.OnesCount64(w)
	}
	out := make([]uint32, 0, n)
	for i, w := range seen {
		for ; w != 0; w &= w - 1 {
			out = append(out, uint32(i*64+bits.TrailingZeros64(w)))
		}
	}
	return out
}

// densify replaces vertices by their numbers among labels.
func densify(tables []*degreeTable, labels []uint32) {
	n := len(labels)
	if n == 0 || labels[n-1] == uint32(n-1) {
		return
	}
	number := func(v uint32) uint32 {
		at, _ := slices.BinarySearch(labels, v)
		return uint32(at)
	}
	if top := labels[n-1]; uint64(top) < 64+8*uint64(n) {
		to := make([]uint32, top+1)
		for i, v := range labels {
			to[v] = uint32(i)
		}
		number = func(v uint32) uint32 { return to[v] }
	}
	for _, d := range tables {
		for i, v := range d.verts {
			d.verts[i] = number(v)
		}
	}
}
