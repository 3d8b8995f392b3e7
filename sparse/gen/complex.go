// Package gen makes filtered complexes for tests and benchmarks: seeded random ones,
// and families whose homology is known in closed form. Only tests and benchmarks
// import it.
//
// Conventions are those of package block. Cells of degree k have ranks 0..n_k−1 in
// their order; Boundary[k][j] lists the facet ranks of k-cell j, ascending, and
// Boundary[0] has one empty column a vertex. Simplices are ordered by (value,
// vertices ascending), those of a lower star by (ranks of the vertices, latest
// first). Equal arguments give equal complexes on any machine. All functions return
// fresh memory and are safe for concurrent use, but for a shared Rand.
//
// Cost: what is written down in full must fit memory; a complex of n cells of
// dimension d takes O(n d² log n) steps.
package gen

import (
	"cmp"
	"slices"
)

// Levels lists simplices by degree: Levels[k][i] has k+1 vertices, ascending; the
// simplices of a degree are in lexicographic order, and every face is there.
type Levels [][][]uint32

// Filtered is a filtered complex in ranks.
type Filtered struct {
	Vertices [][][]uint32 // Vertices[k][j]: vertices of simplex j, ascending; nil where cells are no simplices
	Boundary [][][]uint32
	Values   [][]float64 // Values[k][j], not descending in j; no face is later than its coface
	Betti    []int       // over Z/2, one a degree, where known without a computation; else nil
	Mate     [][]uint32  // Mate[k][i]: the (k+1)-cell that kills k-cell i, or block.None, where known; else nil
}

// Closure adds all faces of the given simplices (vertices in any order, distinct).
func Closure(simplices [][]uint32) Levels {
	var levels Levels
	for _, s := range simplices {
		for len(levels) < len(s) {
			levels = append(levels, nil)
		}
		levels[len(s)-1] = append(levels[len(s)-1], slices.Sorted(slices.Values(s)))
	}
	for k := len(levels) - 1; k >= 0; k-- {
		slices.SortFunc(levels[k], slices.Compare)
		levels[k] = slices.CompactFunc(levels[k], slices.Equal)
		for q := 0; k > 0 && q <= k; q++ {
			for _, s := range levels[k] {
				levels[k-1] = append(levels[k-1], without(s, q))
			}
		}
	}
	return levels
}

// without returns a simplex but for its vertex at place q.
func without(simplex []uint32, q int) []uint32 {
	return slices.Delete(slices.Clone(simplex), q, q+1)
}

// place returns the lexicographic place of a simplex in its level.
func (l Levels) place(simplex []uint32) int {
	i, found := slices.BinarySearchFunc(l[len(simplex)-1], simplex, slices.Compare)
	if !found {
		panic("gen: a face is missing")
	}
	return i
}

// facets returns the lexicographic places of the facets of simplex i of degree k.
func (l Levels) facets(k, i int) []uint32 {
	if k == 0 {
		return nil
	}
	out := make([]uint32, k+1)
	for q := range out {
		out[q] = uint32(l.place(without(l[k][i], q)))
	}
	return out
}

// Constant gives every simplex the value 0: the order is lexicographic.
func (l Levels) Constant() *Filtered {
	values := make([][]float64, len(l))
	for k := range l {
		values[k] = make([]float64, len(l[k]))
	}
	return l.ByValue(values)
}

// ByValue orders simplices by (value, vertices); values[k][i] is that of l[k][i], and
// no face may have a larger one than its coface.
func (l Levels) ByValue(values [][]float64) *Filtered {
	return l.ordered(values, func(k, i, j int) int {
		return cmp.Or(cmp.Compare(values[k][i], values[k][j]), cmp.Compare(i, j))
	})
}

// LowerStar gives a simplex the largest of its vertices' values; simplices are
// ordered by their vertices' ranks in (value, vertex), latest first.
func (l Levels) LowerStar(function []float64) *Filtered {
	order := make([]int, len(function))
	for v := range order {
		order[v] = v
	}
	slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(function[a], function[b]) })
	rank := make([]uint32, len(function))
	for r, v := range order {
		rank[v] = uint32(r)
	}
	keys, values := make([][][]uint32, len(l)), make([][]float64, len(l))
	for k := range l {
		for _, s := range l[k] {
			var key []uint32
			for _, v := range s {
				key = append(key, rank[v])
			}
			slices.SortFunc(key, func(a, b uint32) int { return cmp.Compare(b, a) })
			keys[k] = append(keys[k], key)
			values[k] = append(values[k], function[order[key[0]]])
		}
	}
	return l.ordered(values, func(k, i, j int) int { return slices.Compare(keys[k][i], keys[k][j]) })
}

// ordered puts the simplices into an order and writes boundaries in ranks.
func (l Levels) ordered(values [][]float64, compare func(k, i, j int) int) *Filtered {
	f := &Filtered{Vertices: make([][][]uint32, len(l)), Boundary: make([][][]uint32, len(l)), Values: make([][]float64, len(l))}
	var below []uint32 // lexicographic place → rank, one degree down
	for k := range l {
		order := make([]int, len(l[k]))
		for i := range order {
			order[i] = i
		}
		slices.SortFunc(order, func(i, j int) int { return compare(k, i, j) })
		rank := make([]uint32, len(order))
		f.Boundary[k], f.Values[k] = make([][]uint32, len(order)), make([]float64, len(order))
		f.Vertices[k] = make([][]uint32, len(order))
		for r, i := range order {
			column := l.facets(k, i)
			for q, face := range column {
				column[q] = below[face]
			}
			slices.Sort(column)
			rank[i] = uint32(r)
			f.Boundary[k][r], f.Values[k][r], f.Vertices[k][r] = column, values[k][i], l[k][i]
		}
		below = rank
	}
	return f
}

// Cells counts the cells of each degree.
func (f *Filtered) Cells() []int {
	out := make([]int, len(f.Boundary))
	for k := range out {
		out[k] = len(f.Boundary[k])
	}
	return out
}

// Cut leaves out the cells above degree degrees+1, which stay to kill what lives in
// degree degrees. Betti numbers are known up to there.
func (f *Filtered) Cut(degrees int) *Filtered {
	if degrees+2 >= len(f.Boundary) {
		return f
	}
	out := &Filtered{Boundary: f.Boundary[:degrees+2], Values: f.Values[:degrees+2]}
	if f.Vertices != nil {
		out.Vertices = f.Vertices[:degrees+2]
	}
	if f.Betti != nil {
		out.Betti = f.Betti[:degrees+1]
	}
	return out
}
