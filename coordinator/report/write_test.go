package report

import (
	"bytes"
	"context"
	"errors"
	"flag"
	"os"
	"path/filepath"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/chain"
	"pairloom/sparse/evidence"
	"pairloom/sparse/exit"
	"pairloom/sparse/record"
	"pairloom/sparse/stage"
)

// valley is a signal of five samples, 3 1 2 0 2: two basins, 0 at place 3 and 1 at
// place 1; they meet at place 2 with value 2. Ranks of places: 3, 1, 2, 4, 0; an edge
// enters with its later end.
func valley(t testing.TB) string {
	vertices, edges := []uint32{0, 1, 2, 3, 4}, []uint32{2, 2, 3, 4}
	c := &chain.Complex{Kind: "grid", Naming: chain.ByGridIndex, Shape: []int{5}, Cells: counts(vertices, edges), Degrees: 1}
	return folder(t, c, stars(t, []uint32{3, 1, 2, 4, 0}, []float64{0, 1, 2, 2, 3}, vertices, edges), []uint32{none, 1, 0, 2, 3})
}

func TestLowerStar(t *testing.T) {
	pairs, betti, s := files(t, valley(t), &Run{}, false)
	require.Equal(t, header+"0,0,inf,3,\n0,1,2,1,2\n", pairs)
	require.Equal(t, "degree,betti\n0,1\n1,0\n", betti)
	require.Equal(t, int64(1), *s.Euler)
	pairs, _, _ = files(t, valley(t), &Run{}, true)
	require.Equal(t, header+"0,0,inf,3,\n0,1,2,1,2\n0,2,2,2,2\n0,2,2,4,4\n0,3,3,0,0\n", pairs)
}

// A hollow triangle whose corners have labels, and a fourth, isolated vertex; the
// triangle that would fill it is beyond the cut. All vertices enter at −1.5.
func labelled(t testing.TB, filled bool) string {
	vertices := []simplex{{-1.5, []uint32{0}}, {-1.5, []uint32{1}}, {-1.5, []uint32{2}}, {-1.5, []uint32{3}}}
	edges := []simplex{{0.25, []uint32{0, 1}}, {0.25, []uint32{0, 2}}, {1e-7, []uint32{1, 2}}}
	edges[0], edges[1], edges[2] = edges[2], edges[0], edges[1]
	c := &chain.Complex{Kind: "graph", Naming: chain.BySimplex, Labels: []string{"Ebro", `the "Po"`, "Rhine, lower", "x y"},
		Cells: counts(vertices, edges), Degrees: 1}
	mates := [][]uint32{{none, 1, 0, none}}
	tables := [][]simplex{vertices, edges}
	if filled {
		triangles := []simplex{{2000000, []uint32{0, 1, 2}}, {2000001, []uint32{0, 1, 2}}}
		tables, c.Cells, c.Truncated = append(tables, triangles), append(c.Cells, 2), true
		mates = append(mates, []uint32{none, none, 0})
	}
	return folder(t, c, simplices(t, tables...), mates...)
}

func TestLabelsAndEssentialClasses(t *testing.T) {
	pairs, betti, s := files(t, labelled(t, false), &Run{}, false)
	require.Equal(t, header+
		"0,-1.5,1e-07,\"Rhine, lower\",\"the \"\"Po\"\" Rhine, lower\"\n"+
		"0,-1.5,0.25,\"the \"\"Po\"\"\",\"Ebro the \"\"Po\"\"\"\n"+
		"0,-1.5,inf,Ebro,\n0,-1.5,inf,x y,\n"+
		"1,0.25,inf,\"Ebro Rhine, lower\",\n", pairs)
	require.Equal(t, "degree,betti\n0,2\n1,1\n", betti)
	require.Equal(t, int64(1), *s.Euler)
}

// Cells above the cut kill, but nothing is said of what they bear.
func TestTruncation(t *testing.T) {
	pairs, betti, s := files(t, labelled(t, true), &Run{}, true)
	require.Contains(t, pairs, "\n1,0.25,2000000,\"Ebro Rhine, lower\",\"Ebro the")
	require.NotContains(t, pairs, "2000001")
	require.NotContains(t, pairs, "\n2,")
	require.Equal(t, "degree,betti\n0,2\n1,0\n", betti)
	require.Nil(t, s.Euler)
	require.Len(t, s.PerDegree, 3)
	require.Nil(t, s.PerDegree[2].Betti)
}

// Matrices without values: cells are columns, pairs of zero length are wanted; with a
// first matrix ∂_2 nothing is claimed for degree 1.
func TestMatrices(t *testing.T) {
	c := &chain.Complex{Kind: "matrix", Naming: chain.ByColumn, Cells: []uint32{0, 3, 4, 2}, First: 2, Degrees: 3, KeepZero: true}
	job := folder(t, c, func(string) {}, nil, []uint32{1, none, 2}, []uint32{none, none, none, 0})
	pairs, betti, s := files(t, job, &Run{}, false)
	require.Equal(t, header+"2,0,0,3,0\n2,0,inf,0,\n3,0,inf,1,\n", pairs)
	require.Equal(t, "degree,betti\n2,1\n3,1\n", betti)
	require.Nil(t, s.Euler)
	require.Equal(t, []bool{true, true, false, false}, []bool{s.Betti[0] == nil, s.Betti[1] == nil, s.Betti[2] == nil, s.Betti[3] == nil})
}

// A cell that is a birth and a death, a column that kills twice, and a death before the
// birth are failed evidence: no file is left.
func TestBrokenPairs(t *testing.T) {
	three := []uint32{0, 1, 2}
	c := &chain.Complex{Kind: "facets", Naming: chain.ByVertex, Cells: counts(three, three, three), Degrees: 2}
	tables := stars(t, three, []float64{0, 1, 2}, three, three, three)
	for name, mates := range map[string][2][]uint32{
		"is a birth, and a death": {{0, none, none}, {0, none, none}},
		"kills twice":             {{1, 1, none}, {none, none, none}},
		"born at 2 and dies at 1": {{none, none, 1}, {none, none, none}},
	} {
		dst := filepath.Join(t.TempDir(), "result")
		_, err := Write(t.Context(), folder(t, c, tables, mates[0], mates[1]), dst, &Run{}, false)
		require.ErrorContains(t, err, name)
		require.ErrorAs(t, err, new(*evidence.Broken))
		require.Equal(t, exit.Internal, exit.Code(err))
		empty(t, dst)
	}
}

// A table whose cells are out of order cannot be printed in order.
func TestTableOutOfOrder(t *testing.T) {
	c := &chain.Complex{Kind: "facets", Naming: chain.ByVertex, Cells: []uint32{3}}
	job := folder(t, c, stars(t, []uint32{0, 1, 2}, []float64{0, 1, 2}, []uint32{0, 2, 1}))
	_, err := Write(t.Context(), job, t.TempDir(), &Run{}, false)
	require.ErrorAs(t, err, new(*record.Damage))
}

func empty(t *testing.T, dir string) {
	entries, err := os.ReadDir(dir)
	require.NoError(t, err)
	require.Empty(t, entries, "nothing half-written")
}

func TestFilesAppearTogether(t *testing.T) {
	job := valley(t)
	for _, name := range Files {
		dst := t.TempDir()
		require.NoError(t, os.WriteFile(filepath.Join(dst, name), []byte("mine"), 0o644))
		_, err := Write(t.Context(), job, dst, &Run{}, false)
		require.ErrorIs(t, err, record.ErrExists)
		require.Equal(t, "mine", text(t, dst, name))
		require.NoError(t, os.Remove(filepath.Join(dst, name)))
		empty(t, dst)
	}
}

func TestStopped(t *testing.T) {
	why := errors.New("enough")
	ctx, cancel := context.WithCancelCause(t.Context())
	cancel(why)
	dst := t.TempDir()
	_, err := Write(ctx, valley(t), dst, &Run{}, false)
	require.ErrorIs(t, err, why)
	empty(t, dst)
}

// Pairs that are missing or damaged are named.
func TestDamagedPairs(t *testing.T) {
	job := valley(t)
	path := stage.PairsPath(job, 1)
	b, err := os.ReadFile(path)
	require.NoError(t, err)
	b[len(b)-64] ^= 1
	require.NoError(t, os.WriteFile(path, b, 0o644))
	_, err = Write(t.Context(), job, t.TempDir(), &Run{}, false)
	require.ErrorContains(t, err, path)
	require.ErrorAs(t, err, new(*record.Damage))
	require.NoError(t, os.Remove(path))
	_, err = Write(t.Context(), job, t.TempDir(), &Run{}, false)
	require.ErrorIs(t, err, os.ErrNotExist)
}

var update = flag.Bool("update", false, "rewrite the golden files; read the difference before you commit it")

func golden(t *testing.T, name, got string) {
	path := filepath.Join("testdata", name)
	if *update {
		require.NoError(t, os.WriteFile(path, []byte(got), 0o644))
	}
	want, err := os.ReadFile(path)
	require.NoError(t, err)
	require.Equal(t, string(want), got)
}

// run is all that is known of a job, with figures that are not zero.
func full() *Run {
	return &Run{Version: "1.2.3", Inputs: []stage.InputFile{{Path: "rivers.csv", Bytes: 40, SHA256: "00ff"}}, Options: map[string]int{"degrees": 1},
		Blocks: []BlockRun{{Degree: 1, Route: "boundary", Reason: "columns have at most two entries", Graph: 3, Rank: 2, Nonzeros: 6},
			{Degree: 2, Route: "coboundary", Reason: "as asked", Apparent: 1, Cleared: 1, Settled: 1, RowsDropped: 2, Additions: 4, Evictions: 5, Rank: 1, Nonzeros: 6}},
		Exchanged: 7, ExchangeBytes: 80, Crew: []Member{{Name: "a", Tiles: 8, Settled: 1, Sent: 7, Received: 7, CPU: 0.5}},
		Seconds: map[string]float64{"read": 1, "reduce": 2}, CPU: 2.5, Peak: 1 << 20,
		Checks: []Check{{"boundary of boundary is zero", "passed"}, {"second answer by the other route", "skipped: too many columns"}}}
}

// The schema is a contract: keys, their order, and null where nothing is known.
func TestSummaryAsWritten(t *testing.T) {
	for name, run := range map[string]*Run{"summary-full.json": full(), "summary-bare.json": {}} {
		_, _, s := files(t, labelled(t, true), run, false)
		require.GreaterOrEqual(t, *s.Seconds.Total, *s.Seconds.Write)
		if run.Peak > 0 {
			require.Equal(t, 3+*s.Seconds.Write, *s.Seconds.Total, "the stages' sum and the writing")
		}
		zero := 0.0
		s.Seconds.Write, s.Seconds.Total = &zero, &zero
		var b bytes.Buffer
		require.NoError(t, s.WriteJSON(&b))
		golden(t, name, b.String())
	}
}

func TestWords(t *testing.T) {
	for name, job := range map[string]string{"words-valley.txt": valley(t), "words-cut.txt": labelled(t, true)} {
		_, _, s := files(t, job, full(), false)
		var b bytes.Buffer
		s.Words(&b)
		golden(t, name, b.String())
	}
}
