package order

import (
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/source"
)

// cube draws n points in the unit cube.
func cube(n int) string {
	r := rand.New(rand.NewPCG(7, uint64(n)))
	var text strings.Builder
	for range n {
		fmt.Fprintf(&text, "%v,%v,%v\n", r.Float64(), r.Float64(), r.Float64())
	}
	return text.String()
}

// benchmarkPoints measures the flag complex of points in a cube.
func benchmarkPoints(b *testing.B, n, degrees int, scale *float64) {
	spec := source.Spec{Kind: source.Points, Inputs: []string{place(b, "in.csv", cube(n))}, Degrees: degrees, MaxScale: scale, MemoryBytes: 8 << 30}
	b.ReportAllocs()
	cells := uint64(0)
	for b.Loop() {
		c, err := Points(b.Context(), spec, b.TempDir(), 1, source.Quiet{})
		require.NoError(b, err)
		cells = 0
		for _, n := range c.Cells {
			cells += uint64(n)
		}
	}
	b.ReportMetric(float64(cells), "simplices")
}

// Two million simplices up to degree 3 from 8,000 points.
func BenchmarkFlagTetrahedra(b *testing.B) {
	scale := 0.098
	benchmarkPoints(b, 8000, 2, &scale)
}

// A dense complex: the enclosing radius of 400 points, triangles only.
func BenchmarkFlagDense(b *testing.B) { benchmarkPoints(b, 400, 1, nil) }

// Many points, few edges: what finding them costs.
func BenchmarkFlagSparse(b *testing.B) {
	scale := 0.03
	benchmarkPoints(b, 100_000, 1, &scale)
}
