package order

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"sync"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/table"
)

// simplicial turns sorted tables of simplices into a filtered complex. Each degree is
// put in order (by value; for lower stars lexicographic order is the order); facets are
// found by binary search among the simplices with the same first vertex, while cofaces
// are walked in lexicographic order, which keeps the searches in cache; columns are
// written where their rank is.
//
// Time: O(entries · log of a vertex's simplices). Memory beside the tables: 4 bytes a
// simplex, 16 more a simplex of the degrees being ordered, and the pages of the files
// being written.
type simplicial struct {
	path    string
	tables  []*degreeTable
	labels  []uint32  // dense number → vertex as given: ascending, or by rank for lower stars
	centres []float64 // lower stars: value of each vertex, by rank
	complex *chain.Complex

	rankOf [][]uint32 // per degree: lexicographic index → rank; nil: they are equal
	ranks  []array[uint32]
	start  [][]uint32 // per degree: first simplex with each first vertex
	made   []string   // files published so far
	lock   sync.Mutex // guards made and done
	done   uint64     // simplices of the stage that are done
}

// free gives back all memory of the tables.
func (s *simplicial) free() {
	for _, d := range s.tables {
		d.free()
	}
	for k := range s.ranks {
		s.ranks[k].free()
	}
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

// build orders and publishes everything into dir; on an error it leaves no file there.
func (s *simplicial) build(ctx context.Context, dir string, threads int, p source.Progress) error {
	err := s.publish(ctx, dir, threads, p)
	if err != nil {
		for _, path := range s.made {
			os.Remove(path)
		}
	}
	return err
}

func (s *simplicial) publish(ctx context.Context, dir string, threads int, p source.Progress) error {
	n, c := len(s.tables), s.complex
	s.rankOf, s.start, s.ranks = make([][]uint32, n), make([][]uint32, n), make([]array[uint32], n)
	c.Cells = make([]uint32, n)
	c.RowsAtMost2, c.ColsAtMost2 = make([]bool, n), make([]bool, n)
	p.Stage("order")
	if s.centres != nil {
		if err := s.writeCentres(dir); err != nil {
			return err
		}
	}
	err := s.each(ctx, 0, threads, p, func(k int) error {
		c.Cells[k] = uint32(s.tables[k].len())
		s.start[k] = s.tables[k].firsts(len(s.labels))
		return s.rank(ctx, dir, s.tables[k])
	})
	if err != nil {
		return err
	}
	p.Stage("block")
	err = s.each(ctx, 1, threads, p, func(k int) error { return s.block(ctx, dir, k) })
	if err != nil {
		return err
	}
	if err := c.Write(dir); err != nil {
		s.made = append(s.made, filepath.Join(dir, "complex.json"))
		return err
	}
	return nil
}

// each runs f for the degrees from first on, and reports progress.
func (s *simplicial) each(ctx context.Context, first, threads int, p source.Progress, f func(k int) error) error {
	total := uint64(0)
	for _, d := range s.tables[first:] {
		total += uint64(d.len())
	}
	s.done = 0
	return parallel(len(s.tables)-first, threads, func(i int) error {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		if err := f(first + i); err != nil {
			return err
		}
		s.lock.Lock()
		defer s.lock.Unlock()
		s.done += uint64(s.tables[first+i].len())
		p.Advance(s.done, total)
		return nil
	})
}

// keep notes a published file, for build to remove should something fail later, and
// closes it.
func (s *simplicial) keep(path string, err error, closing func() error) error {
	if err != nil {
		return err
	}
	s.lock.Lock()
	s.made = append(s.made, path)
	s.lock.Unlock()
	return closing()
}

// rank orders one degree and writes its cell table.
func (s *simplicial) rank(ctx context.Context, dir string, d *degreeTable) error {
	items, free := s.sorted(d)
	defer free()
	if items != nil {
		rankOf := s.ranks[d.k].make(d.len())
		for r, it := range items {
			rankOf[uint32(it)] = uint32(r)
		}
		s.rankOf[d.k] = rankOf
	}
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	path := chain.CellsPath(dir, d.k)
	cells, err := s.createCells(path, d)
	if err != nil {
		return err
	}
	defer cells.Discard()
	if s.centres != nil {
		for r := range cells.Centre {
			cells.Centre[r] = d.verts[r*(d.k+1)]
		}
	} else {
		s.fill(cells, d, items)
	}
	return s.keep(path, cells.Publish(false), cells.Close)
}

// fill writes vertices and values of simplices in their order (nil: as they stand).
func (s *simplicial) fill(cells *chain.Cells, d *degreeTable, items []uint64) {
	w := d.k + 1
	for r := range d.len() {
		i := r
		if items != nil {
			i = int(uint32(items[r]))
		}
		to := cells.Vertices[r*w : r*w+w]
		for q, v := range d.verts[i*w : i*w+w] {
			to[q] = s.labels[v]
		}
		if d.values != nil {
			cells.Values[r] = d.values[i]
		}
	}
}

// sorted returns words whose low halves are the simplices of a degree in their order,
// nil if they stand in it, and what frees their memory.
func (s *simplicial) sorted(d *degreeTable) (items []uint64, free func()) {
	var a, b array[uint64]
	if d.values == nil || inOrder(d.values) {
		return nil, func() {}
	}
	items = a.make(d.len())
	d.byValue().sort(items, b.make(d.len()))
	b.free()
	return items, a.free
}

func inOrder(values []float64) bool {
	for i := 1; i < len(values); i++ {
		if values[i-1] > values[i] {
			return false
		}
	}
	return true
}

func (s *simplicial) createCells(path string, d *degreeTable) (*chain.Cells, error) {
	if s.centres != nil {
		return chain.CreateStar(path, uint32(d.len()))
	}
	return chain.CreateSimplices(path, uint32(d.len()), d.k)
}

// published closes what was published.
func published(err error, closing func() error) error {
	if err != nil {
		return err
	}
	return closing()
}

func (s *simplicial) writeCentres(dir string) error {
	path := chain.CentresPath(dir)
	out, err := chain.CreateCentres(path, uint32(len(s.labels)))
	if err != nil {
		return err
	}
	defer out.Discard()
	copy(out.Index, s.labels)
	copy(out.Values, s.centres)
	return s.keep(path, out.Publish(false), out.Close)
}

// block writes ∂_k.
func (s *simplicial) block(ctx context.Context, dir string, k int) error {
	path := chain.BlockPath(dir, k)
	m, err := block.Create(path, uint32(s.tables[k-1].len()), uint32(s.tables[k].len()), uint32(k+1), 0)
	if err != nil {
		return err
	}
	defer m.Discard()
	if err := s.columns(ctx, k, m.Entries); err != nil {
		return err
	}
	s.complex.ColsAtMost2[k] = k == 1
	return s.keep(path, m.Publish(false), m.Close)
}

// columns fills the entries of ∂_k and finds out whether its rows have at most two.
func (s *simplicial) columns(ctx context.Context, k int, entries []uint32) error {
	high, low, start := s.tables[k], s.tables[k-1], s.start[k-1]
	highRank, lowRank := s.rankOf[k], s.rankOf[k-1]
	count, thin := make([]uint8, low.len()), true
	face := make([]uint32, k)
	for j := range high.len() {
		if j%(1<<14) == 0 && ctx.Err() != nil {
			return context.Cause(ctx)
		}
		simplex, at := high.simplex(j), j
		if highRank != nil {
			at = int(highRank[j])
		}
		column := entries[at*(k+1) : at*(k+1)+k+1]
		copy(face, simplex[1:])
		for q := 0; ; q++ { // face is the simplex without its q-th vertex
			i, ok := low.find(face, start)
			if !ok {
				return s.missing(face, simplex)
			}
			if low.values != nil && low.values[i] > high.values[j] {
				return s.above(low, i, high, j)
			}
			if thin {
				count[i]++
				thin = count[i] <= 2
			}
			column[q] = uint32(i)
			if lowRank != nil {
				column[q] = lowRank[i]
			}
			if q == k {
				break
			}
			face[q] = simplex[q]
		}
		sortSmall(column)
	}
	s.complex.RowsAtMost2[k] = thin
	return nil
}

// sortSmall sorts a handful of numbers by insertion.
func sortSmall(c []uint32) {
	for i := 1; i < len(c); i++ {
		for j := i; j > 0 && c[j-1] > c[j]; j-- {
			c[j-1], c[j] = c[j], c[j-1]
		}
	}
}

// given returns the vertices of a simplex as they stand in the input.
func (s *simplicial) given(simplex []uint32) []uint32 {
	out := make([]uint32, len(simplex))
	for i, v := range simplex {
		out[i] = s.labels[v]
	}
	return out
}

func (s *simplicial) name(simplex []uint32) string { return fmt.Sprint(s.given(simplex)) }

// linesOf reads a list of simplices again and returns the lines on which one stands:
// keeping every line's number would cost memory in the runs that need none.
func (s *simplicial) linesOf(simplex []uint32) (lines []int) {
	in, err := table.Open(s.path)
	if err != nil {
		return nil
	}
	defer in.Close()
	want, got := s.given(simplex), make([]uint32, len(simplex))
	for in.Next() {
		f := in.Fields()
		if len(f) != 1+len(want) {
			continue
		}
		for i, b := range f[1:] {
			got[i], _ = table.ParseUint32(b)
		}
		sortSmall(got)
		if slices.Equal(got, want) {
			lines = append(lines, in.Line())
		}
	}
	return lines
}

// lineOf is the first line of a simplex, 0 if it stands on none.
func (s *simplicial) lineOf(simplex []uint32) int {
	if lines := s.linesOf(simplex); len(lines) > 0 {
		return lines[0]
	}
	return 0
}

func (s *simplicial) missing(face, simplex []uint32) error {
	return source.Broken(s.path, s.lineOf(simplex), "simplex %s has the face %s, which is not in the file; add it, or let --close add missing faces", s.name(simplex), s.name(face))
}

func (s *simplicial) above(low *degreeTable, i int, high *degreeTable, j int) error {
	return source.Broken(s.path, s.lineOf(high.simplex(j)), "simplex %s enters at %v, before its face %s of line %d at %v; a face must not be later than its coface",
		s.name(high.simplex(j)), high.value(j), s.name(low.simplex(i)), s.lineOf(low.simplex(i)), low.value(i))
}

func (s *simplicial) duplicate(simplex []uint32) error {
	lines := append(s.linesOf(simplex), 0, 0)
	return source.Broken(s.path, lines[1], "simplex %s stands in line %d already; each simplex is given once", s.name(simplex), lines[0])
}
