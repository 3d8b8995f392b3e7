package order

import (
	"context"
	"errors"
	"math"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/table"
)

// network is an edge list as it was read, every line an edge.
type network struct {
	path    string
	complex *chain.Complex
	ends    []uint32  // two a line: numbers, or places in names
	values  []float64 // one a line; nil if edges have none
	names   []string  // nil: vertices are numbers
	places  map[string]uint32
	header  []string

	endsAt   array[uint32]
	valuesAt array[float64]
}

func (g *network) free() {
	g.ends, g.values, g.places = nil, nil, nil
	g.endsAt.free()
	g.valuesAt.free()
}

// errNames says that a label is not a number.
var errNames = errors.New("order: labels are names")

// read takes labels for numbers, and starts again if one is none.
func (g *network) read(ctx context.Context, p source.Progress) error {
	err := g.lines(ctx, p)
	if err == errNames {
		g.ends, g.values = g.ends[:0], g.values[:0]
		g.names, g.places = []string{}, map[string]uint32{}
		err = g.lines(ctx, p)
	}
	if len(g.values) == 0 {
		g.values = nil
	}
	return err
}

func (g *network) lines(ctx context.Context, p source.Progress) error {
	in, err := table.Open(g.path)
	if err != nil {
		return err
	}
	defer in.Close()
	width := 0
	for n := 0; in.Next(); n++ {
		if n%4096 == 0 {
			p.Advance(in.BytesRead(), in.Size())
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
		}
		if n == 0 {
			width = len(in.Fields())
		}
		if err := g.line(in, width); err != nil {
			return err
		}
	}
	g.header = in.Header()
	return in.Err()
}

// line checks and keeps an edge; all lines have as many fields as the first.
func (g *network) line(in *table.Reader, width int) error {
	f := in.Fields()
	switch {
	case len(f) != 2 && len(f) != 3:
		return source.Broken(g.path, in.Line(), "%d fields; an edge u,v or u,v,value was expected", len(f))
	case len(f) != width:
		return source.Broken(g.path, in.Line(), "%d fields; either all edges have a value or none", len(f))
	case len(f[0]) == 0 || len(f[1]) == 0:
		return source.Broken(g.path, in.Line(), "an endpoint is empty; u,v was expected")
	case len(g.ends)/2 >= math.MaxUint32-1:
		return source.Broken(g.path, in.Line(), "more than 2^32-2 edges, which is the most that is possible")
	}
	if len(g.ends)+2 > cap(g.ends) {
		g.ends = g.endsAt.grow(g.ends, len(g.ends)+max(len(g.ends), 1<<12))
	}
	for _, label := range f[:2] {
		v, err := g.vertex(label)
		if err != nil {
			return err
		}
		g.ends = append(g.ends, v)
	}
	if width == 2 {
		return nil
	}
	v, ok := table.ParseFloat(f[2])
	if !ok || math.IsNaN(v) || math.IsInf(v, 0) || v < 0 {
		return source.Broken(g.path, in.Line(), "value %q; a finite number of at least 0 was expected", f[2])
	}
	if len(g.values) == cap(g.values) {
		g.values = g.valuesAt.grow(g.values, len(g.values)+max(len(g.values), 1<<12))
	}
	g.values = append(g.values, source.Clean(v))
	return nil
}

// vertex is a label's number, or its place among the names.
func (g *network) vertex(label []byte) (uint32, error) {
	if g.names == nil {
		v, ok := table.ParseUint32(label)
		if !ok {
			return 0, errNames
		}
		return v, nil
	}
	at, ok := g.places[string(label)]
	if !ok {
		at = uint32(len(g.names))
		g.names = append(g.names, string(label))
		g.places[g.names[at]] = at
	}
	return at, nil
}
