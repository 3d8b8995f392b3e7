// Package oracle is the slow, obviously right twin: the textbook column reduction
// over Z/2 (Edelsbrunner, Letscher, Zomorodian 2002), left to right, without
// clearing, compression or any other shortcut, and a rank by dense elimination that
// shares nothing with it. Only tests and benchmarks import it.
//
// Conventions are those of package block: boundary[k][j] lists the facet ranks of
// k-cell j, ascending; boundary[0] has one empty column a vertex.
package oracle

import "pairloom/sparse/block"

// Pairs is the outcome of a reduction. Mate[k][i] is the (k+1)-cell that kills
// k-cell i, or block.None; there is an entry for every degree.
type Pairs struct {
	Mate [][]uint32
}

// Reduce pairs a complex. Cubic in the number of cells.
func Reduce(boundary [][][]uint32) Pairs {
	p := Pairs{Mate: make([][]uint32, len(boundary))}
	for k := range boundary {
		p.Mate[k] = make([]uint32, len(boundary[k]))
		for i := range p.Mate[k] {
			p.Mate[k][i] = block.None
		}
	}
	for k := 1; k < len(boundary); k++ {
		reduceBlock(boundary[k], p.Mate[k-1])
	}
	return p
}

// reduceBlock adds earlier columns to each column until its largest entry is free.
func reduceBlock(columns [][]uint32, owner []uint32) {
	reduced := make([][]uint32, len(columns))
	for j, column := range columns {
		c := append([]uint32(nil), column...)
		for len(c) > 0 && owner[c[len(c)-1]] != block.None {
			c = sum(c, reduced[owner[c[len(c)-1]]])
		}
		reduced[j] = c
		if len(c) > 0 {
			owner[c[len(c)-1]] = uint32(j)
		}
	}
}

// sum is the symmetric difference of two ascending lists.
func sum(a, b []uint32) []uint32 {
	out := make([]uint32, 0, len(a)+len(b))
	for len(a) > 0 && len(b) > 0 {
		switch {
		case a[0] < b[0]:
			out, a = append(out, a[0]), a[1:]
		case a[0] > b[0]:
			out, b = append(out, b[0]), b[1:]
		default:
			a, b = a[1:], b[1:]
		}
	}
	return append(append(out, a...), b...)
}

// Births returns the k-cells that begin a class, ascending: those that kill none.
func (p Pairs) Births(k int) (cells []uint32) {
	kills := make([]bool, len(p.Mate[k]))
	if k > 0 {
		for _, j := range p.Mate[k-1] {
			if j != block.None {
				kills[j] = true
			}
		}
	}
	for i := range p.Mate[k] {
		if !kills[i] {
			cells = append(cells, uint32(i))
		}
	}
	return cells
}

// Essential returns the k-cells in no pair, ascending.
func (p Pairs) Essential(k int) (cells []uint32) {
	for _, i := range p.Births(k) {
		if p.Mate[k][i] == block.None {
			cells = append(cells, i)
		}
	}
	return cells
}

// Betti returns the number of essential cells by degree.
func (p Pairs) Betti() []int {
	var b []int
	for k := range p.Mate {
		b = append(b, len(p.Essential(k)))
	}
	return b
}

// Rank is the rank over Z/2 of a matrix given by columns, by Gaussian elimination
// on dense rows of bits. For up to a few thousand rows.
func Rank(rows int, columns [][]uint32) int {
	words := (len(columns) + 63) / 64
	m := make([][]uint64, rows)
	for r := range m {
		m[r] = make([]uint64, words)
	}
	for j, column := range columns {
		for _, r := range column {
			m[r][j/64] ^= 1 << (j % 64)
		}
	}
	rank := 0
	for j := 0; j < len(columns) && rank < rows; j++ {
		at := rank
		for at < rows && m[at][j/64]>>(j%64)&1 == 0 {
			at++
		}
		if at == rows {
			continue
		}
		m[rank], m[at] = m[at], m[rank]
		for r := rank + 1; r < rows; r++ {
			if m[r][j/64]>>(j%64)&1 != 0 {
				for w := range m[r] {
					m[r][w] ^= m[rank][w]
				}
			}
		}
		rank++
	}
	return rank
}
