package order

import (
	"context"
	"errors"

	"pairloom/sparse/block"
)

const (
	axesMost  = 4       // of a grid
	lineAxis  = 3       // the last axis: points of a line are neighbours in memory
	pieceMost = 1 << 18 // points between two looks at the context; even, so that parities hold
)

// doubled is the doubled grid: one point per cell, coordinates right-aligned in
// four axes, missing axes of size 1 in front. The degree of a cell is its count of
// odd coordinates. Centres have coordinate 2x (vertices) or 2x+1 (top cells) where
// the voxel has x.
type doubled struct {
	dim    int
	size   [axesMost]int
	stride [axesMost]int
	centre [axesMost]int // parity of a centre's coordinate
	top    bool          // centres are top cells
	at     []uint32      // per point: rank of its centre, later of the cell; block.None outside
}

// newDoubled lays out the doubled grid of an array without taking its memory.
func newDoubled(shape []int, top bool) *doubled {
	d := &doubled{top: top}
	for a := range d.size {
		d.size[a] = 1
	}
	a := axesMost
	for i := len(shape) - 1; i >= 0; i-- {
		switch {
		case top:
			a--
			d.size[a], d.centre[a] = 2*shape[i]+1, 1
		case shape[i] > 1: // one vertex along an axis makes no cells there
			a--
			d.size[a] = 2*shape[i] - 1
		}
	}
	d.dim = axesMost - a
	d.stride[lineAxis] = 1
	for a := lineAxis; a > 0; a-- {
		d.stride[a-1] = d.stride[a] * d.size[a]
	}
	return d
}

// counts is the number of cells of each degree of the whole grid; float64, since
// the product may be beyond any integer.
func (d *doubled) counts() []float64 {
	counts := make([]float64, d.dim+1)
	counts[0] = 1
	for _, n := range d.size[axesMost-d.dim:] {
		odd := float64(n / 2)
		for k := d.dim; k >= 0; k-- {
			counts[k] *= float64(n) - odd
			if k > 0 {
				counts[k] += counts[k-1] * odd
			}
		}
	}
	return counts
}

// lines is the number of lines along the last axis.
func (d *doubled) lines() int { return d.size[0] * d.size[1] * d.size[2] }

// point is where a line starts: its coordinates on the first three axes and its offset.
type point struct {
	z    [lineAxis]int
	base int
}

// walk visits lines lo..hi−1 in order and looks at the context now and then.
func (d *doubled) walk(ctx context.Context, lo, hi int, visit func(point) error) error {
	var pt point
	rest, seen := lo, 0
	for a := lineAxis - 1; a >= 0; a-- {
		pt.z[a] = rest % d.size[a]
		rest /= d.size[a]
	}
	for pt.base = lo * d.size[lineAxis]; lo < hi; lo++ {
		if seen += d.size[lineAxis]; seen >= pieceMost {
			if seen = 0; ctx.Err() != nil {
				return ctx.Err()
			}
		}
		if err := visit(pt); err != nil {
			return err
		}
		pt.base += d.size[lineAxis]
		for a := lineAxis - 1; a >= 0; a-- {
			if pt.z[a]++; pt.z[a] < d.size[a] {
				break
			}
			pt.z[a] = 0
		}
	}
	return nil
}

// odd counts the odd coordinates among a line's first three.
func (pt point) odd() int { return pt.z[0]&1 + pt.z[1]&1 + pt.z[2]&1 }

// cells visits the pieces of lines lo..hi−1 that hold k-cells: points
// from, from+2, … below to, in the order of their coordinates.
func (d *doubled) cells(ctx context.Context, k, lo, hi int, visit func(pt point, from, to int) error) error {
	return d.walk(ctx, lo, hi, func(pt point) error {
		parity := k - pt.odd()
		if parity != 0 && parity != 1 {
			return nil
		}
		for x := parity; x < d.size[lineAxis]; x += pieceMost {
			if x >= pieceMost && ctx.Err() != nil {
				return ctx.Err()
			}
			if err := visit(pt, pt.base+x, pt.base+min(x+pieceMost, d.size[lineAxis])); err != nil {
				return err
			}
		}
		return nil
	})
}

// chunks cuts the lines into even parts, several per goroutine.
func (d *doubled) chunks(ctx context.Context, threads int, task func(lo, hi int) error) error {
	lines := d.lines()
	parts := min(lines, 8*threads)
	return gridParallel(ctx, threads, parts, func(i int) error {
		return task(lines/parts*i+min(i, lines%parts), lines/parts*(i+1)+min(i+1, lines%parts))
	})
}

// place takes the memory of the doubled grid and puts the ranks of centres, given
// in C order of the array, at their points.
func (d *doubled) place(ctx context.Context, ranks []uint32) error {
	d.at = make([]uint32, d.lines()*d.size[lineAxis])
	n := (d.size[lineAxis] + 1) / 2
	first := d.centre[lineAxis]
	if first == 1 {
		n--
	}
	return d.walk(ctx, 0, d.lines(), func(pt point) error {
		for a, z := range pt.z {
			if z&1 != d.centre[a] {
				return nil
			}
		}
		line := d.at[pt.base+first : pt.base+d.size[lineAxis]]
		for i, r := range ranks[:n] {
			line[2*i] = r
		}
		ranks = ranks[n:]
		return nil
	})
}

// spread gives every point the rank of its cell's centre: the largest of the
// vertices or the least of the top cells, axis by axis. block.None, the largest
// number, stays on a cell with a vertex outside and leaves a face of any top cell.
func (d *doubled) spread(ctx context.Context, threads int) error {
	for a := lineAxis; a >= axesMost-d.dim; a-- {
		err := d.chunks(ctx, threads, func(lo, hi int) error {
			return d.walk(ctx, lo, hi, func(pt point) error {
				if d.due(pt, a) {
					d.spreadLine(pt, a)
				}
				return nil
			})
		})
		if err != nil {
			return err
		}
	}
	return nil
}

// due says whether axis a fills a line: centre's parity before a, the other parity on a.
func (d *doubled) due(pt point, a int) bool {
	for b, z := range pt.z[:min(a+1, lineAxis)] {
		if (z&1 == d.centre[b]) != (b < a) {
			return false
		}
	}
	return true
}

func (d *doubled) spreadLine(pt point, a int) {
	to := d.at[pt.base : pt.base+d.size[lineAxis]]
	switch {
	case a == lineAxis && d.top:
		to[0], to[len(to)-1] = to[1], to[len(to)-2]
		for x := 2; x < len(to)-1; x += 2 {
			to[x] = min(to[x-1], to[x+1])
		}
		return
	case a == lineAxis:
		for x := 2; x < len(to); x += 2 {
			to[x-1] = max(to[x-2], to[x])
		}
		return
	}
	s := d.stride[a]
	switch {
	case pt.z[a] == 0: // only faces of top cells lie on the rim
		copy(to, d.at[pt.base+s:])
	case pt.z[a] == d.size[a]-1:
		copy(to, d.at[pt.base-s:])
	case d.top:
		below, above := d.at[pt.base-s:][:len(to)], d.at[pt.base+s:][:len(to)]
		for x := range to {
			to[x] = min(below[x], above[x])
		}
	default:
		below, above := d.at[pt.base-s:][:len(to)], d.at[pt.base+s:][:len(to)]
		for x := range to {
			to[x] = max(below[x], above[x])
		}
	}
}

// errThird ends the search of rowsAtMostTwo.
var errThird = errors.New("a row has a third entry")

// rowsAtMostTwo says whether every (k−1)-cell is a facet of at most two k-cells.
// It stops at the first that is not: inside a grid that is soon.
func (d *doubled) rowsAtMostTwo(ctx context.Context, k int) (bool, error) {
	err := d.cells(ctx, k-1, 0, d.lines(), func(pt point, from, to int) error {
		for p := from; p < to; p += 2 {
			if d.cofacets(pt, p) > 2 {
				return errThird
			}
		}
		return nil
	})
	if errors.Is(err, errThird) {
		return false, nil
	}
	return err == nil, err
}

// cofacets counts the cofacets of the cell at p, on the line pt.
func (d *doubled) cofacets(pt point, p int) (n int) {
	if d.at[p] == block.None {
		return 0
	}
	for a := axesMost - d.dim; a < axesMost; a++ {
		z := p - pt.base
		if a < lineAxis {
			z = pt.z[a]
		}
		if z&1 == 1 {
			continue
		}
		if z > 0 && d.at[p-d.stride[a]] != block.None {
			n++
		}
		if z+1 < d.size[a] && d.at[p+d.stride[a]] != block.None {
			n++
		}
	}
	return n
}
