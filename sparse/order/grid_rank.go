package order

import (
	"context"
	"errors"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
)

// rank turns the ranks of centres on the doubled grid into ranks of cells, and
// writes the cell tables. Degrees without cells at the end are left away.
func (g *gridJob) rank(ctx context.Context, centres uint32) error {
	counts := make([]uint32, g.last+1)
	total := uint64(sumFloat(g.grid.counts()[:g.last+1]))
	err := gridParallel(ctx, g.threads, g.last+1, func(i int) error {
		k := g.last - i // the rich degrees in the middle are not left for the end
		n, err := g.rankDegree(ctx, k, centres)
		counts[k] = n
		g.advance(uint64(n), total)
		return err
	})
	for k := 0; k <= g.last && counts[k] > 0; k++ {
		g.cells = counts[:k+1]
	}
	return err
}

// rankDegree is one counting sort: stars are counted, the counts summed up, and
// every cell takes the next rank of its star.
func (g *gridJob) rankDegree(ctx context.Context, k int, centres uint32) (uint32, error) {
	d := g.grid
	star := make([]uint32, centres) // cells in the star of a centre, then the next rank in it
	if k == d.centreDegree() {      // these are ranks already
		for c := range star {
			star[c] = uint32(c) + 1
		}
		return centres, g.tableOf(k, centres, star)
	}
	if err := d.points(ctx, k, func(c *uint32) { star[*c]++ }); err != nil {
		return 0, err
	}
	sum := uint32(0)
	for c, n := range star {
		star[c], sum = sum, sum+n
	}
	if sum == 0 {
		return 0, nil
	}
	err := d.points(ctx, k, func(c *uint32) {
		r := star[*c]
		star[*c]++
		*c = r
	})
	if err != nil {
		return 0, err
	}
	return sum, g.tableOf(k, sum, star)
}

// centreDegree is the degree of the centres.
func (d *doubled) centreDegree() int {
	if d.top {
		return d.dim
	}
	return 0
}

// points visits the k-cells inside the complex in the order of their points.
func (d *doubled) points(ctx context.Context, k int, visit func(at *uint32)) error {
	return d.cells(ctx, k, 0, d.lines(), func(_ point, from, to int) error {
		at := d.at[from:to]
		for x := 0; x < len(at); x += 2 {
			if at[x] != block.None {
				visit(&at[x])
			}
		}
		return nil
	})
}

// tableOf writes the cell table of degree k from the ends of the stars.
func (g *gridJob) tableOf(k int, n uint32, ends []uint32) error {
	path := chain.CellsPath(g.dir, k)
	table, err := chain.CreateStar(path, n)
	if err != nil {
		return err
	}
	from := uint32(0)
	for c, end := range ends {
		for r := range table.Centre[from:end] {
			table.Centre[int(from)+r] = uint32(c)
		}
		from = end
	}
	return g.publish(path, table)
}

// blocks writes boundary-1 … boundary-top.
func (g *gridJob) blocks(ctx context.Context) error {
	total := uint64(0)
	for _, n := range g.cells[1:] {
		total += uint64(n)
	}
	g.done.Store(0)
	for k := len(g.cells) - 1; k > 0; k-- {
		if err := g.block(ctx, k, total); err != nil {
			return err
		}
	}
	return nil
}

// block writes ∂_k in one pass over the doubled grid: reads are sequential, a
// column is written where its rank says.
func (g *gridJob) block(ctx context.Context, k int, total uint64) error {
	path := chain.BlockPath(g.dir, k)
	m, err := block.Create(path, g.cells[k-1], g.cells[k], uint32(2*k), 0)
	if err != nil {
		return err
	}
	d := g.grid
	err = d.chunks(ctx, g.threads, func(lo, hi int) error {
		seen := 0
		err := d.cells(ctx, k, lo, hi, func(pt point, from, to int) error {
			seen += (to - from + 1) / 2
			columns(k, d.at, m.Entries, from, to, d.oddStrides(pt, from))
			return nil
		})
		g.advance(uint64(seen), total)
		return err
	})
	if err != nil {
		m.Discard()
		return err
	}
	return g.publish(path, m)
}

// oddStrides lists the strides of the axes along which the cell at p has facets.
func (d *doubled) oddStrides(pt point, p int) (strides [axesMost]int) {
	n := 0
	if (p-pt.base)&1 == 1 {
		strides[n], n = 1, n+1
	}
	for a := lineAxis - 1; a >= 0; a-- {
		if pt.z[a]&1 == 1 {
			strides[n], n = d.stride[a], n+1
		}
	}
	return strides
}

var errColumns = errors.New("order: a cell of a degree that no grid has")

// columns writes the columns of the k-cells at from, from+2, … below to.
func columns(k int, at, out []uint32, from, to int, s [axesMost]int) {
	switch k {
	case 1:
		columns1(at, out, from, to, s[0])
	case 2:
		columns2(at, out, from, to, s[0], s[1])
	case 3:
		columns3(at, out, from, to, s[0], s[1], s[2])
	case 4:
		columns4(at, out, from, to, s[0], s[1], s[2], s[3])
	default:
		panic(errColumns)
	}
}

func columns1(at, out []uint32, from, to, s int) {
	for p := from; p < to; p += 2 {
		if r := at[p]; r != block.None {
			col := (*[2]uint32)(out[2*uint64(r):])
			a, b := at[p-s], at[p+s]
			col[0], col[1] = min(a, b), max(a, b)
		}
	}
}

func columns2(at, out []uint32, from, to, s, t int) {
	for p := from; p < to; p += 2 {
		if r := at[p]; r != block.None {
			sort4((*[4]uint32)(out[4*uint64(r):]), at[p-s], at[p+s], at[p-t], at[p+t])
		}
	}
}

func columns3(at, out []uint32, from, to, s, t, u int) {
	for p := from; p < to; p += 2 {
		if r := at[p]; r != block.None {
			sort6((*[6]uint32)(out[6*uint64(r):]), at[p-s], at[p+s], at[p-t], at[p+t], at[p-u], at[p+u])
		}
	}
}

func columns4(at, out []uint32, from, to, s, t, u, v int) {
	for p := from; p < to; p += 2 {
		if r := at[p]; r != block.None {
			sort8((*[8]uint32)(out[8*uint64(r):]), at[p-s], at[p+s], at[p-t], at[p+t], at[p-u], at[p+u], at[p-v], at[p+v])
		}
	}
}

// sort4, sort6 and sort8 are sorting networks of 5, 12 and 19 comparators, written
// in layers; they have no branches.
func sort4(to *[4]uint32, a, b, c, d uint32) {
	a, b = min(a, b), max(a, b)
	c, d = min(c, d), max(c, d)
	a, c = min(a, c), max(a, c)
	b, d = min(b, d), max(b, d)
	to[0], to[1], to[2], to[3] = a, min(b, c), max(b, c), d
}

func sort6(to *[6]uint32, a, b, c, d, e, f uint32) {
	a, f = min(a, f), max(a, f)
	b, d = min(b, d), max(b, d)
	c, e = min(c, e), max(c, e)
	b, c = min(b, c), max(b, c)
	d, e = min(d, e), max(d, e)
	a, d = min(a, d), max(a, d)
	c, f = min(c, f), max(c, f)
	a, b = min(a, b), max(a, b)
	c, d = min(c, d), max(c, d)
	e, f = min(e, f), max(e, f)
	to[0], to[1], to[2] = a, min(b, c), max(b, c)
	to[3], to[4], to[5] = min(d, e), max(d, e), f
}

func sort8(to *[8]uint32, a, b, c, d, e, f, g, h uint32) {
	a, c = min(a, c), max(a, c)
	b, d = min(b, d), max(b, d)
	e, g = min(e, g), max(e, g)
	f, h = min(f, h), max(f, h)
	a, e = min(a, e), max(a, e)
	b, f = min(b, f), max(b, f)
	c, g = min(c, g), max(c, g)
	d, h = min(d, h), max(d, h)
	a, b = min(a, b), max(a, b)
	c, d = min(c, d), max(c, d)
	e, f = min(e, f), max(e, f)
	g, h = min(g, h), max(g, h)
	c, e = min(c, e), max(c, e)
	d, f = min(d, f), max(d, f)
	b, e = min(b, e), max(b, e)
	d, g = min(d, g), max(d, g)
	to[0], to[1], to[2], to[3] = a, min(b, c), max(b, c), min(d, e)
	to[4], to[5], to[6], to[7] = max(d, e), min(f, g), max(f, g), h
}
