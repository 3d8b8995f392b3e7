package gen

import (
	"math/bits"
	"slices"
)

// Cliques returns the flag complex of the graph on n vertices in which i < j are
// joined when joined(i, j), cut above degree top (−1: nowhere).
func Cliques(n, top int, joined func(i, j int) bool) Levels {
	edge := make([]bool, n*n)
	for i := range n {
		for j := i + 1; j < n; j++ {
			edge[i*n+j] = joined(i, j)
		}
	}
	var level [][]uint32
	for v := range n {
		level = append(level, []uint32{uint32(v)})
	}
	var levels Levels
	for len(level) > 0 {
		levels = append(levels, level)
		if len(levels) == top+1 {
			break
		}
		level = longer(level, n, edge)
	}
	return levels
}

// longer returns the cliques of one vertex more, each made from its earliest facet.
func longer(level [][]uint32, n int, edge []bool) (next [][]uint32) {
	for _, s := range level {
		for w := int(s[len(s)-1]) + 1; w < n; w++ {
			all := true
			for _, v := range s {
				all = all && edge[int(v)*n+w]
			}
			if all {
				next = append(next, append(append(make([]uint32, 0, len(s)+1), s...), uint32(w)))
			}
		}
	}
	return next
}

// Skeleton is the k-skeleton of the n-simplex, 0 ≤ k ≤ n. Reduced homology: rank
// C(n, k+1) in degree k.
func Skeleton(n, k int) *Filtered {
	f := Cliques(n+1, k, func(int, int) bool { return true }).Constant()
	f.Betti = wedge(k+1, k, choose(n, k+1))
	return f
}

// choose is the binomial coefficient.
func choose(n, k int) int {
	c := 1
	for i := range k {
		c = c * (n - i) / (i + 1)
	}
	return c
}

// wedge returns the Betti numbers of a wedge of spheres of one dimension; degrees is
// how many numbers there are. No sphere: a point.
func wedge(degrees, dimension, spheres int) []int {
	b := make([]int, degrees)
	b[0] = 1
	if spheres > 0 {
		b[dimension] += spheres
	}
	return b
}

// Matching is the matching complex M_n: its vertices are the pairs from 0..n−1 in
// lexicographic order, its faces the sets of disjoint pairs (Bouc 1992).
func Matching(n int) *Filtered {
	var pair []uint64
	for i := range n {
		for j := i + 1; j < n; j++ {
			pair = append(pair, 1<<i|1<<j)
		}
	}
	return disjoint(pair)
}

// Chessboard is the chessboard complex M_{m,n}: its vertices are the squares (i, j),
// numbered i·n+j, its faces the sets of rooks that do not attack each other (Garst
// 1979; Friedman, Hanlon 1998).
func Chessboard(m, n int) *Filtered {
	var square []uint64
	for i := range m {
		for j := range n {
			square = append(square, 1<<i|1<<(m+j))
		}
	}
	return disjoint(square)
}

// disjoint has sets of at most 64 points for vertices and families of disjoint ones for faces.
func disjoint(sets []uint64) *Filtered {
	return Cliques(len(sets), -1, func(i, j int) bool { return sets[i]&sets[j] == 0 }).Constant()
}

// CrossPolytope is the boundary of the n-dimensional cross-polytope, a sphere of
// dimension n−1; vertices 2i and 2i+1 are opposite.
func CrossPolytope(n int) *Filtered {
	f := Cliques(2*n, -1, func(i, j int) bool { return i/2 != j/2 }).Constant()
	f.Betti = wedge(n, n-1, 1)
	return f
}

// IndependentPath is the independence complex of the path on n ≥ 1 vertices, empty of
// homology or a sphere (Kozlov 1999).
func IndependentPath(n int) *Filtered {
	f := Cliques(n, -1, func(i, j int) bool { return j-i != 1 }).Constant()
	k, spheres := n/3, 1
	switch n % 3 {
	case 0:
		k--
	case 1:
		spheres = 0
	}
	f.Betti = wedge(len(f.Boundary), k, spheres)
	return f
}

// IndependentCycle is the independence complex of the cycle on n ≥ 3 vertices, one or
// two spheres (Kozlov 1999).
func IndependentCycle(n int) *Filtered {
	f := Cliques(n, -1, func(i, j int) bool { return j-i != 1 && j-i != n-1 }).Constant()
	k, spheres := n/3-1, 1
	switch n % 3 {
	case 0:
		spheres = 2
	case 2:
		k++
	}
	f.Betti = wedge(len(f.Boundary), k, spheres)
	return f
}

// NotConnected is the complex of graphs on n ≤ 7 vertices that are not i-connected,
// 1 ≤ i ≤ 3: its vertices are the edges of the complete graph in lexicographic
// order, its faces the edge sets whose graph falls apart when some i−1 vertices are
// taken away. A wedge of spheres: (n−1)! of dimension n−3 for i = 1 (Vassiliev
// 1993), (n−2)! of dimension 2n−5 for i = 2 and (n−3)(n−2)!/2 of dimension 2n−4 for
// i = 3 (Babson, Björner, Linusson, Shareshian, Welker 1999).
func NotConnected(n, i int) *Filtered {
	var ends []uint32
	for u := range n {
		for v := u + 1; v < n; v++ {
			ends = append(ends, 1<<u|1<<v)
		}
	}
	levels := make(Levels, len(ends)+1)
	for set := uint32(1); set < 1<<len(ends); set++ {
		if !fallsApart(set, ends, n, i-1) {
			continue
		}
		var simplex []uint32
		for rest := set; rest != 0; rest &= rest - 1 {
			simplex = append(simplex, uint32(bits.TrailingZeros32(rest)))
		}
		levels[len(simplex)-1] = append(levels[len(simplex)-1], simplex)
	}
	for _, level := range levels {
		slices.SortFunc(level, slices.Compare)
	}
	top := slices.IndexFunc(levels, func(level [][]uint32) bool { return len(level) == 0 })
	f := levels[:top].Constant()
	dimension, spheres := n-3, factorial(n-1)
	if i > 1 {
		dimension, spheres = 2*n-5, factorial(n-2)
	}
	if i > 2 {
		dimension, spheres = 2*n-4, (n-3)*factorial(n-2)/2
	}
	f.Betti = wedge(len(f.Boundary), dimension, spheres)
	return f
}

func factorial(n int) int {
	f := 1
	for i := 2; i <= n; i++ {
		f *= i
	}
	return f
}

// fallsApart says whether taking away some `away` vertices leaves the graph of an edge
// set disconnected.
func fallsApart(set uint32, ends []uint32, n, away int) bool {
	for gone := uint32(0); gone < 1<<n; gone++ {
		if bits.OnesCount32(gone) != away {
			continue
		}
		left := uint32(1<<n-1) &^ gone
		if reached(set, ends, left) != left {
			return true
		}
	}
	return false
}

// reached is the component of the least vertex in the graph on the vertices left.
func reached(set uint32, ends []uint32, left uint32) uint32 {
	at := left & -left
	for grown := true; grown; {
		grown = false
		for rest := set; rest != 0; rest &= rest - 1 {
			e := ends[bits.TrailingZeros32(rest)]
			if e&left == e && e&at != 0 && e&at != e {
				at, grown = at|e, true
			}
		}
	}
	return at
}

// LinialMeshulam is Y_d(n, num/den): all simplices of dimension below d on n
// vertices; the d-simplices in lexicographic order, each kept when the next number
// mod den is below num (Linial, Meshulam 2006).
func LinialMeshulam(n, d int, num, den, seed uint64) *Filtered {
	levels := Cliques(n, d, func(int, int) bool { return true })
	r := New(seed)
	var kept [][]uint32
	for _, s := range levels[d] {
		if r.Chance(num, den) {
			kept = append(kept, s)
		}
	}
	levels[d] = kept
	if len(kept) == 0 {
		levels = levels[:d]
	}
	return levels.Constant()
}

// RandomFlag is the flag complex of G(n, num/den), the pairs drawn in lexicographic
// order as LinialMeshulam draws (Kahle 2009).
func RandomFlag(n int, num, den, seed uint64) *Filtered {
	r := New(seed)
	return Cliques(n, -1, func(int, int) bool { return r.Chance(num, den) }).Constant()
}
