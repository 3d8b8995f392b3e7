package order

import (
	"context"
	"os"
	"path/filepath"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// Any bytes read as any kind either make a whole complex or leave nothing behind.
func FuzzInputs(f *testing.F) {
	kinds := []struct {
		name  string
		kind  source.Kind
		build func(context.Context, source.Spec, string, int, source.Progress) (*chain.Complex, error)
	}{
		{"in.npy", source.Grid, Grid}, {"in.csv", source.Points, Points}, {"in.npy", source.Points, Points}, {"in.csv", source.Distances, Distances},
		{"in.npy", source.Distances, Distances}, {"in.csv", source.Graph, Graph}, {"in.mtx", source.Matrix, Matrix},
	}
	array := "\x93NUMPY\x01\x00\x3b\x00{'descr': '<f8', 'fortran_order': False, 'shape': (2,), }  \n\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\xf0\x3f"
	for i := range kinds {
		f.Add(byte(i), []byte(array))
		f.Add(byte(i), []byte("0,1\n1,0\n"))
		f.Add(byte(i), []byte("0,1,2\na,b,3\n"))
		f.Add(byte(i), []byte("%%MatrixMarket matrix coordinate integer general\n2 1 2\n1 1 1\n2 1 -1\n"))
	}
	f.Fuzz(func(t *testing.T, which byte, text []byte) {
		k := kinds[int(which)%len(kinds)]
		dir := t.TempDir()
		in, out := filepath.Join(dir, k.name), filepath.Join(dir, "out")
		require.NoError(t, os.WriteFile(in, text, 0o644))
		require.NoError(t, os.Mkdir(out, 0o755))
		_, err := k.build(t.Context(), source.Spec{Kind: k.kind, Inputs: []string{in}, Degrees: -1, MemoryBytes: 64 << 20}, out, 2, source.Quiet{})
		_, missing := os.Stat(filepath.Join(out, "complex.json"))
		require.Equal(t, err != nil, missing != nil, "%v", err)
		parts, _ := filepath.Glob(filepath.Join(out, ".*.part"))
		require.Empty(t, parts)
	})
}
