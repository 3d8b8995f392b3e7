package order

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/gen"
	"pairloom/sparse/source"
)

// matrixFile writes a pattern matrix from "row col" pairs.
func matrixFile(t *testing.T, size string, entries ...string) string {
	path := filepath.Join(t.TempDir(), "m.mtx")
	text := "%%MatrixMarket matrix coordinate pattern general\n" + size + "\n" + strings.Join(entries, "\n")
	require.NoError(t, os.WriteFile(path, []byte(text), 0o644))
	return path
}

func valueFile(t *testing.T, text string) string {
	path := filepath.Join(t.TempDir(), "v.csv")
	require.NoError(t, os.WriteFile(path, []byte(text), 0o644))
	return path
}

// Each refusal is one line that names the place and the way out; nothing is published.
func TestMatrixRefusals(t *testing.T) {
	d1 := matrixFile(t, "3 3 6", "1 1", "2 1", "1 2", "3 2", "2 3", "3 3")
	d2 := matrixFile(t, "3 1 3", "1 1", "2 1", "3 1")
	d1t := matrixFile(t, "3 4 6", "1 1", "1 2", "2 2", "2 3", "3 3", "3 4")
	d2t := matrixFile(t, "2 3 4", "1 1", "1 2", "2 2", "2 3")
	wide := matrixFile(t, "2 3 4", "1 1", "1 2", "2 2", "2 3") // two entries a row, columns differ
	v3, v1 := valueFile(t, "0\n0\n1\n"), valueFile(t, "5\n")
	for name, c := range map[string]struct {
		spec source.Spec
		want string
	}{
		"no file":                {matrixSpec(), "no matrix was given"},
		"both flags":             {source.Spec{Inputs: []string{d1}, Degrees: -1, FacesInCols: true, FacesInRows: true}, "exclude each other"},
		"absurd first degree":    {source.Spec{Inputs: []string{d1}, Degrees: -1, FirstDegree: 1 << 40}, "--first-degree 1099511627776; at most 1000 was expected"},
		"nothing to claim":       {source.Spec{Inputs: []string{d1}, Degrees: 2, FirstDegree: 3}, "--degrees 2 with --first-degree 3; nothing is claimed below degree 3"},
		"too few values":         {source.Spec{Inputs: []string{d1, d2}, Degrees: -1, ValueFiles: []string{v3, v3}}, "--values names 2 files; 2 matrices need 3"},
		"do not chain":           {matrixSpec(d2, d2), "it has 3 rows (faces) but the matrix before it"},
		"wrong order":            {matrixSpec(d2, matrixFile(t, "5 4 0")), "give ∂_k and ∂_(k+1) in order"},
		"transposes chain":       {matrixSpec(d1t, d2t), "the transposes chain: use --faces-in-columns"},
		"insists on the chain":   {source.Spec{Inputs: []string{d1t, d2t}, Degrees: -1, FacesInRows: true}, "it has 2 rows (faces) but the matrix before it"},
		"needlessly transposed":  {source.Spec{Inputs: []string{d1, d2}, Degrees: -1, FacesInCols: true}, "leave out --faces-in-columns"},
		"looks transposed":       {matrixSpec(wide), "every row has 2 entries and the columns differ, so this looks like a transposed boundary; use --faces-in-columns, or --faces-in-rows to insist"},
		"wrong count of values":  {source.Spec{Inputs: []string{d1}, Degrees: -1, ValueFiles: []string{v3, v1}}, "1 values; one for each of the 3 cells of degree 1 was expected"},
		"descending values":      {source.Spec{Inputs: []string{d1}, Degrees: -1, ValueFiles: []string{v3, valueFile(t, "2\n3\n1\n")}}, "value 1 of cell 2 is below 3 of the cell before"},
		"face after its coface":  {source.Spec{Inputs: []string{d1}, Degrees: -1, ValueFiles: []string{v3, valueFile(t, "0\n0\n1\n")}}, "1-cell 1 enters at 0, before its face 2 at 1"},
		"NaN value":              {source.Spec{Inputs: []string{d1}, Degrees: -1, ValueFiles: []string{valueFile(t, "0\nNaN\n1\n"), v3}}, "line 2: one finite value was expected"},
		"no such file":           {matrixSpec(d1, "none.mtx"), "none.mtx"},
		"broken later":           {matrixSpec(d1, matrixFile(t, "3 1 3", "1 1", "2 1", "4 1")), "line 5: entry (4, 1) is outside the 3 × 1 matrix"},
		"beyond the budget":      {source.Spec{Inputs: []string{d1}, Degrees: -1, MemoryBytes: 100}, "--memory allows"},
		"announces too much":     {matrixSpec(matrixFile(t, "3 3 4000", "1 1")), "4000 entries are announced"},
		"rows beyond the length": {matrixSpec(matrixFile(t, "900000000 3 1", "1 1")), "900000000 rows and 3 columns"},
	} {
		c.spec.Kind = source.Matrix
		out := t.TempDir()
		_, err := Matrix(t.Context(), c.spec, out, 1, source.Quiet{})
		require.ErrorContains(t, err, c.want, name)
		switch name {
		case "no file", "both flags", "absurd first degree", "nothing to claim", "too few values":
			require.ErrorAs(t, err, new(*source.UsageError), name)
		case "beyond the budget":
			require.ErrorAs(t, err, new(*source.TooBig), name)
		case "no such file":
			require.ErrorIs(t, err, os.ErrNotExist, name)
		default:
			require.ErrorAs(t, err, new(*source.InputError), name)
		}
		require.NotContains(t, err.Error(), "\n", name)
		require.NoFileExists(t, filepath.Join(out, "complex.json"), name)
		left, _ := filepath.Glob(filepath.Join(out, ".*"))
		require.Empty(t, left, name)
	}
	insist := matrixSpec(wide)
	insist.FacesInRows = true
	_, err := Matrix(t.Context(), insist, t.TempDir(), 1, source.Quiet{})
	require.NoError(t, err)
}

// A matrix without cells, and one without entries, are chains too.
func TestMatrixWithoutEntries(t *testing.T) {
	for _, size := range []string{"0 0 0", "3 0 0", "0 3 0", "3 2 0"} {
		c, err := Matrix(t.Context(), matrixSpec(matrixFile(t, size)), t.TempDir(), 1, source.Quiet{})
		require.NoError(t, err, size)
		require.Equal(t, 1, c.Top())
	}
	empty := matrixSpec(matrixFile(t, "3 0 0"))
	empty.ValueFiles = []string{valueFile(t, "1\n2\n3\n"), valueFile(t, "")}
	_, err := Matrix(t.Context(), empty, t.TempDir(), 1, source.Quiet{})
	require.NoError(t, err)
}

// A stop is heard, and leaves nothing half-written.
func TestMatrixStops(t *testing.T) {
	paths, err := gen.WriteMarket(t.TempDir(), "d", gen.Matching(8).Boundary)
	require.NoError(t, err)
	why := errors.New("stopped")
	ctx, stop := context.WithCancelCause(t.Context())
	stop(why)
	out := t.TempDir()
	_, err = Matrix(ctx, matrixSpec(paths...), out, 1, source.Quiet{})
	require.ErrorIs(t, err, why)
	left, err := os.ReadDir(out)
	require.NoError(t, err)
	require.Empty(t, left)
}

// Any bytes as a chain of two: a whole complex whose blocks read back, or one error of
// a known kind and neither complex.json nor a part.
func FuzzMatrix(f *testing.F) {
	const head = "%%MatrixMarket matrix coordinate integer general\n"
	d1, d2 := head+"3 3 6\n1 1 1\n2 1 1\n1 2 1\n3 2 1\n2 3 1\n3 3 -1\n", head+"3 1 4\n1 1 1\n2 1 1\n2 1 2\n3 1 3\n"
	f.Add([]byte(d1), []byte(d2), []byte("0\n1\n2\n"), byte(0), int8(-1), uint8(0))
	f.Add([]byte(d1), []byte(d2), []byte("0\n0\n0\n"), byte(4), int8(0), uint8(1))
	f.Add([]byte(d2), []byte(d1), []byte("0\n0\n0\n"), byte(1), int8(2), uint8(2))
	f.Add([]byte(d1), []byte(head+"3 0 0\n"), []byte{}, byte(2), int8(2), uint8(3))
	f.Add([]byte(head+"50000 1 0\n"), []byte(head+"1 50000 1\n1 7 1\n"), []byte{}, byte(2), int8(-1), uint8(0))
	f.Fuzz(func(t *testing.T, d1, d2, values []byte, flags byte, degrees int8, first uint8) {
		in, out := t.TempDir(), t.TempDir()
		spec := source.Spec{Kind: source.Matrix, Degrees: max(int(degrees), -1), FacesInCols: flags&1 > 0, FacesInRows: flags&2 > 0, FirstDegree: int(first % 5), MemoryBytes: 64 << 20}
		for name, b := range map[string][]byte{"1.mtx": d1, "2.mtx": d2, "v.csv": values} {
			require.NoError(t, os.WriteFile(filepath.Join(in, name), b, 0o644))
		}
		spec.Inputs = []string{filepath.Join(in, "1.mtx"), filepath.Join(in, "2.mtx")}
		if v := filepath.Join(in, "v.csv"); flags&4 > 0 {
			spec.ValueFiles = []string{v, v, v}
		}
		c, err := Matrix(t.Context(), spec, out, 1, source.Quiet{})
		parts, _ := filepath.Glob(filepath.Join(out, ".*"))
		require.Empty(t, parts)
		if err != nil {
			require.NoFileExists(t, filepath.Join(out, "complex.json"))
			known := errors.As(err, new(*source.InputError)) || errors.As(err, new(*source.UsageError)) || errors.As(err, new(*source.TooBig))
			require.True(t, known, "%v", err)
			return
		}
		for k, columns := range matrixBoundary(t, out, c) {
			for j, column := range columns {
				for i := 1; i < len(column); i++ {
					require.Less(t, column[i-1], column[i], "column %d of block %d", j, k)
				}
			}
		}
	})
}

// The chessboard complex on 7 × 7 squares, 130,000 cells, five blocks.
func BenchmarkMatrix(b *testing.B) {
	paths, err := gen.WriteMarket(b.TempDir(), "d", gen.Chessboard(7, 7).Boundary)
	require.NoError(b, err)
	bytes := int64(0)
	for _, path := range paths {
		info, err := os.Stat(path)
		require.NoError(b, err)
		bytes += info.Size()
	}
	b.SetBytes(bytes)
	b.ReportAllocs()
	for b.Loop() {
		b.StopTimer()
		out := b.TempDir()
		b.StartTimer()
		_, err := Matrix(b.Context(), source.Spec{Kind: source.Matrix, Inputs: paths, Degrees: -1}, out, 1, source.Quiet{})
		require.NoError(b, err)
	}
}
