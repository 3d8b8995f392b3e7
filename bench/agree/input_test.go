package agree

import (
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/source"
)

// randomInput writes a random input of a random kind into dir; tied says that cells
// of one degree have equal values.
func randomInput(t *testing.T, r *rand.Rand, dir string) (spec source.Spec, tied bool) {
	kinds := []func(*rand.Rand) (source.Spec, string, []byte){randomGrid, randomGrid, randomPoints, randomGraph, randomSimplices, randomFacets}
	if at := r.IntN(len(kinds) + 2); at < len(kinds) {
		spec, name, text := kinds[at](r)
		path := filepath.Join(dir, name)
		require.NoError(t, os.WriteFile(path, text, 0o644))
		spec.Inputs = []string{path}
		return spec, true
	}
	return randomChain(t, r, dir), false
}

// cut draws the degrees asked for: often fewer than there are.
func cut(r *rand.Rand, most int) int {
	if r.IntN(4) == 0 {
		return -1
	}
	return r.IntN(most + 1)
}

func randomGrid(r *rand.Rand) (source.Spec, string, []byte) {
	axes := []int{1, 2, 3, 3, 3, 4}[r.IntN(6)]
	shape, n := make([]int, axes), 1
	for d := range shape {
		shape[d] = 1 + r.IntN([]int{80, 11, 6, 4}[axes-1])
		n *= shape[d]
	}
	levels, masked := 1+r.IntN(12), r.IntN(3) == 0
	values := make([]float64, n)
	for i := range values {
		values[i] = float64(r.IntN(levels))
		if masked && i > 0 && r.IntN(5) == 0 {
			values[i] = math.NaN()
		}
	}
	spec := source.Spec{Kind: source.Grid, Degrees: cut(r, axes-1), Voxels: []string{"vertices", "cells"}[r.IntN(2)]}
	return spec, "grid.npy", npy(shape, values)
}

// npy writes an array of f64 in C order.
func npy(shape []int, values []float64) []byte {
	head := fmt.Sprintf("{'descr': '<f8', 'fortran_order': False, 'shape': (%s,), }", strings.Trim(strings.ReplaceAll(fmt.Sprint(shape), " ", ", "), "[]"))
	head += strings.Repeat(" ", 63-(10+len(head))%64) + "\n"
	b := append([]byte("\x93NUMPY\x01\x00"), byte(len(head)), byte(len(head)>>8))
	b = append(b, head...)
	for _, v := range values {
		b = binary.LittleEndian.AppendUint64(b, math.Float64bits(v))
	}
	return b
}

func randomPoints(r *rand.Rand) (source.Spec, string, []byte) {
	var b strings.Builder
	dim := 1 + r.IntN(4)
	for range 4 + r.IntN(14) {
		for d := range dim {
			if d > 0 {
				b.WriteByte(',')
			}
			fmt.Fprint(&b, r.IntN(5))
		}
		b.WriteByte('\n')
	}
	spec := source.Spec{Kind: source.Points, Degrees: r.IntN(3)}
	if r.IntN(2) == 0 {
		scale := 1 + 3*r.Float64()
		spec.MaxScale = &scale
	}
	return spec, "points.csv", []byte(b.String())
}

func randomGraph(r *rand.Rand) (source.Spec, string, []byte) {
	var b strings.Builder
	n := 4 + r.IntN(20)
	for range n + r.IntN(4*n) {
		fmt.Fprintf(&b, "%d,%d,%d\n", r.IntN(n), r.IntN(n), r.IntN(6))
	}
	return source.Spec{Kind: source.Graph, Degrees: r.IntN(4), Vertices: n}, "graph.csv", []byte(b.String())
}

// randomSets draws simplices on few vertices.
func randomSets(r *rand.Rand) [][]int {
	n, top := 5+r.IntN(14), 2+r.IntN(4)
	sets := make([][]int, 3+r.IntN(60))
	for i := range sets {
		sets[i] = slices.Sorted(slices.Values(r.Perm(n)[:1+r.IntN(min(top, n))]))
	}
	return sets
}

func randomSimplices(r *rand.Rand) (source.Spec, string, []byte) {
	var b strings.Builder
	seen := map[string]bool{}
	levels := 1 + r.IntN(20)
	for _, s := range randomSets(r) {
		name := strings.Trim(strings.ReplaceAll(fmt.Sprint(s), " ", ","), "[]")
		if !seen[name] {
			fmt.Fprintf(&b, "%d.5,%s\n", len(s)*levels+r.IntN(levels), name)
		}
		seen[name] = true
	}
	return source.Spec{Kind: source.Simplices, Degrees: cut(r, 3), Close: true, ValueFirst: true}, "simplices.csv", []byte(b.String())
}

func randomFacets(r *rand.Rand) (source.Spec, string, []byte) {
	var b strings.Builder
	for _, s := range randomSets(r) {
		fmt.Fprintln(&b, strings.Trim(strings.ReplaceAll(fmt.Sprint(s), " ", ","), "[]"))
	}
	return source.Spec{Kind: source.Facets, Degrees: cut(r, 3)}, "facets.csv", []byte(b.String())
}

// randomChain writes a general chain complex over Z/2, no cell complex: elementary
// pieces (a cell alone, or a cell and its boundary) after a random change of basis,
// so that columns have any length and ∂∂ = 0.
func randomChain(t *testing.T, r *rand.Rand, dir string) source.Spec {
	top := 1 + r.IntN(4)
	sizes := make([]int, top+1)
	for k := range sizes {
		sizes[k] = 1 + r.IntN(50)
	}
	spec := source.Spec{Kind: source.Matrix, Degrees: cut(r, top), FacesInRows: true}
	used := make([]bool, sizes[0]) // (k−1)-cells that have a boundary, or are one
	inverse := bases(r, sizes[0])
	for k := 1; k <= top; k++ {
		basis := bases(r, sizes[k])
		free, kills := r.Perm(sizes[k-1]), make([]bool, sizes[k])
		var elementary [][2]int
		for _, j := range r.Perm(sizes[k])[:r.IntN(sizes[k]+1)] {
			for len(free) > 0 && used[free[0]] {
				free = free[1:]
			}
			if len(free) == 0 {
				break
			}
			elementary = append(elementary, [2]int{free[0], j})
			kills[j], free = true, free[1:]
		}
		path := filepath.Join(dir, fmt.Sprintf("d%d.mtx", k))
		require.NoError(t, os.WriteFile(path, market(sizes[k-1], sizes[k], conjugate(elementary, inverse, basis)), 0o644))
		spec.Inputs = append(spec.Inputs, path)
		used, inverse = kills, invert(basis)
	}
	return spec
}

// bases draws a unitriangular change of basis: row i of the result lists the columns with a 1.
func bases(r *rand.Rand, n int) [][]bool {
	dense := r.IntN(5)
	b := make([][]bool, n)
	for i := range b {
		b[i] = make([]bool, n)
		for j := i; j < n; j++ {
			b[i][j] = i == j || r.IntN(8) < dense
		}
	}
	return b
}

// invert inverts a unitriangular matrix over Z/2.
func invert(a [][]bool) [][]bool {
	n := len(a)
	inv := make([][]bool, n)
	for i := n - 1; i >= 0; i-- {
		inv[i] = make([]bool, n)
		inv[i][i] = true
		for k := i + 1; k < n; k++ {
			if a[i][k] {
				for j := range n {
					inv[i][j] = inv[i][j] != inv[k][j]
				}
			}
		}
	}
	return inv
}

// conjugate returns left · E · right, E having the given ones.
func conjugate(ones [][2]int, left, right [][]bool) (entries [][2]int) {
	for i := range left {
		for j := range right {
			v := false
			for _, e := range ones {
				v = v != (left[i][e[0]] && right[e[1]][j])
			}
			if v {
				entries = append(entries, [2]int{i, j})
			}
		}
	}
	return entries
}

func market(rows, cols int, entries [][2]int) []byte {
	var b strings.Builder
	fmt.Fprintf(&b, "%%%%MatrixMarket matrix coordinate pattern general\n%d %d %d\n", rows, cols, len(entries))
	for _, e := range entries {
		fmt.Fprintln(&b, e[0]+1, e[1]+1)
	}
	return []byte(b.String())
}
