package main

import (
	"bytes"
	"compress/gzip"
	"context"
	"encoding/json"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/coordinator/plan"
	"pairloom/sparse/exit"
)

// command runs one command line of the whole binary, in this process.
func command(t *testing.T, args ...string) (out, errs string, code int) {
	var stdout, stderr bytes.Buffer
	root := rootCommand()
	root.SetArgs(args)
	root.SetOut(&stdout)
	root.SetErr(&stderr)
	code = run(t.Context(), root)
	return stdout.String(), stderr.String(), code
}

func file(t *testing.T, name, text string) string {
	path := filepath.Join(t.TempDir(), name)
	require.NoError(t, os.WriteFile(path, []byte(text), 0o644))
	return path
}

func zipped(t *testing.T, text string, cut int) string {
	var b bytes.Buffer
	z := gzip.NewWriter(&b)
	_, err := z.Write([]byte(text))
	require.NoError(t, err)
	require.NoError(t, z.Close())
	return b.String()[:b.Len()-cut]
}

const banner = "%%MatrixMarket matrix coordinate pattern general\n"

// Every broken input gives one clear line, exit code 65, and no output.
func TestBrokenInputs(t *testing.T) {
	npy := func(head, data string) string {
		return "\x93NUMPY\x01\x00" + string([]byte{byte(len(head)), 0}) + head + data
	}
	for _, c := range []struct{ as, name, text, want string }{
		{"grid", "a.npy", "no array", "NUMPY"},
		{"grid", "a.npy", npy("{'descr': '<f8', 'fortran_order': False, 'shape': (2,), }\n", "12345678"), "8"},
		{"grid", "a.npy", npy("{'descr': '<f8', 'fortran_order': False, 'shape': (999999999999,), }\n", "12345678"), ""},
		{"grid", "a.npy", npy("{'descr': '<c16', 'fortran_order': False, 'shape': (1,), }\n", "1234567812345678"), "c16"},
		{"grid", "a.npy", npy("{'descr': '<f8', 'fortran_order': False, 'shape': (1,), }\n", "\x00\x00\x00\x00\x00\x00\xf0\x7f"), "NaN"},
		{"points", "p.csv", "1,2\n3\n", "line 2"},
		{"points", "p.csv", "1,2\n3,x\n", "column 2"},
		{"points", "p.csv", "1,2\n3,NaN\n", "finite"},
		{"points", "p.csv", "", "no data"},
		{"distances", "d.csv", "0,1\n2,0\n", "symmetric"},
		{"distances", "d.csv", "0,1\n1,3\n", "diagonal"},
		{"distances", "d.csv", "0,-1\n-1,0\n", "not negative"},
		{"distances", "d.csv", "0,1,2\n1,0,3\n", "square"},
		{"distances", "d.csv", "1\n2,3,4\n", "line 2"},
		{"graph", "g.csv", "1\n", "line 1"},
		{"graph", "g.csv", "0,1,2\n1,2\n", "line 2"},
		{"graph", "g.csv", "0,1,-2\n", "at least 0"},
		{"graph", "g.csv", "0,,1\n", "endpoint"},
		{"facets", "f.csv", "0,1,1\n", "repeated"},
		{"facets", "f.csv", "0,-1\n", "whole number"},
		{"simplices", "s.csv", "0,0\n0,1\n1,0,1\n1,0,1\n", "already"},
		{"simplices", "s.csv", "0,0\n1,0,1\n", "face"},
		{"simplices", "s.csv", "5.5,0\n0,1\n1,0,1\n", "face"},
		{"simplices", "s.csv", "0,1\n1,2\n2,3\n", "vertex lists"},
		{"simplices", "s.csv", "nan,1\n", "finite"},
		{"matrix", "m.mtx", "x\n", "%%MatrixMarket"},
		{"matrix", "m.mtx", "%%MatrixMarket matrix array real general\n1 1\n1\n", "coordinate"},
		{"matrix", "m.mtx", "%%MatrixMarket matrix coordinate pattern symmetric\n1 1 1\n1 1\n", "symmetr"},
		{"matrix", "m.mtx", "%%MatrixMarket matrix coordinate real general\n2 1 1\n1 1 0.5\n", "whole number"},
		{"matrix", "m.mtx", banner, "size line"},
		{"matrix", "m.mtx", banner + "4000000000 1 1\n1 1\n", "more than a file"},
		{"matrix", "m.mtx", banner + "2 1 900000\n1 1\n", "cannot hold"},
		{"matrix", "m.mtx", banner + "2 1 2\n1 1\n", "ends after 1 of 2"},
		{"matrix", "m.mtx", banner + "2 1 1\n1 1\n2 1\n", "more entries"},
		{"matrix", "m.mtx", banner + "2 1 1\n0 1\n", "counted from 1"},
		{"matrix", "m.mtx", banner + "2 1 1\n3 1\n", "outside"},
		{"matrix", "m.mtx", banner + "3 2 4\n1 1\n2 1\n3 2\n2 2\n1 1 1\n", ""},
		{"matrix", "m.mtx.gz", zipped(t, banner+strings.Repeat("% comment\n", 9000)+"2 1 1\n1 1\n", 40), "cut short"},
	} {
		in, out := file(t, c.name, c.text), filepath.Join(t.TempDir(), "out")
		stdout, stderr, code := command(t, "reduce", in, "--as", c.as, "--out", out, "--quiet")
		require.Equal(t, exit.BadInput, code, "%s %q: %s", c.as, c.text, stderr)
		require.Empty(t, stdout)
		require.Equal(t, 1, strings.Count(stderr, "\n"), stderr)
		require.Contains(t, stderr, c.want)
		require.Contains(t, stderr, c.name)
		require.NoDirExists(t, out, "nothing is left")
	}
}

// Wrong command lines and missing things have their own codes.
func TestExitCodes(t *testing.T) {
	points := file(t, "p.csv", "0,0\n0,1\n1,0\n1,1\n")
	full := t.TempDir()
	require.NoError(t, os.WriteFile(filepath.Join(full, "mine"), nil, 0o644))
	for _, c := range []struct {
		code int
		args []string
	}{
		{exit.Done, []string{"reduce", points, "--as", "points", "--quiet"}},
		{exit.Done, []string{"plan", points, "--as", "points"}},
		{exit.Done, []string{"version"}},
		{exit.Usage, []string{"reduce", points}},
		{exit.Usage, []string{"reduce"}},
		{exit.Usage, []string{"nonsense"}},
		{exit.Usage, []string{"reduc", points}},
		{exit.Usage, []string{"plan"}},
		{exit.Usage, []string{"version", "more"}},
		{exit.Usage, []string{"plan", points, "--as", "points", "--threads", "0"}},
		{exit.Usage, []string{"reduce", points, "--as", "points", "-z"}},
		{exit.Usage, []string{"reduce", points, "--as", "points", "--out"}},
		{exit.Done, nil},
		{exit.Done, []string{"help", "reduce"}},
		{exit.Usage, []string{"reduce", points, "--nonsense"}},
		{exit.Usage, []string{"reduce", points, "--as", "pebbles"}},
		{exit.Usage, []string{"reduce", points, "--as", "points", "--voxels", "cells"}},
		{exit.Usage, []string{"reduce", points, "--as", "points", "--memory", "lots"}},
		{exit.Usage, []string{"reduce", points, "--as", "points", "--route", "round"}},
		{exit.Usage, []string{"reduce", points, "--as", "points", "--workers", "0"}},
		{exit.NoInput, []string{"reduce", "missing.npy"}},
		{exit.TooBig, []string{"reduce", points, "--as", "points", "--memory", "100B"}},
		{exit.CannotOut, []string{"reduce", points, "--as", "points", "--out", full}},
		{exit.CannotOut, []string{"reduce", points, "--as", "points", "--out", points}},
		{exit.CannotOut, []string{"reduce", points, "--as", "points", "--jobs", points}},
	} {
		_, stderr, code := command(t, c.args...)
		require.Equal(t, c.code, code, "%v: %s", c.args, stderr)
	}
}

// A square of four points: one component, one loop from 1 to the diagonal's length is
// cut at the enclosing radius. Files and JSON agree for any crew.
func TestReduceWritesItsResult(t *testing.T) {
	points, one, two := file(t, "p.csv", "0,0\n0,1\n1,0\n1,1\n"), filepath.Join(t.TempDir(), "one"), filepath.Join(t.TempDir(), "two")
	_, stderr, code := command(t, "reduce", points, "--as", "points", "--out", one, "--quiet")
	require.Zero(t, code, stderr)
	out, stderr, code := command(t, "reduce", points, "--as", "points", "--out", two, "--quiet", "--workers", "3", "--threads", "3", "--json")
	require.Zero(t, code, stderr)
	want := "degree,birth,death,birth_cell,death_cell\n0,0,1,1,0 1\n0,0,1,2,0 2\n0,0,1,3,1 3\n0,0,inf,0,\n1,1,1.4142135623730951,2 3,0 1 2\n"
	got := string(read(t, one, "pairs.csv"))
	require.Equal(t, want[:len(want)-len("0 1 2\n")], got[:len(want)-len("0 1 2\n")])
	require.Equal(t, got, string(read(t, two, "pairs.csv")))
	require.Equal(t, "degree,betti\n0,1\n1,0\n", string(read(t, one, "betti.csv")))
	var s map[string]any
	require.NoError(t, json.Unmarshal([]byte(out), &s))
	for _, key := range []string{"schema", "version", "inputs", "kind", "options", "degrees", "truncated", "per_degree", "betti", "euler", "graph", "exchange", "crew", "checkpoints", "seconds", "cpu_seconds", "peak_bytes", "checks"} {
		require.Contains(t, s, key)
	}
	require.NoDirExists(t, filepath.Join(one, "job"))
}

// With --json a failure is one object on stdout too.
func TestFailuresAsJSON(t *testing.T) {
	for _, c := range []struct {
		code int
		args []string
	}{
		{exit.NoInput, []string{"reduce", "missing.npy"}},
		{exit.BadInput, []string{"plan", file(t, "broken.npy", "<&>")}},
		{exit.Usage, []string{"reduce", "a.npy", "--as", "pebbles"}},
	} {
		out, stderr, code := command(t, append(c.args, "--json")...)
		require.Equal(t, c.code, code)
		var f failure
		require.NoError(t, json.Unmarshal([]byte(out), &f), out)
		require.Equal(t, failure{strings.TrimSuffix(strings.TrimPrefix(stderr, "pairloom: "), "\n"), code}, f)
	}
}

// SIGINT and SIGTERM cancel the context: exit code 75, and nothing is left, whether the
// job has not begun or is at work.
func TestStopped(t *testing.T) {
	in := grid(t, 24)
	for _, args := range [][]string{{"reduce", in, "--out", filepath.Join(t.TempDir(), "out")}, {"plan", in}} {
		ctx, cancel := context.WithCancel(t.Context())
		cancel()
		require.Equal(t, exit.Stopped, silently(ctx, args...))
		if len(args) > 2 {
			require.NoDirExists(t, args[3])
		}
	}
	out := filepath.Join(t.TempDir(), "out")
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	go cancelWhen(ctx, cancel, filepath.Join(out, "job", "order"))
	require.Equal(t, exit.Stopped, silently(ctx, "reduce", grid(t, 96), "--out", out))
	require.NoDirExists(t, out)
}

func silently(ctx context.Context, args ...string) int {
	root := rootCommand()
	root.SetArgs(args)
	root.SetOut(io.Discard)
	root.SetErr(io.Discard)
	return run(ctx, root)
}

// cancelWhen cancels as soon as a folder is there.
func cancelWhen(ctx context.Context, cancel context.CancelFunc, folder string) {
	for ctx.Err() == nil {
		if _, err := os.Stat(folder); err == nil {
			cancel()
		}
		runtime.Gosched()
	}
}

// --replace takes the place of the old result after success only; --jobs and --keep-job
// say where the job folder is and that it stays.
func TestPlaces(t *testing.T) {
	points := file(t, "p.csv", "0,0\n0,1\n1,0\n1,1\n")
	out, jobs := t.TempDir(), filepath.Join(t.TempDir(), "jobs")
	for _, name := range []string{"pairs.csv", "mine.txt"} {
		require.NoError(t, os.WriteFile(filepath.Join(out, name), []byte("old"), 0o644))
	}
	_, _, code := command(t, "reduce", points, "--as", "points", "--out", out, "--replace", "--memory", "100B")
	require.Equal(t, exit.TooBig, code)
	require.Equal(t, "old", string(read(t, out, "pairs.csv")))
	_, stderr, code := command(t, "reduce", points, "--as", "points", "--out", out, "--replace", "--jobs", jobs)
	require.Zero(t, code, stderr)
	require.Contains(t, string(read(t, out, "pairs.csv")), "0,0,inf,0,")
	require.Equal(t, []string{"betti.csv", "mine.txt", "pairs.csv", "summary.json"}, names(t, out))
	require.Empty(t, names(t, jobs))
	_, stderr, code = command(t, "reduce", points, "--as", "points", "--jobs", jobs, "--keep-job")
	require.Zero(t, code, stderr)
	require.Len(t, names(t, jobs), 1)
}

func names(t *testing.T, folder string) (list []string) {
	entries, err := os.ReadDir(folder)
	require.NoError(t, err)
	for _, e := range entries {
		list = append(list, e.Name())
	}
	return list
}

// Every command teaches: what it does, and one worked example.
func TestHelp(t *testing.T) {
	for _, c := range commands() {
		require.NotEmpty(t, c.Short, c.Name())
		require.Contains(t, c.Example, "pairloom "+c.Name())
		out, _, code := command(t, c.Name(), "--help")
		require.Zero(t, code)
		require.Contains(t, out, c.Example)
	}
	out, _, _ := command(t)
	require.Contains(t, out, "A first step")
}

// The plan of a grid: blocks 1 and 3 are graphs, block 2 is reduced.
func TestPlanOfAGrid(t *testing.T) {
	in := grid(t, 8)
	text, stderr, code := command(t, "plan", in, "--json")
	require.Zero(t, code, stderr)
	var o outlook
	require.NoError(t, json.Unmarshal([]byte(text), &o))
	require.Equal(t, []uint32{512, 1344, 1176, 343}, o.Cells, "8³ vertices and the cells between them")
	require.Len(t, o.Blocks, 3)
	var reduced blockOutlook
	for _, b := range o.Blocks {
		require.Equal(t, 2*uint64(b.Degree)*uint64(o.Cells[b.Degree]), b.Nonzeros, "a k-cube has 2k facets")
		if b.Method == string(plan.Reduce) {
			reduced = b
		}
	}
	require.Equal(t, 2, reduced.Degree)
	require.Positive(t, reduced.Residual)
	require.Less(t, reduced.Residual, reduced.Columns)
	require.Equal(t, 8, reduced.Tiles)
	text, _, code = command(t, "plan", in)
	require.Zero(t, code)
	require.Contains(t, text, "Degree 1: 1344 cells.\n")
	require.Regexp(t, `Block 2: 4704 entries; boundary route \(.*\); about \d+ of 1176 columns are left`, text)
}

// The demo says what came out. From the array itself: its one highest point is 1076 at
// (297, 219), so the last loop to be filled is filled there; (343, 194) has 877.
func TestDemo(t *testing.T) {
	out, stderr, code := command(t, "reduce", "../../../bench/demo/jacksboro-fault.npy", "--quiet")
	require.Zero(t, code, stderr)
	require.Contains(t, out, "A grid complex of 553035 cells, dimension 2.\n")
	require.Contains(t, out, "Degree 0: 1 connected component at the end")
	require.Contains(t, out, "    from 877 (cell 343 194) to 1076 (cell 297 219), a length of 199\n")
}
