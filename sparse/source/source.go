// Package source says what a job reads: the specification of its input, the
// errors that readers raise, and how readers report progress. The readers
// themselves live below this folder, one package a format (table, npy, market)
// and one a kind of complex.
//
// Rules for every reader: bytes are streamed, never held twice; a length read
// from a file is compared with what is there before memory is taken; a broken
// file gives one *InputError and nothing is published; no reader panics on any
// bytes.
package source

import (
	"fmt"
	"math"
)

// Kind says what an input is; it is never guessed from a .csv.
type Kind string

// The kinds of input.
const (
	Points    Kind = "points"
	Distances Kind = "distances"
	Graph     Kind = "graph"
	Grid      Kind = "grid"
	Facets    Kind = "facets"
	Simplices Kind = "simplices"
	Matrix    Kind = "matrix"
)

// Spec is everything a user said about the input; it stands in job.json as it is.
type Spec struct {
	Kind          Kind     `json:"kind"`
	Inputs        []string `json:"inputs"`                     // paths; only Matrix takes more than one: ∂_1, ∂_2, …
	Degrees       int      `json:"degrees"`                    // K, or −1 for the kind's default
	MaxScale      *float64 `json:"max_scale,omitempty"`        // longest edge kept; nil: the enclosing radius (flag complexes)
	Voxels        string   `json:"voxels,omitempty"`           // grids: "vertices" (default) or "cells"
	Function      string   `json:"function,omitempty"`         // facets: file with one value per vertex; "" = every value 0
	Close         bool     `json:"close,omitempty"`            // simplices: add missing faces
	ValueFirst    bool     `json:"value_first,omitempty"`      // simplices: insist that the first column is the value
	Vertices      int      `json:"vertices,omitempty"`         // graph: at least that many vertices, isolated ones included
	FacesInCols   bool     `json:"faces_in_columns,omitempty"` // matrix: the file is the transpose
	FacesInRows   bool     `json:"faces_in_rows,omitempty"`    // matrix: insist that it is not
	FirstDegree   int      `json:"first_degree,omitempty"`     // matrix: degree of the first file's columns (default 1)
	ValueFiles    []string `json:"value_files,omitempty"`      // matrix: arrays of values, one per degree
	MemoryBytes   uint64   `json:"memory_bytes,omitempty"`     // budget: what would not fit is refused with *TooBig
	KeepZeroPairs bool     `json:"keep_zero,omitempty"`
}

// InputError says what is wrong with an input: one line that names the file, the
// place, what was expected and what to do. Exit code 65.
type InputError struct {
	Path  string
	Where string // "line 7", "column 12", "byte 96", or empty
	Why   string // what is wrong, what was expected, what to do
}

func (e *InputError) Error() string {
	if e.Where == "" {
		return e.Path + ": " + e.Why
	}
	return e.Path + ": " + e.Where + ": " + e.Why
}

// Broken builds an *InputError at a 1-based line (0: no line).
func Broken(path string, line int, format string, args ...any) *InputError {
	e := &InputError{Path: path, Why: fmt.Sprintf(format, args...)}
	if line > 0 {
		e.Where = fmt.Sprintf("line %d", line)
	}
	return e
}

// UsageError is a combination of options that means nothing. Exit code 64.
type UsageError struct{ Why string }

func (e *UsageError) Error() string { return e.Why }

// TooBig says that a complex does not fit the memory budget, with the counts and
// what would fit. Exit code 71.
type TooBig struct {
	Why string // counts, bytes needed, bytes allowed, and what would fit
}

func (e *TooBig) Error() string { return e.Why }

// Progress receives what a long call is doing. Stage names one of "read",
// "order", "block"; Advance says how much of the stage is done, in its own unit
// (bytes read, cells ordered). Both may be called from several goroutines.
// The receiver keeps the clock: sources have none.
type Progress interface {
	Stage(name string)
	Advance(done, total uint64)
}

// Quiet is a Progress that nobody watches.
type Quiet struct{}

// Stage implements Progress.
func (Quiet) Stage(string) {}

// Advance implements Progress.
func (Quiet) Advance(uint64, uint64) {}

// Clean maps −0 to 0, so that equal values print alike.
func Clean(v float64) float64 {
	if v == 0 {
		return 0
	}
	return v
}

// SortKey maps a float64 that is not NaN to a uint64 of the same order (−0 must be cleaned before).
func SortKey(v float64) uint64 {
	b := math.Float64bits(v)
	if b>>63 != 0 {
		return ^b
	}
	return b | 1<<63
}
