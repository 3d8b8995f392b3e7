package reduce

import (
	"testing"

	"pairloom/sparse/block"
	"pairloom/sparse/column"
	"pairloom/sparse/compress"
	"pairloom/sparse/gen"
)

// heavy and light are the two ends of fill-in: a random 2-complex near the density where
// its second homology appears (Linial, Meshulam 2006), and a matching complex.
func heavy() (uint32, [][]uint32) {
	c := gen.LinialMeshulam(110, 2, 275, 11000, 11)
	return uint32(len(c.Boundary[1])), c.Boundary[2]
}

func light() (uint32, [][]uint32) {
	c := gen.Matching(10)
	return uint32(len(c.Boundary[2])), c.Boundary[3]
}

func benchmark(b *testing.B, rows uint32, cols [][]uint32, form column.Form, apparent bool, threads int) {
	p := Problem{Columns: block.FromColumns(rows, cols), Seed: 1, Form: form}
	todo := all(len(cols))
	if apparent {
		p.Apparent = make([]uint32, rows)
		var rest []uint32
		if _, err := compress.Apparent(b.Context(), p.Columns, p.Apparent, func(j uint32) { rest = append(rest, j) }); err != nil {
			b.Fatal(err)
		}
		todo = func(yield func(uint32) bool) {
			for _, j := range rest {
				if !yield(j) {
					return
				}
			}
		}
	}
	b.ReportAllocs()
	var counts Counts
	for b.Loop() {
		var err error
		if _, counts, err = Solve(b.Context(), p, todo, threads); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(counts.Additions), "additions")
	b.ReportMetric(float64(counts.Bytes), "kept-bytes")
}

func BenchmarkSolve(b *testing.B) {
	for name, make := range map[string]func() (uint32, [][]uint32){"random2complex": heavy, "matching": light} {
		rows, cols := make()
		for form, as := range map[string]column.Form{"smaller": column.Smaller, "lists": column.Lists, "pairs": column.Pairs} {
			b.Run(name+"/"+form, func(b *testing.B) { benchmark(b, rows, cols, as, true, 1) })
		}
		b.Run(name+"/noapparent", func(b *testing.B) { benchmark(b, rows, cols, column.Smaller, false, 1) })
		b.Run(name+"/twothreads", func(b *testing.B) { benchmark(b, rows, cols, column.Smaller, true, 2) })
	}
}
