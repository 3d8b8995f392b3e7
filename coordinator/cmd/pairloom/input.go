package main

import (
	"errors"
	"fmt"
	"maps"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"pairloom/coordinator/plan"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

// kindsHelp is shown when a .csv comes without --as: it is never guessed.
const kindsHelp = `say with --as what it is:
  points     one point a line
  distances  a distance matrix, square or lower triangular
  graph      u,v[,value] a line
  facets     the vertices of one facet a line
  simplices  value,v0,v1,… a line`

// inputFlags are the flags that say what an input is and how it is worked on.
type inputFlags struct {
	c        *cobra.Command
	spec     source.Spec
	options  plan.Options
	as       string
	maxScale float64
	memory   string
}

func (f *inputFlags) add(c *cobra.Command) {
	f.c = c
	p := c.Flags()
	p.StringVar(&f.as, "as", "", "kind of input: points, distances, graph, grid, facets, simplices or matrix")
	p.IntVar(&f.spec.Degrees, "degrees", -1, "homology in degrees 0..K (default 1 for points, distances, graph; all otherwise)")
	p.Float64Var(&f.maxScale, "max-scale", 0, "longest edge kept (points, distances, graph)")
	p.StringVar(&f.spec.Voxels, "voxels", "", "grids: values stand on vertices (default) or cells")
	p.StringVar(&f.spec.Function, "function", "", "facets: file with one value a vertex, or none")
	p.BoolVar(&f.spec.Close, "close", false, "simplices: add missing faces")
	p.BoolVar(&f.spec.ValueFirst, "value-first", false, "simplices: insist that the first column is the value")
	p.IntVar(&f.spec.Vertices, "vertices", 0, "graph: at least N vertices, isolated ones included")
	p.BoolVar(&f.spec.FacesInCols, "faces-in-columns", false, "matrix: the files are the transposes")
	p.BoolVar(&f.spec.FacesInRows, "faces-in-rows", false, "matrix: insist that the files are not transposed")
	p.IntVar(&f.spec.FirstDegree, "first-degree", 0, "matrix: degree of the first file's columns (default 1)")
	p.StringSliceVar(&f.spec.ValueFiles, "values", nil, "matrix: arrays of values, one file a degree")
	p.StringVar(&f.memory, "memory", "", "memory budget, as 8GiB (default 80 % of what there is)")
	p.StringVar(&f.options.Route, "route", "auto", "auto, boundary or coboundary")
	p.StringSliceVar(&f.options.Without, "without", nil, "leave out apparent, graph, clearing or compression (tests)")
	p.BoolVar(&f.options.KeepZero, "keep-zero", false, "report pairs of zero length too")
	p.BoolVar(&f.options.Recheck, "recheck", false, "solve every block a second time, by the other route")
}

// kindFlags says for which kinds a flag makes sense.
var kindFlags = map[string][]source.Kind{
	"max-scale": {source.Points, source.Distances, source.Graph}, "voxels": {source.Grid}, "function": {source.Facets},
	"close": {source.Simplices}, "value-first": {source.Simplices}, "vertices": {source.Graph}, "faces-in-columns": {source.Matrix},
	"faces-in-rows": {source.Matrix}, "first-degree": {source.Matrix}, "values": {source.Matrix},
}

func usage(format string, args ...any) error {
	return exit.With(exit.Usage, fmt.Errorf(format, args...))
}

// read checks the flags against each other and returns what was asked.
func (f *inputFlags) read(args []string) (source.Spec, plan.Options, error) {
	spec, options := f.spec, f.options
	fail := func(err error) (source.Spec, plan.Options, error) { return spec, options, err }
	var err error
	if spec.Kind, err = kindOf(f.as, args); err != nil {
		return fail(err)
	}
	spec.Inputs = args
	if err := f.kindsFit(spec.Kind); err != nil {
		return fail(err)
	}
	if f.c.Flags().Changed("max-scale") {
		if !(f.maxScale >= 0) || math.IsInf(f.maxScale, 0) {
			return fail(usage("--max-scale %v; a finite number of at least 0 was expected", f.maxScale))
		}
		spec.MaxScale = &f.maxScale
	}
	if spec.Function == "none" {
		spec.Function = ""
	}
	if err := f.words(&spec, &options); err != nil {
		return fail(err)
	}
	spec.KeepZeroPairs = options.KeepZero
	return spec, options, inputsThere(slices.Concat(args, spec.ValueFiles, named(spec.Function)))
}

// kindsFit refuses flags that mean nothing for an input of that kind.
func (f *inputFlags) kindsFit(kind source.Kind) error {
	for _, name := range slices.Sorted(maps.Keys(kindFlags)) {
		if f.c.Flags().Changed(name) && !slices.Contains(kindFlags[name], kind) {
			return usage("--%s means nothing for an input read as %s; it is for %s", name, kind, list(kindFlags[name]))
		}
	}
	if f.spec.FacesInCols && f.spec.FacesInRows {
		return usage("--faces-in-columns and --faces-in-rows contradict each other; give one")
	}
	return nil
}

// list names some kinds: a, b or c.
func list(kinds []source.Kind) string {
	var out strings.Builder
	for i, k := range kinds {
		switch {
		case i > 0 && i == len(kinds)-1:
			out.WriteString(" or ")
		case i > 0:
			out.WriteString(", ")
		}
		out.WriteString(string(k))
	}
	return out.String()
}

// words checks flags whose values are words or sizes.
func (f *inputFlags) words(spec *source.Spec, options *plan.Options) (err error) {
	switch {
	case spec.Kind != source.Matrix && len(spec.Inputs) != 1:
		return usage("%d inputs; one was expected (only matrices come in several files)", len(spec.Inputs))
	case spec.Degrees < -1 || f.c.Flags().Changed("degrees") && spec.Degrees < 0:
		return usage("--degrees %d; a whole number of at least 0 was expected", spec.Degrees)
	case !slices.Contains([]string{"", "vertices", "cells"}, spec.Voxels):
		return usage("--voxels %q; vertices or cells was expected", spec.Voxels)
	case !slices.Contains([]string{"auto", "boundary", "coboundary"}, options.Route):
		return usage("--route %q; auto, boundary or coboundary was expected", options.Route)
	case f.c.Flags().Changed("first-degree") && spec.FirstDegree < 1:
		return usage("--first-degree %d; at least 1 was expected", spec.FirstDegree)
	case spec.Vertices < 0:
		return usage("--vertices %d; at least 0 was expected", spec.Vertices)
	}
	for _, step := range options.Without {
		if !slices.Contains([]string{"apparent", "graph", "clearing", "compression"}, step) {
			return usage("--without %q; apparent, graph, clearing or compression was expected", step)
		}
	}
	if spec.MemoryBytes, err = parseBytes(f.memory); err != nil {
		return err
	}
	options.Memory = spec.MemoryBytes
	return nil
}

// kindOf tells the kind from --as or from a file name that leaves no doubt.
func kindOf(as string, args []string) (source.Kind, error) {
	kinds := []source.Kind{source.Points, source.Distances, source.Graph, source.Grid, source.Facets, source.Simplices, source.Matrix}
	name := args[0]
	switch {
	case as != "" && slices.Contains(kinds, source.Kind(as)):
		return source.Kind(as), nil
	case as != "":
		return "", usage("--as %q; %s was expected", as, list(kinds))
	case strings.HasSuffix(name, ".npy"):
		return source.Grid, nil
	case strings.HasSuffix(name, ".mtx"), strings.HasSuffix(name, ".mtx.gz"):
		return source.Matrix, nil
	}
	return "", usage("%s: what is in it is never guessed; %s", name, kindsHelp)
}

// named is a list of one name, or of none.
func named(file string) []string {
	if file == "" {
		return nil
	}
	return []string{file}
}

func inputsThere(paths []string) error {
	for _, p := range paths {
		if _, err := os.Stat(p); errors.Is(err, os.ErrNotExist) {
			return exit.With(exit.NoInput, fmt.Errorf("%s: no such file", p))
		} else if err != nil {
			return err
		}
	}
	return nil
}

// units of sizes, longest first.
var units = []struct {
	name  string
	bytes float64
}{{"KiB", 1 << 10}, {"MiB", 1 << 20}, {"GiB", 1 << 30}, {"TiB", 1 << 40}, {"KB", 1e3}, {"MB", 1e6}, {"GB", 1e9}, {"TB", 1e12}, {"B", 1}, {"", 1}}

// parseBytes reads a size; "" is 80 % of the smaller of the cgroup's limit and RAM.
func parseBytes(s string) (uint64, error) {
	if s == "" {
		return system.defaultMemory(), nil
	}
	for _, u := range units {
		if digits, ok := strings.CutSuffix(s, u.name); ok {
			if v, err := strconv.ParseFloat(strings.TrimSpace(digits), 64); err == nil && v*u.bytes >= 1 && v*u.bytes < 1<<62 {
				return uint64(v * u.bytes), nil
			}
		}
	}
	return 0, usage("--memory %q; a size like 8GiB or 500MB was expected", s)
}
