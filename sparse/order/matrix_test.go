package order

import (
	"bytes"
	"compress/gzip"
	"encoding/csv"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
	"pairloom/sparse/gen"
	"pairloom/sparse/oracle"
	"pairloom/sparse/source"
)

func matrixSpec(inputs ...string) source.Spec {
	return source.Spec{Kind: source.Matrix, Inputs: inputs, Degrees: -1}
}

// matrixBoundary reads the published blocks back, every byte checked.
func matrixBoundary(t *testing.T, dir string, c *chain.Complex) [][][]uint32 {
	out := make([][][]uint32, len(c.Cells))
	out[0] = make([][]uint32, c.Cells[0])
	for k := 1; k < len(c.Cells); k++ {
		m, err := chain.OpenBlock(dir, k, false)
		require.NoError(t, err)
		require.Equal(t, [2]uint32{c.Cells[k-1], c.Cells[k]}, [2]uint32{m.Rows, m.Cols})
		out[k] = make([][]uint32, m.Cols)
		for j := range m.Cols {
			out[k][j] = append(out[k][j], m.Column(j, nil)...)
		}
		require.NoError(t, m.Close())
	}
	return out
}

// matrixShapes says by counting which blocks are graphs, by rows and by columns.
func matrixShapes(boundary [][][]uint32) (rows, cols []bool) {
	rows, cols = make([]bool, len(boundary)), make([]bool, len(boundary))
	for k := 1; k < len(boundary); k++ {
		rows[k], cols[k] = true, true
		for _, c := range boundary[k] {
			cols[k] = cols[k] && len(c) <= 2
		}
		for _, r := range gen.Transpose(len(boundary[k-1]), boundary[k]) {
			rows[k] = rows[k] && len(r) <= 2
		}
	}
	return rows, cols
}

// matrixText writes entries in random order; odd ones once or three times, some even ones twice.
func matrixText(r *gen.Rand, rows int, columns [][]uint32) string {
	var lines []string
	for j, c := range columns {
		for i := range rows {
			_, odd := slices.BinarySearch(c, uint32(i))
			copies := 2 * r.IntN(6) / 5
			if odd {
				copies = 1 + copies/2*2
			} else {
				copies = copies / 2 * 2
			}
			for range copies {
				lines = append(lines, fmt.Sprintf("%d %d %d\n", i+1, j+1, 1-2*r.IntN(2)))
			}
			if r.IntN(9) == 0 {
				lines = append(lines, fmt.Sprintf("%d %d %d\n", i+1, j+1, 4*r.IntN(3)))
			}
		}
	}
	shuffled := make([]string, len(lines))
	for i, at := range r.Perm(len(lines)) {
		shuffled[i] = lines[at]
	}
	return fmt.Sprintf("%%%%MatrixMarket matrix coordinate integer general\n%d %d %d\n", rows, len(columns), len(lines)) + strings.Join(shuffled, "")
}

// Random chains, as written and shuffled with repeated entries, straight and transposed,
// cut or not, at any first degree, come back as they were.
func TestMatrixChains(t *testing.T) {
	for seed := range uint64(60) {
		r := gen.New(seed)
		f := gen.Chain(r, []int{1, r.IntN(3), r.IntN(3), 1}, []int{0, r.IntN(9), r.IntN(9), r.IntN(5)}, r.IntN(6))
		dir, turned, first := t.TempDir(), r.IntN(2) == 0, 1+r.IntN(3)
		spec := source.Spec{Kind: source.Matrix, Degrees: -1, FacesInCols: turned, FacesInRows: !turned, FirstDegree: first}
		for k := 1; k < len(f.Boundary); k++ {
			rows, columns := len(f.Boundary[k-1]), f.Boundary[k]
			if turned {
				rows, columns = len(columns), gen.Transpose(rows, columns)
			}
			path := filepath.Join(dir, fmt.Sprintf("d%d.mtx", k))
			require.NoError(t, os.WriteFile(path, []byte(matrixText(r, rows, columns)), 0o644))
			spec.Inputs = append(spec.Inputs, path)
		}
		want := append(make([][][]uint32, first-1), f.Boundary...)
		want[first-1] = make([][]uint32, len(f.Boundary[0]))
		if k := first + r.IntN(3); r.IntN(2) == 0 {
			spec.Degrees = k
			want = want[:min(k+2, len(want))]
		}
		out := t.TempDir()
		c, err := Matrix(t.Context(), spec, out, 2, source.Quiet{})
		require.NoError(t, err)
		got := matrixBoundary(t, out, c)
		for k := range want {
			require.Len(t, got[k], len(want[k]), "seed %d", seed)
			for j := range want[k] {
				require.Equal(t, want[k][j], got[k][j], "seed %d, column %d of block %d", seed, j, k)
			}
		}
		rows, cols := matrixShapes(got)
		require.Equal(t, rows, c.RowsAtMost2)
		require.Equal(t, cols, c.ColsAtMost2)
		require.Equal(t, spec.Degrees >= 0 && spec.Degrees < first+2, c.Truncated)
		require.True(t, c.KeepZero)
		require.Equal(t, chain.ByColumn, c.Naming)
		claimed := 0
		if first > 1 {
			claimed = first
		}
		require.Equal(t, claimed, c.First)
		read, err := chain.Read(out)
		require.NoError(t, err)
		require.Equal(t, c, read)
		left, err := filepath.Glob(filepath.Join(out, ".*"))
		require.NoError(t, err)
		require.Empty(t, left)
	}
}

// The same folder, byte by byte, from the matrices as they are and from their
// transposes, compressed or not, with one thread or two.
func TestMatrixForms(t *testing.T) {
	for seed := range uint64(20) {
		r := gen.New(seed)
		f := gen.Chain(r, []int{1, r.IntN(3), 1}, []int{0, 2 + r.IntN(9), r.IntN(9)}, r.IntN(6))
		var want map[string]string
		for form := range 4 {
			dir, out := t.TempDir(), t.TempDir()
			spec := matrixSpec()
			spec.FacesInCols, spec.FacesInRows = form&1 > 0, form&1 == 0
			for k := 1; k < len(f.Boundary); k++ {
				rows, columns, path := len(f.Boundary[k-1]), f.Boundary[k], filepath.Join(dir, fmt.Sprintf("d%d.mtx", k))
				if spec.FacesInCols {
					rows, columns = len(columns), gen.Transpose(rows, columns)
				}
				text := []byte(matrixText(r, rows, columns))
				if form&2 > 0 {
					path, text = path+".gz", matrixSqueezed(t, text)
				}
				require.NoError(t, os.WriteFile(path, text, 0o644))
				spec.Inputs = append(spec.Inputs, path)
			}
			_, err := Matrix(t.Context(), spec, out, 1+form&1, source.Quiet{})
			require.NoError(t, err)
			got := files(t, out)
			if want == nil {
				want = got
			}
			require.Equal(t, want, got, "seed %d, form %d", seed, form)
		}
	}
}

func matrixSqueezed(t *testing.T, text []byte) []byte {
	var b bytes.Buffer
	z := gzip.NewWriter(&b)
	_, err := z.Write(text)
	require.NoError(t, err)
	require.NoError(t, z.Close())
	return b.Bytes()
}

// With a first degree above 1 the arrays of values begin one degree below it.
func TestMatrixFirstDegreeValues(t *testing.T) {
	d2, out := matrixFile(t, "3 2 4", "1 1", "2 1", "2 2", "3 2"), t.TempDir()
	spec := matrixSpec(d2)
	spec.FirstDegree, spec.FacesInRows = 2, true
	spec.ValueFiles = []string{valueFile(t, "1\n2\n4\n"), valueFile(t, "3\n5\n")}
	c, err := Matrix(t.Context(), spec, out, 1, source.Quiet{})
	require.NoError(t, err)
	require.Equal(t, []uint32{0, 3, 2}, c.Cells)
	require.Equal(t, 2, c.First)
	table, err := chain.OpenTable(out)
	require.NoError(t, err)
	defer table.Close()
	for k, want := range [][]float64{{}, {1, 2, 4}, {3, 5}} {
		for j, v := range want {
			require.Equal(t, v, table.Value(k, uint32(j)))
		}
	}
	spec.ValueFiles[1] = valueFile(t, "3\n3\n")
	_, err = Matrix(t.Context(), spec, t.TempDir(), 1, source.Quiet{})
	require.ErrorContains(t, err, "2-cell 1 enters at 3, before its face 2 at 4")
}

// Public boundary matrices, which are stored transposed: shape, nonzeros and rank of
// testdata/matrix_published.csv, from the metadata of the group JGD_Homology (V. Welker,
// J.-G. Dumas, 2008) of the SuiteSparse Matrix Collection; published_rank is theirs,
// rank_mod_2 was computed by elimination by a program apart from this one.
func TestMatrixPublished(t *testing.T) {
	file, err := os.Open("testdata/matrix_published.csv")
	require.NoError(t, err)
	defer file.Close()
	lines, err := csv.NewReader(file).ReadAll()
	require.NoError(t, err)
	require.Greater(t, len(lines), 50)
	complexes := map[string]*ranked{}
	for _, l := range lines[1:] {
		if complexes[l[1]] == nil {
			complexes[l[1]] = publishedComplex(t, strings.Fields(l[1]))
		}
		f, n := complexes[l[1]], numbersOf(t, l[2:])
		k, dir := n[0], t.TempDir()
		path := filepath.Join(dir, l[0]+".mtx")
		require.NoError(t, gen.WriteMatrix(path, len(f.Boundary[k]), gen.Transpose(len(f.Boundary[k-1]), f.Boundary[k])))
		spec := matrixSpec(path)
		spec.FacesInCols = true
		c, err := Matrix(t.Context(), spec, dir, 1, source.Quiet{})
		require.NoError(t, err)
		m, err := chain.OpenBlock(dir, 1, false)
		require.NoError(t, err)
		require.Equal(t, []int{n[2], n[1], n[3], k + 1}, []int{int(m.Rows), int(m.Cols), int(m.Nonzeros()), int(m.Width)}, l[0])
		require.NoError(t, m.Close())
		rank := f.rank[k]
		if n[2] <= 800 {
			rank = oracle.Rank(n[2], matrixBoundary(t, dir, c)[1])
		}
		require.Equal(t, n[5], rank, l[0])
		require.Equal(t, n[4], rank, "published rank of %s", l[0])
	}
}

// ranked is a complex with the ranks of its boundaries by the textbook reduction.
type ranked struct {
	*gen.Filtered
	rank []int
}

func publishedComplex(t *testing.T, name []string) *ranked {
	f, n := new(gen.Filtered), numbersOf(t, name[1:])
	switch name[0] {
	case "chessboard":
		f = gen.Chessboard(n[0], n[1])
	case "matching":
		f = gen.Matching(n[0])
	default:
		f = gen.NotConnected(n[0], n[1])
	}
	p, rank := oracle.Reduce(f.Boundary), []int{0}
	for k := 1; k < len(f.Boundary); k++ {
		rank = append(rank, len(f.Boundary[k])-len(p.Births(k)))
	}
	return &ranked{f, rank}
}

func numbersOf(t *testing.T, text []string) (out []int) {
	for _, s := range text {
		n, err := strconv.Atoi(s)
		require.NoError(t, err)
		out = append(out, n)
	}
	return out
}

func TestMatrixValues(t *testing.T) {
	for seed := range uint64(40) {
		r := gen.New(seed)
		f := gen.Simplicial(r, 8, 3, 12, 4)
		dir := t.TempDir()
		paths, err := gen.WriteMarket(dir, "d", f.Boundary)
		require.NoError(t, err)
		if len(paths) == 0 {
			continue
		}
		spec := matrixSpec(paths...)
		spec.FacesInRows = true
		for k, v := range f.Values {
			path := filepath.Join(dir, fmt.Sprintf("v%d.npy", k))
			if seed%2 == 0 {
				require.NoError(t, gen.WriteNPY(path, []int{len(v)}, v))
			} else {
				path = filepath.Join(dir, fmt.Sprintf("v%d.csv", k))
				require.NoError(t, os.WriteFile(path, []byte(strings.Trim(strings.ReplaceAll(fmt.Sprint(v), " ", "\n"), "[]")), 0o644))
			}
			spec.ValueFiles = append(spec.ValueFiles, path)
		}
		spec.Degrees = []int{-1, 0, 1}[seed%3]
		out := t.TempDir()
		c, err := Matrix(t.Context(), spec, out, 1, source.Quiet{})
		require.NoError(t, err)
		require.False(t, c.KeepZero)
		table, err := chain.OpenTable(out)
		require.NoError(t, err)
		for k := range c.Cells {
			for j, v := range f.Values[k] {
				require.Equal(t, v, table.Value(k, uint32(j)))
			}
		}
		table.Close()
	}
}
