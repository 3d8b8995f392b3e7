package gen

import (
	"math"
	"slices"

	"pairloom/sparse/block"
)

// Sets draws count simplices of dimension at most top on the vertices 0..n−1.
func (r *Rand) Sets(n, top, count int) [][]uint32 {
	sets := make([][]uint32, count)
	for i := range sets {
		for _, v := range r.Perm(n)[:1+r.IntN(min(top+1, n))] {
			sets[i] = append(sets[i], uint32(v))
		}
	}
	return sets
}

// Simplicial closes random simplices and draws values 0, 1, … so that faces are
// never later; few levels make many ties within and between degrees.
func Simplicial(r *Rand, n, top, count, levels int) *Filtered {
	l := Closure(r.Sets(n, top, count))
	values := make([][]float64, len(l))
	for k := range l {
		values[k] = make([]float64, len(l[k]))
		for i := range l[k] {
			v := float64(r.IntN(levels))
			for _, face := range l.facets(k, i) {
				v = max(v, values[k-1][face])
			}
			values[k][i] = v
		}
	}
	return l.ByValue(values)
}

// Star is the lower star of a random function with values 0..levels−1 on the closure
// of random simplices; it returns the function too.
func Star(r *Rand, n, top, count, levels int) (*Filtered, []float64) {
	function := make([]float64, n)
	for v := range function {
		function[v] = float64(r.IntN(levels))
	}
	return Closure(r.Sets(n, top, count)).LowerStar(function), function
}

// Array is a dense array in C order.
type Array struct {
	Shape  []int
	Values []float64
}

// Grid draws an array of the given number of axes, each up to side long, with values
// 0..levels−1; with holes every fifth value or so is NaN, but never all.
func Grid(r *Rand, axes, side, levels int, holes bool) Array {
	a, n := Array{}, 1
	for range axes {
		a.Shape = append(a.Shape, 1+r.IntN(side))
		n *= a.Shape[len(a.Shape)-1]
	}
	for range n {
		v := float64(r.IntN(levels))
		if holes && r.Chance(1, 5) {
			v = math.NaN()
		}
		a.Values = append(a.Values, v)
	}
	if !slices.ContainsFunc(a.Values, func(v float64) bool { return !math.IsNaN(v) }) {
		a.Values[r.IntN(n)] = 0
	}
	return a
}

// Chain draws a general filtered chain complex over Z/2 that is no complex of cells.
// It begins with elementary pieces, betti[k] single k-cells and ranks[k] pairs of a
// (k−1)-cell that a k-cell kills (ranks[0] is 0), shuffles each degree, and then adds
// earlier basis elements to later ones, mixing times a cell. Such additions keep the
// pairs (Barannikov 1994), so Betti and Mate are known. Columns have any length, 0
// too. len(ranks) = len(betti). O(mixing · cells²) steps.
func Chain(r *Rand, betti, ranks []int, mixing int) *Filtered {
	f := &Filtered{Betti: slices.Clone(betti), Boundary: make([][][]uint32, len(betti)), Mate: make([][]uint32, len(betti))}
	var below []int // (k−1)-cells that are to be killed
	columns := make([][][]bool, len(betti))
	for k := range betti {
		kills, killed, rows := ranks[k], 0, 0
		if k > 0 {
			rows = len(f.Mate[k-1])
		}
		if k+1 < len(betti) {
			killed = ranks[k+1]
		}
		cells := r.Perm(betti[k] + kills + killed)
		columns[k] = make([][]bool, len(cells))
		for j := range columns[k] {
			columns[k][j] = make([]bool, rows)
		}
		for at, i := range below {
			f.Mate[k-1][i] = uint32(cells[at])
			columns[k][cells[at]][i] = true
		}
		f.Mate[k] = slices.Repeat([]uint32{block.None}, len(cells))
		below = cells[kills : kills+killed]
	}
	for k := range columns {
		for range mixing * len(columns[k]) {
			mix(r, columns, k)
		}
	}
	for k := range columns {
		f.Boundary[k] = lists(columns[k])
	}
	f.Values = r.climb(f.Boundary)
	return f
}

// mix adds a k-cell i to a later one, j: column i to column j of ∂_k, row j to row i
// of ∂_(k+1).
func mix(r *Rand, columns [][][]bool, k int) {
	i, j := r.IntN(len(columns[k])), r.IntN(len(columns[k]))
	if i == j {
		return
	}
	i, j = min(i, j), max(i, j)
	from, to := columns[k][i], columns[k][j]
	for row, one := range from {
		to[row] = to[row] != one
	}
	if k+1 < len(columns) {
		for _, c := range columns[k+1] {
			c[i] = c[i] != c[j]
		}
	}
}

func lists(columns [][]bool) [][]uint32 {
	out := make([][]uint32, len(columns))
	for j, c := range columns {
		for row, one := range c {
			if one {
				out[j] = append(out[j], uint32(row))
			}
		}
	}
	return out
}

// climb draws values that fit the order: not descending within a degree, no face
// later than its coface.
func (r *Rand) climb(boundary [][][]uint32) [][]float64 {
	values := make([][]float64, len(boundary))
	for k := range boundary {
		last := 0.0
		for _, column := range boundary[k] {
			for _, row := range column {
				last = max(last, values[k-1][row])
			}
			last += float64(r.IntN(2))
			values[k] = append(values[k], last)
		}
	}
	return values
}
