package order

import (
	"cmp"
	"context"
	"fmt"
	"math/bits"
	"slices"
	"sort"
	"sync"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// degreeTable holds the simplices of one degree, flat.
type degreeTable struct {
	k      int
	verts  []uint32  // k+1 vertices a simplex, ascending; dense numbers after densify
	values []float64 // one a simplex; nil where every value is 0 or comes from centres
	lines  []uint32  // 1-based input line of each simplex, 0 for added ones; nil: not known

	longest []uint32 // flag complexes: rank of the longest edge
}

func (d *degreeTable) len() int { return len(d.verts) / (d.k + 1) }

func (d *degreeTable) simplex(i int) []uint32 { return d.verts[i*(d.k+1) : (i+1)*(d.k+1)] }

func (d *degreeTable) line(i int) int {
	if d.lines == nil {
		return 0
	}
	return int(d.lines[i])
}

func (d *degreeTable) value(i int) float64 {
	if d.values == nil {
		return 0
	}
	return d.values[i]
}

// simplicial turns tables of simplices into a filtered complex: each degree sorted
// lexicographically, then stably by value (or centre); facets are found by binary
// search among the simplices with the same first vertex, while cofaces are walked
// in lexicographic order, which keeps the searches in cache.
//
// Time: O(entries · log of a vertex's simplices). Memory beside the tables: 32 bytes
// a simplex of the degree in work, 4 bytes a simplex.
type simplicial struct {
	path    string
	tables  []*degreeTable
	labels  []uint32 // dense number → vertex as given, ascending
	centre  []uint32 // dense number → rank of the vertex by (value, vertex); lower stars only
	flag    *flag    // flag complexes only: order by longest edge
	rankOf  [][]uint32
	start   [][]uint32 // per degree: first simplex with each first vertex
	complex *chain.Complex
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
		seen := make([]uint64, top/64+1)
		for _, d := range tables {
			for _, v := range d.verts {
				seen[v/64] |= 1 << (v % 64)
			}
		}
		var out []uint32
		for i, w := range seen {
			for ; w != 0; w &= w - 1 {
				out = append(out, uint32(i*64+bits.TrailingZeros64(w)))
			}
		}
		return out
	}
	var all []uint32
	for _, d := range tables {
		all = append(all, d.verts...)
	}
	slices.Sort(all)
	return slices.Clip(slices.Compact(all))
}

// densify replaces vertices by their numbers among labels.
func densify(tables []*degreeTable, labels []uint32) {
	n := len(labels)
	if n == 0 || labels[n-1] == uint32(n-1) {
		return
	}
	if top := labels[n-1]; uint64(top) < 64+8*uint64(n) {
		to := make([]uint32, top+1)
		for i, v := range labels {
			to[v] = uint32(i)
		}
		for _, d := range tables {
			for i, v := range d.verts {
				d.verts[i] = to[v]
			}
		}
		return
	}
	for _, d := range tables {
		for i, v := range d.verts {
			at, _ := slices.BinarySearch(labels, v)
			d.verts[i] = uint32(at)
		}
	}
}

// sortTable puts a table in lexicographic order.
func sortTable(d *degreeTable, vertices int) {
	n, w := d.len(), d.k+1
	items := make([]Item, n)
	for i := range items {
		items[i].Index = uint32(i)
	}
	width := max(bits.Len(uint(max(vertices-1, 0))), 1)
	for hi := w; hi > 0; {
		lo := max(hi-64/width, 0)
		for i := range items {
			key, s := uint64(0), d.simplex(int(items[i].Index))
			for _, v := range s[lo:hi] {
				key = key<<width | uint64(v)
			}
			items[i].Key = key
		}
		items = Sort(items)
		hi = lo
	}
	d.permute(items)
}

// permute reorders a table; items that stand in order already cost nothing.
func (d *degreeTable) permute(items []Item) {
	same := true
	for i, it := range items {
		same = same && int(it.Index) == i
	}
	if same {
		return
	}
	verts := make([]uint32, 0, len(d.verts))
	for _, it := range items {
		verts = append(verts, d.simplex(int(it.Index))...)
	}
	d.verts = verts
	d.values = permuted(d.values, items)
	d.lines = permuted(d.lines, items)
}

func permuted[T any](from []T, items []Item) []T {
	if from == nil {
		return nil
	}
	to := make([]T, len(items))
	for i, it := range items {
		to[i] = from[it.Index]
	}
	return to
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
	lo, hi := int(start[s[0]]), int(start[s[0]+1])
	w := d.k + 1
	end := hi
	for lo < hi {
		mid := int(uint(lo+hi) >> 1)
		if slices.Compare(d.verts[mid*w+1:mid*w+w], s[1:]) < 0 {
			lo = mid + 1
		} else {
			hi = mid
		}
	}
	return lo, lo < end && slices.Equal(d.verts[lo*w+1:lo*w+w], s[1:])
}

// parallel runs f for 0..n−1 on at most threads goroutines and returns the error of
// the smallest index that has one.
func parallel(n, threads int, f func(i int) error) error {
	errs := make([]error, n)
	var wg sync.WaitGroup
	gate := make(chan struct{}, max(threads, 1))
	for i := range n {
		gate <- struct{}{}
		wg.Go(func() {
			defer func() { <-gate }()
			errs[i] = f(i)
		})
	}
	wg.Wait()
	for _, err := range errs {
		if err != nil {
			return err
		}
	}
	return nil
}

// build sorts, ranks and publishes everything into dir.
func (s *simplicial) build(ctx context.Context, dir string, threads int, p source.Progress) error {
	p.Stage("order")
	n := len(s.tables)
	s.rankOf, s.start = make([][]uint32, n), make([][]uint32, n)
	c := s.complex
	c.Cells = make([]uint32, n)
	c.RowsAtMost2, c.ColsAtMost2 = make([]bool, n), make([]bool, n)
	var published sync.Mutex
	total, done := uint64(0), uint64(0)
	for _, d := range s.tables {
		total += uint64(d.len())
	}
	advance := func(d *degreeTable) {
		published.Lock()
		defer published.Unlock()
		done += uint64(d.len())
		p.Advance(done, total)
	}
	err := parallel(n, threads, func(k int) error {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		d := s.tables[k]
		c.Cells[k] = uint32(d.len())
		s.start[k] = d.firsts(len(s.labels))
		defer advance(d)
		return s.rank(dir, d)
	})
	if err != nil {
		return err
	}
	if s.centre != nil {
		if err := s.writeCentres(dir); err != nil {
			return err
		}
	}
	p.Stage("block")
	done = 0
	err = parallel(n-1, threads, func(i int) error {
		defer advance(s.tables[i+1])
		return s.block(ctx, dir, i+1)
	})
	if err != nil {
		return err
	}
	return c.Write(dir)
}

// rank orders one degree by value or centre and writes its cell table.
func (s *simplicial) rank(dir string, d *degreeTable) error {
	n := d.len()
	items := s.sorted(d)
	rankOf := make([]uint32, n)
	for r, it := range items {
		rankOf[it.Index] = uint32(r)
	}
	s.rankOf[d.k] = rankOf
	cells, err := s.createCells(dir, d)
	if err != nil {
		return err
	}
	defer cells.Discard()
	for r, it := range items {
		if s.centre != nil {
			cells.Centre[r] = uint32(it.Key)
			continue
		}
		cells.Values[r] = d.value(int(it.Index))
		for q, v := range d.simplex(int(it.Index)) {
			cells.Vertices[r*(d.k+1)+q] = s.labels[v]
		}
	}
	return published(cells.Publish(false), cells.Close)
}

// sorted returns the simplices of a degree in their order.
func (s *simplicial) sorted(d *degreeTable) []Item {
	items := make([]Item, d.len())
	for i := range items {
		items[i].Index = uint32(i)
		switch {
		case s.centre != nil:
			items[i].Key = uint64(s.centreOf(d.simplex(i)))
		case s.flag == nil:
			items[i].Key = source.SortKey(d.value(i))
		}
	}
	if s.flag != nil {
		return s.flag.sorted(d, items)
	}
	return Sort(items)
}

func (s *simplicial) createCells(dir string, d *degreeTable) (*chain.Cells, error) {
	if s.centre != nil {
		return chain.CreateStar(chain.CellsPath(dir, d.k), uint32(d.len()))
	}
	return chain.CreateSimplices(chain.CellsPath(dir, d.k), uint32(d.len()), d.k)
}

// published closes what was published.
func published(err error, closing func() error) error {
	if err != nil {
		return err
	}
	return closing()
}

// centreOf is the rank of a simplex's latest vertex.
func (s *simplicial) centreOf(simplex []uint32) uint32 {
	r := uint32(0)
	for _, v := range simplex {
		r = max(r, s.centre[v])
	}
	return r
}

func (s *simplicial) writeCentres(dir string) error {
	out, err := chain.CreateCentres(chain.CentresPath(dir), uint32(len(s.labels)))
	if err != nil {
		return err
	}
	defer out.Discard()
	for v, r := range s.centre {
		out.Index[r] = s.labels[v]
		out.Values[r] = s.tables[0].values[v]
	}
	return published(out.Publish(false), out.Close)
}

// block writes ∂_k.
func (s *simplicial) block(ctx context.Context, dir string, k int) error {
	high, low := s.tables[k], s.tables[k-1]
	m, err := block.Create(chain.BlockPath(dir, k), uint32(low.len()), uint32(high.len()), uint32(k+1), 0)
	if err != nil {
		return err
	}
	defer m.Discard()
	count := make([]uint8, low.len())
	thin := true
	face := make([]uint32, k)
	for j := range high.len() {
		if j%(1<<14) == 0 && ctx.Err() != nil {
			return context.Cause(ctx)
		}
		simplex := high.simplex(j)
		at := int(s.rankOf[k][j]) * (k + 1)
		column := m.Entries[at : at+k+1]
		for q := range simplex {
			copy(face, simplex[:q])
			copy(face[q:], simplex[q+1:])
			i, ok := low.find(face, s.start[k-1])
			if !ok {
				return s.missing(face, high, j)
			}
			if s.centre == nil && low.value(i) > high.value(j) {
				return s.above(low, i, high, j)
			}
			column[q] = s.rankOf[k-1][i]
			if thin {
				count[i]++
				thin = count[i] <= 2
			}
		}
		sortSmall(column)
	}
	s.complex.RowsAtMost2[k], s.complex.ColsAtMost2[k] = thin, k == 1
	return published(m.Publish(false), m.Close)
}

// sortSmall sorts a handful of ranks by insertion.
func sortSmall(c []uint32) {
	for i := 1; i < len(c); i++ {
		for j := i; j > 0 && c[j-1] > c[j]; j-- {
			c[j-1], c[j] = c[j], c[j-1]
		}
	}
}

func (s *simplicial) name(simplex []uint32) string {
	out := make([]uint32, len(simplex))
	for i, v := range simplex {
		out[i] = s.labels[v]
	}
	return fmt.Sprint(out)
}

func (s *simplicial) missing(face []uint32, high *degreeTable, j int) error {
	return source.Broken(s.path, high.line(j), "simplex %s has the face %s, which is not in the file; add it, or let --close add missing faces", s.name(high.simplex(j)), s.name(face))
}

func (s *simplicial) above(low *degreeTable, i int, high *degreeTable, j int) error {
	return source.Broken(s.path, high.line(j), "simplex %s enters at %v, before its face %s of line %d at %v; a face must not be later than its coface",
		s.name(high.simplex(j)), high.value(j), s.name(low.simplex(i)), low.line(i), low.value(i))
}

// duplicate looks for equal neighbours in a sorted table.
func (s *simplicial) duplicate(d *degreeTable) error {
	for i := 1; i < d.len(); i++ {
		if slices.Equal(d.simplex(i-1), d.simplex(i)) {
			lines := []int{d.line(i - 1), d.line(i)}
			sort.Ints(lines)
			return source.Broken(s.path, lines[1], "simplex %s stands in line %d already; each simplex is given once", s.name(d.simplex(i)), lines[0])
		}
	}
	return nil
}

// facetsOf appends the facets of all simplices of d to a table of degree d.k−1, with
// the values of their cofaces.
func (d *degreeTable) facetsOf(to *degreeTable) {
	for i := range d.len() {
		s := d.simplex(i)
		for q := range s {
			to.verts = append(append(to.verts, s[:q]...), s[q+1:]...)
			if d.values != nil {
				to.values = append(to.values, d.values[i])
			}
			if to.lines != nil {
				to.lines = append(to.lines, 0)
			}
		}
	}
}

// merge drops repeated simplices of a sorted table: one that was given (it has a
// line) keeps its value, an added one gets the least. It returns how many it dropped.
func (d *degreeTable) merge() (dropped uint64) {
	w, out := d.k+1, 0
	for i := range d.len() {
		if out > 0 && slices.Equal(d.simplex(out-1), d.simplex(i)) {
			d.mergeInto(out-1, i)
			dropped++
			continue
		}
		copy(d.verts[out*w:], d.simplex(i))
		if d.values != nil {
			d.values[out] = d.values[i]
		}
		if d.lines != nil {
			d.lines[out] = d.lines[i]
		}
		out++
	}
	d.verts = d.verts[:out*w]
	if d.values != nil {
		d.values = d.values[:out]
	}
	if d.lines != nil {
		d.lines = d.lines[:out]
	}
	return dropped
}

func (d *degreeTable) mergeInto(to, from int) {
	given := func(i int) int { return cmp.Compare(d.line(i), 0) }
	switch {
	case given(from) > given(to):
		d.values[to], d.lines[to] = d.values[from], d.lines[from]
	case given(from) == given(to) && d.values != nil:
		d.values[to] = min(d.values[to], d.values[from])
	}
}
