package main

import (
	"os"
	"path/filepath"
	"testing"

	"github.com/spf13/cobra"
	"github.com/stretchr/testify/require"

	"pairloom/coordinator/plan"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

// parsed reads flags as a command of its own would.
func parsed(args ...string) (spec source.Spec, options plan.Options, err error) {
	var f inputFlags
	c := &cobra.Command{Use: "parse", SilenceErrors: true, SilenceUsage: true, RunE: func(_ *cobra.Command, args []string) (err error) {
		spec, options, err = f.read(args)
		return err
	}}
	c.SetFlagErrorFunc(flagError)
	f.add(c)
	c.SetArgs(args)
	err = c.Execute()
	return spec, options, err
}

// Every flag reaches the specification of the input or the options of the work.
func TestFlagsReachTheSpecification(t *testing.T) {
	in, other := file(t, "in.csv", "x"), file(t, "other.csv", "x")
	matrix, grid, gz := file(t, "d1.mtx", "x"), file(t, "v.npy", "x"), file(t, "d2.mtx.gz", "x")
	radius := 2.5
	for _, c := range []struct {
		args []string
		want source.Spec
	}{
		{[]string{grid}, source.Spec{Kind: source.Grid, Inputs: []string{grid}, Degrees: -1}},
		{[]string{matrix, gz}, source.Spec{Kind: source.Matrix, Inputs: []string{matrix, gz}, Degrees: -1}},
		{[]string{grid, "--as", "points"}, source.Spec{Kind: source.Points, Inputs: []string{grid}, Degrees: -1}},
		{[]string{grid, "--voxels", "cells", "--degrees", "2"}, source.Spec{Kind: source.Grid, Inputs: []string{grid}, Degrees: 2, Voxels: "cells"}},
		{[]string{in, "--as", "distances", "--max-scale", "2.5"}, source.Spec{Kind: source.Distances, Inputs: []string{in}, Degrees: -1, MaxScale: &radius}},
		{[]string{in, "--as", "graph", "--vertices", "9"}, source.Spec{Kind: source.Graph, Inputs: []string{in}, Degrees: -1, Vertices: 9}},
		{[]string{in, "--as", "facets", "--function", other}, source.Spec{Kind: source.Facets, Inputs: []string{in}, Degrees: -1, Function: other}},
		{[]string{in, "--as", "facets", "--function", "none"}, source.Spec{Kind: source.Facets, Inputs: []string{in}, Degrees: -1}},
		{[]string{in, "--as", "simplices", "--close", "--value-first"}, source.Spec{Kind: source.Simplices, Inputs: []string{in}, Degrees: -1, Close: true, ValueFirst: true}},
		{[]string{matrix, "--faces-in-columns", "--first-degree", "2", "--values", other + "," + in}, source.Spec{Kind: source.Matrix,
			Inputs: []string{matrix}, Degrees: -1, FacesInCols: true, FirstDegree: 2, ValueFiles: []string{other, in}}},
		{[]string{matrix, "--faces-in-rows", "--keep-zero"}, source.Spec{Kind: source.Matrix, Inputs: []string{matrix}, Degrees: -1, FacesInRows: true, KeepZeroPairs: true}},
	} {
		got, options, err := parsed(append(c.args, "--memory", "3KiB")...)
		require.NoError(t, err, c.args)
		c.want.MemoryBytes = 3 << 10
		require.Equal(t, c.want, got)
		require.Equal(t, plan.Options{Route: "auto", Memory: 3 << 10, KeepZero: c.want.KeepZeroPairs}, options)
	}
	_, options, err := parsed(grid, "--route", "coboundary", "--without", "apparent,clearing", "--recheck", "--memory", "1GB")
	require.NoError(t, err)
	require.Equal(t, plan.Options{Route: "coboundary", Without: []string{"apparent", "clearing"}, Recheck: true, Memory: 1e9}, options)
}

// What means nothing is refused by one clear line.
func TestFlagsThatMeanNothing(t *testing.T) {
	in, grid, matrix := file(t, "in.csv", "x"), file(t, "v.npy", "x"), file(t, "d.mtx", "x")
	missing := filepath.Join(t.TempDir(), "missing")
	for _, c := range []struct {
		code int
		says string
		args []string
	}{
		{exit.Usage, "simplices  value,v0,v1", []string{in}},
		{exit.Usage, `"pebbles"; points, distances, graph, grid, facets, simplices or matrix`, []string{in, "--as", "pebbles"}},
		{exit.Usage, "--voxels means nothing for an input read as points; it is for grid", []string{in, "--as", "points", "--voxels", "cells"}},
		{exit.Usage, "for points, distances or graph", []string{grid, "--max-scale", "1"}},
		{exit.Usage, "--function", []string{grid, "--function", in}},
		{exit.Usage, "--close", []string{in, "--as", "facets", "--close"}},
		{exit.Usage, "--values", []string{grid, "--values", in}},
		{exit.Usage, "--voxels \"faces\"; vertices or cells", []string{grid, "--voxels", "faces"}},
		{exit.Usage, "at least 0", []string{in, "--as", "points", "--max-scale", "-1"}},
		{exit.Usage, "finite", []string{in, "--as", "points", "--max-scale", "NaN"}},
		{exit.Usage, "finite", []string{in, "--as", "points", "--max-scale", "inf"}},
		{exit.Usage, "--degrees -2", []string{grid, "--degrees", "-2"}},
		{exit.Usage, "--degrees \"1.5\"; a whole number", []string{grid, "--degrees", "1.5"}},
		{exit.Usage, "--degrees", []string{grid, "--degrees", "-1"}},
		{exit.Usage, "--first-degree 0", []string{matrix, "--first-degree", "0"}},
		{exit.Usage, "contradict", []string{matrix, "--faces-in-rows", "--faces-in-columns"}},
		{exit.Usage, "--vertices -3", []string{in, "--as", "graph", "--vertices", "-3"}},
		{exit.Usage, "--route \"round\"", []string{grid, "--route", "round"}},
		{exit.Usage, "--without \"thinking\"", []string{grid, "--without", "apparent,thinking"}},
		{exit.Usage, "2 inputs; one", []string{grid, grid}},
		{exit.Usage, "did you mean --max-scale?", []string{grid, "--max-scal", "1"}},
		{exit.Usage, "did you mean --keep-zero?", []string{grid, "--keepzero"}},
		{exit.NoInput, "missing: no such file", []string{missing, "--as", "points"}},
		{exit.NoInput, "missing: no such file", []string{in, "--as", "facets", "--function", missing}},
		{exit.NoInput, "missing: no such file", []string{matrix, "--values", in + "," + missing}},
	} {
		_, _, err := parsed(c.args...)
		require.ErrorContains(t, err, c.says, c.args)
		require.Equal(t, c.code, exit.Code(err), c.args)
	}
}

func TestSizes(t *testing.T) {
	for text, want := range map[string]uint64{"8GiB": 8 << 30, "500MB": 500e6, "1.5KiB": 1536, "7": 7, "12 B": 12, "2TiB": 2 << 40} {
		got, err := parseBytes(text)
		require.NoError(t, err)
		require.Equal(t, want, got)
	}
	for _, text := range []string{"lots", "-1GB", "0", "GiB", "NaN", "inf", "1e300TB", "8 giraffes", "0.1B"} {
		_, err := parseBytes(text)
		require.Equal(t, exit.Usage, exit.Code(err), text)
	}
	got, err := parseBytes("")
	require.NoError(t, err)
	require.Equal(t, system.defaultMemory(), got)
	require.NotZero(t, got)
}

// groups lays out a mount of control groups: files by path.
func groups(t *testing.T, self string, files map[string]string) limits {
	l := limits{mount: t.TempDir(), self: file(t, "cgroup", self)}
	for name, text := range files {
		path := filepath.Join(l.mount, name)
		require.NoError(t, os.MkdirAll(filepath.Dir(path), 0o755))
		require.NoError(t, os.WriteFile(path, []byte(text), 0o644))
	}
	return l
}

// The tightest of a process's groups and of those above holds, in either version.
func TestLimitsOfControlGroups(t *testing.T) {
	two := groups(t, "0::/batch/job_7/step_0\n", map[string]string{
		"batch/memory.max": "9000\n", "batch/job_7/memory.max": "4000\n", "batch/job_7/step_0/memory.max": "max\n", "other/memory.max": "5\n",
		"batch/cpu.max": "max 100000\n", "batch/job_7/cpu.max": "250000 100000\n"})
	one := groups(t, "5:memory:/a\n4:cpu,cpuacct:/a/b\n0::/\n", map[string]string{
		"memory/memory.limit_in_bytes": "9223372036854771712\n", "memory/a/memory.limit_in_bytes": "4000\n",
		"cpu,cpuacct/a/b/cpu.cfs_quota_us": "-1\n", "cpu,cpuacct/a/b/cpu.cfs_period_us": "100000\n",
		"cpu,cpuacct/a/cpu.cfs_quota_us": "250000\n", "cpu,cpuacct/a/cpu.cfs_period_us": "100000\n"})
	inside := groups(t, "0::/../../host/path\n", map[string]string{"memory.max": "4000\n", "cpu.max": "250000 100000\n"})
	for _, l := range []limits{two, one, inside} {
		require.Equal(t, 4000.0, l.memory())
		require.Equal(t, 2.5, l.cpus())
		require.Equal(t, uint64(3200), l.defaultMemory())
		require.LessOrEqual(t, l.defaultThreads(), 2)
		require.GreaterOrEqual(t, l.defaultThreads(), 1)
	}
	none := groups(t, "0::/\n", map[string]string{"cpu.max": "1000 100000\n"})
	require.Equal(t, 1, none.defaultThreads(), "a hundredth of a CPU is one thread")
	require.Greater(t, none.defaultMemory(), uint64(1<<20))
	require.GreaterOrEqual(t, limits{"/nowhere", "/nowhere"}.defaultThreads(), 1)
}
