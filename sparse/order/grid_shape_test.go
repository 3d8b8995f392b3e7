package order

import (
	"context"
	"encoding/binary"
	"fmt"
	"math"
	"os"
	"runtime"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/source"
)

// fieldArray is an array file of float32 values of a smooth field on shape, C order.
func fieldArray(shape ...int) string {
	n, text := 1, ""
	for _, k := range shape {
		n *= k
		text += fmt.Sprint(k, ", ")
	}
	head := fmt.Sprintf("{'descr': '<f4', 'fortran_order': False, 'shape': (%s), }\n", text)
	out := append([]byte("\x93NUMPY\x01\x00"), byte(len(head)), byte(len(head)>>8))
	out = append(out, head...)
	for i := range n {
		v, rest := 0.0, i
		for a := len(shape) - 1; a >= 0; a-- {
			v += math.Sin(float64(7+2*a) * float64(rest%shape[a]) / float64(shape[a]))
			rest /= shape[a]
		}
		out = binary.LittleEndian.AppendUint32(out, math.Float32bits(float32(v)))
	}
	return string(out)
}

// The numbers of cells depend on the shape and on where values sit, not on the values:
// all rows cubical_* of checks/persistence.csv, column cells_by_dim.
func TestGridCounts(t *testing.T) {
	for _, c := range []struct {
		name   string
		shape  []int
		voxels string
		cells  []uint32
	}{
		{"cubical_fashion_0, _1, _9", []int{28, 28}, "vertices", []uint32{784, 1512, 729}},
		{"cubical_volcano_vertex", []int{87, 61}, "vertices", []uint32{5307, 10466, 5160}},
		{"cubical_volcano_top", []int{87, 61}, "cells", []uint32{5456, 10762, 5307}},
		{"cubical_dem_block", []int{72, 72}, "vertices", []uint32{5184, 10224, 5041}},
		{"cubical_mri_block", []int{64, 64}, "cells", []uint32{4225, 8320, 4096}},
		{"cubical_brain_volume", []int{16, 18, 16}, "vertices", []uint32{4608, 12992, 12210, 3825}},
	} {
		path := place(t, "in.npy", fieldArray(c.shape...))
		for degrees := -1; degrees <= len(c.shape); degrees++ {
			spec := source.Spec{Kind: source.Grid, Inputs: []string{path}, Voxels: c.voxels, Degrees: degrees, MemoryBytes: testBudget}
			dir := t.TempDir()
			got, err := Grid(context.Background(), spec, dir, 2, source.Quiet{})
			require.NoError(t, err, c.name)
			want, claimed := c.cells, len(c.shape)
			if degrees >= 0 && degrees < len(c.shape) {
				want, claimed = c.cells[:degrees+2], degrees
			}
			require.Equal(t, want, got.Cells, c.name)
			require.Equal(t, claimed, got.Degrees, c.name)
			require.Equal(t, claimed < len(c.shape), got.Truncated, c.name)
			for name := range files(t, dir) {
				require.False(t, strings.HasSuffix(name, ".part"), name)
			}
		}
	}
}

// A smooth field of 48³ values: time, heap taken and bytes published, per cell.
func BenchmarkGrid(b *testing.B) {
	path := place(b, "in.npy", fieldArray(48, 48, 48))
	for _, voxels := range []string{"vertices", "cells"} {
		b.Run(voxels, func(b *testing.B) {
			spec := source.Spec{Kind: source.Grid, Inputs: []string{path}, Voxels: voxels, Degrees: -1, MemoryBytes: testBudget}
			var cells, published uint64
			var before, after runtime.MemStats
			runtime.ReadMemStats(&before)
			for b.Loop() {
				dir, err := os.MkdirTemp(b.TempDir(), "")
				require.NoError(b, err)
				c, err := Grid(context.Background(), spec, dir, 1, source.Quiet{})
				require.NoError(b, err)
				cells, published = 0, 0
				for _, n := range c.Cells {
					cells += uint64(n)
				}
				entries, err := os.ReadDir(dir)
				require.NoError(b, err)
				for _, e := range entries {
					info, err := e.Info()
					require.NoError(b, err)
					published += uint64(info.Size())
				}
				require.NoError(b, os.RemoveAll(dir))
			}
			runtime.ReadMemStats(&after)
			each := float64(cells) * float64(b.N)
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/each, "ns/cell")
			b.ReportMetric(float64(after.TotalAlloc-before.TotalAlloc)/each, "heap-bytes/cell")
			b.ReportMetric(float64(published)/float64(cells), "file-bytes/cell")
		})
	}
}
