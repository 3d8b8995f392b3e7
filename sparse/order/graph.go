package order

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strconv"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/source/table"
)

// network is an edge list as it was read: every line an edge between labels.
type network struct {
	path   string
	labels map[string]uint32 // label → order of appearance
	names  []string          // by order of appearance
	from   []uint32
	to     []uint32
	values []float64
	valued bool
	header []string
}

// Graph reads lines u,v[,value] and publishes the flag complex of the simple graph in
// dir: parallel edges (in either direction) merged at their least value, self-loops
// left out, both counted; vertices enter at 0, edges without values at 1. All edges are
// kept, or those up to spec.MaxScale. Vertices are numbers if all labels are whole
// numbers, and spec.Vertices adds isolated ones; otherwise labels, in bytewise order.
// The summary of the directed multigraph, every line an edge, is in Complex.Graph.
// Errors: *source.InputError, *source.UsageError, *source.TooBig.
func Graph(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	p.Stage("read")
	g := &network{path: spec.Inputs[0], labels: map[string]uint32{}}
	if err := g.read(ctx, p); err != nil {
		return nil, err
	}
	c := &chain.Complex{Kind: string(source.Graph), KeepZero: spec.KeepZeroPairs}
	number, n, err := g.number(spec, c)
	if err != nil {
		return nil, err
	}
	c.Graph = g.counts(number, n)
	edges := g.simple(spec, number, c)
	return newFlag(g.path, n, edges).complex(ctx, spec, c, dir, threads, p)
}

func (g *network) read(ctx context.Context, p source.Progress) error {
	in, err := table.Open(g.path)
	if err != nil {
		return err
	}
	defer in.Close()
	for in.Next() {
		if len(g.from)%4096 == 0 {
			p.Advance(in.BytesRead(), in.Size())
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
		}
		if err := g.line(in); err != nil {
			return err
		}
	}
	g.header = in.Header()
	return in.Err()
}

func (g *network) line(in *table.Reader) error {
	f := in.Fields()
	if len(g.from) == 0 {
		g.valued = len(f) == 3
	}
	switch {
	case len(f) != 2 && len(f) != 3:
		return source.Broken(g.path, in.Line(), "%d fields; an edge u,v or u,v,value was expected", len(f))
	case g.valued != (len(f) == 3):
		return source.Broken(g.path, in.Line(), "%d fields; either all edges have a value or none", len(f))
	case len(f[0]) == 0 || len(f[1]) == 0:
		return source.Broken(g.path, in.Line(), "an endpoint is empty; u,v was expected")
	}
	value := 1.0
	if g.valued {
		v, ok := table.ParseFloat(f[2])
		if !ok || math.IsNaN(v) || math.IsInf(v, 0) || v < 0 {
			return source.Broken(g.path, in.Line(), "value %q; a finite number of at least 0 was expected", f[2])
		}
		value = source.Clean(v)
	}
	g.from, g.to, g.values = append(g.from, g.label(f[0])), append(g.to, g.label(f[1])), append(g.values, value)
	return nil
}

func (g *network) label(b []byte) uint32 {
	i, ok := g.labels[string(b)]
	if !ok {
		i = uint32(len(g.names))
		g.names = append(g.names, string(b))
		g.labels[g.names[i]] = i
	}
	return i
}

// number gives every label its vertex: position among all, sorted.
func (g *network) number(spec source.Spec, c *chain.Complex) (number []uint32, n uint32, err error) {
	ids, numeric := g.numeric()
	if !numeric {
		return g.byName(spec, c)
	}
	all := slices.Clone(ids)
	for v := range uint32(max(spec.Vertices, 0)) {
		all = append(all, v)
	}
	slices.Sort(all)
	all = slices.Compact(all)
	number = make([]uint32, len(ids))
	for i, id := range ids {
		at, _ := slices.BinarySearch(all, id)
		number[i] = uint32(at)
	}
	if n = uint32(len(all)); n > 0 && all[n-1] != n-1 {
		for _, id := range all {
			c.Labels = append(c.Labels, strconv.FormatUint(uint64(id), 10))
		}
	}
	return number, n, g.empty(n)
}

func (g *network) empty(n uint32) error {
	if n == 0 {
		return source.Broken(g.path, 0, "no edge in it and no --vertices; u,v[,value] was expected in each line")
	}
	return nil
}

// numeric returns the labels as numbers if they all are.
func (g *network) numeric() ([]uint32, bool) {
	ids := make([]uint32, len(g.names))
	for i, name := range g.names {
		id, ok := table.ParseUint32([]byte(name))
		if !ok || strconv.FormatUint(uint64(id), 10) != name {
			return nil, false
		}
		ids[i] = id
	}
	return ids, true
}

func (g *network) byName(spec source.Spec, c *chain.Complex) (number []uint32, n uint32, err error) {
	if spec.Vertices > len(g.names) {
		return nil, 0, &source.UsageError{Why: fmt.Sprintf("--vertices %d: %s names its %d vertices by labels, and isolated ones would have none; number the vertices, or leave --vertices out", spec.Vertices, g.path, len(g.names))}
	}
	c.Labels = slices.Sorted(slices.Values(g.names))
	number = make([]uint32, len(g.names))
	for i, name := range c.Labels {
		number[g.labels[name]] = uint32(i)
	}
	if g.header != nil && !g.valued {
		c.Notes = append(c.Notes, chain.Note{What: fmt.Sprintf("first line taken as a header, as it has no number: %q", g.header), Count: 1})
	}
	return number, uint32(len(c.Labels)), nil
}

// counts treats the file as a directed multigraph: the rank of its incidence matrix is
// vertices − components; a self-loop has an empty column.
func (g *network) counts(number []uint32, n uint32) *chain.GraphCounts {
	up := make([]uint32, n)
	for v := range up {
		up[v] = uint32(v)
	}
	find := func(x uint32) uint32 {
		for up[x] != x {
			up[x] = up[up[x]]
			x = up[x]
		}
		return x
	}
	rank := uint64(0)
	for i := range g.from {
		if a, b := find(number[g.from[i]]), find(number[g.to[i]]); a != b {
			up[a] = b
			rank++
		}
	}
	edges := uint64(len(g.from))
	return &chain.GraphCounts{Vertices: uint64(n), Edges: edges, Rank: rank, Components: uint64(n) - rank, Loops: edges - rank}
}

// simple lists the edges of the simple graph.
func (g *network) simple(spec source.Spec, number []uint32, c *chain.Complex) []edge {
	var edges []edge
	loops, beyond := uint64(0), uint64(0)
	for i := range g.from {
		u, v := number[g.from[i]], number[g.to[i]]
		switch {
		case u == v:
			loops++
		case spec.MaxScale != nil && g.values[i] > *spec.MaxScale:
			beyond++
		default:
			edges = append(edges, edge{min(u, v), max(u, v), g.values[i]})
		}
	}
	slices.SortFunc(edges, func(a, b edge) int {
		switch {
		case a.u != b.u:
			return int(int64(a.u) - int64(b.u))
		case a.v != b.v:
			return int(int64(a.v) - int64(b.v))
		case a.value < b.value:
			return -1
		case a.value > b.value:
			return 1
		}
		return 0
	})
	before := len(edges)
	edges = slices.CompactFunc(edges, func(a, b edge) bool { return a.u == b.u && a.v == b.v })
	for _, note := range []chain.Note{{What: "self-loops left out", Count: loops}, {What: "parallel edges merged", Count: uint64(before - len(edges))}, {What: "edges beyond --max-scale left out", Count: beyond}} {
		if note.Count > 0 {
			c.Notes = append(c.Notes, note)
		}
	}
	return edges
}
