package order

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strconv"

	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// Graph reads lines u,v[,value] and publishes the flag complex of the simple graph in
// dir, which exists: parallel edges (in either direction) merged at their least value,
// self-loops left out, both counted in notes; vertices enter at 0, edges without values
// at 1, a simplex with its longest edge. All edges are kept, or those up to
// spec.MaxScale. Degrees K, default 1; simplices up to degree K+1 are made.
//
// Vertices. If all labels are whole numbers below 2^32−1, vertices are the numbers that
// occur, and all below spec.Vertices. Else they are the labels, in bytewise order, and
// spec.Vertices may not ask for more. So the order of lines changes nothing.
//
// Complex.Graph treats the file as a directed multigraph, every line an edge: the rank
// of its incidence matrix is vertices − components, a self-loop has an empty column.
//
// Errors: *source.InputError naming the line, *source.UsageError, *source.TooBig before
// anything is built; ctx's cause; what the system says. After an error no file is left
// in dir. Memory: 8 to 32 bytes a line while edges are merged (labels: 16 to 40 bytes
// and their text each), then as Points.
func Graph(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error) {
	path, err := oneInput(spec)
	if err != nil {
		return nil, err
	}
	if err := checkScale(spec); err != nil {
		return nil, err
	}
	p.Stage("read")
	g := &network{path: path, complex: &chain.Complex{Kind: string(source.Graph)}}
	defer g.free()
	if err := g.read(ctx, p); err != nil {
		return nil, err
	}
	p.Stage("order")
	n, err := g.number(spec)
	if err != nil {
		return nil, err
	}
	g.summary(n)
	simple := g.simple(spec)
	g.free()
	return newFlag(path, n, simple).complex(ctx, spec, g.complex, dir, threads, p)
}

// number turns the ends of edges into vertices 0..n−1.
func (g *network) number(spec source.Spec) (n uint32, err error) {
	if uint64(max(spec.Vertices, 0)) >= math.MaxUint32 {
		return 0, &source.UsageError{Why: fmt.Sprintf("--vertices %d; at most 2^32-2 are possible", spec.Vertices)}
	}
	switch least := uint32(max(spec.Vertices, 0)); {
	case g.names != nil:
		err = g.byName(least)
		n = uint32(len(g.names))
	default:
		n, err = g.byNumber(least, spec.MemoryBytes)
	}
	if err == nil && n == 0 {
		err = source.Broken(g.path, 0, "no edge in it and no --vertices; u,v[,value] was expected in each line")
	}
	return n, err
}

// byNumber numbers the vertices that occur and all below least, in their order.
func (g *network) byNumber(least uint32, budget uint64) (uint32, error) {
	ends := []*degreeTable{{k: 1, verts: g.ends}}
	found := labelsOf(ends)
	above := found[lowerBound(found, least):]
	n := uint64(least) + uint64(len(above))
	if budget > 0 && n*bytesVertex > budget {
		return 0, &source.TooBig{Why: fmt.Sprintf("%s: %d vertices need %d bytes and %d are allowed; lower --vertices or raise --memory", g.path, n, n*bytesVertex, budget)}
	}
	if len(above) == 0 || above[len(above)-1] == uint32(n-1) {
		return uint32(n), nil // dense as they are
	}
	all := make([]uint32, n)
	for v := range least {
		all[v] = v
	}
	copy(all[least:], above)
	densify(ends, all)
	g.complex.Labels = make([]string, n)
	for i, v := range all {
		g.complex.Labels[i] = strconv.FormatUint(uint64(v), 10)
	}
	return uint32(n), nil
}

func lowerBound(sorted []uint32, v uint32) int {
	at, _ := slices.BinarySearch(sorted, v)
	return at
}

// byName numbers the labels in bytewise order.
func (g *network) byName(least uint32) error {
	if int(least) > len(g.names) {
		return &source.UsageError{Why: fmt.Sprintf("--vertices %d: %s names its %d vertices by labels, and isolated ones would have none; number the vertices, or leave --vertices out", least, g.path, len(g.names))}
	}
	order := make([]uint32, len(g.names))
	for i := range order {
		order[i] = uint32(i)
	}
	slices.SortFunc(order, func(a, b uint32) int {
		if g.names[a] < g.names[b] {
			return -1
		}
		return 1
	})
	number, labels := make([]uint32, len(g.names)), make([]string, len(g.names))
	for at, i := range order {
		number[i], labels[at] = uint32(at), g.names[i]
	}
	for i, v := range g.ends {
		g.ends[i] = number[v]
	}
	g.complex.Labels = labels
	if g.header != nil && g.values == nil {
		g.complex.Notes = append(g.complex.Notes, chain.Note{What: fmt.Sprintf("first line taken as a header, as it has no number: %q", g.header), Count: 1})
	}
	return nil
}

// summary counts components by union–find.
func (g *network) summary(n uint32) {
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
	for i := 0; i < len(g.ends); i += 2 {
		if a, b := find(g.ends[i]), find(g.ends[i+1]); a != b {
			up[max(a, b)] = min(a, b)
			rank++
		}
	}
	edges := uint64(len(g.ends) / 2)
	g.complex.Graph = &chain.GraphCounts{Vertices: uint64(n), Edges: edges, Rank: rank, Components: uint64(n) - rank, Loops: edges - rank}
}

// simple lists the edges of the simple graph, and notes what it left out.
func (g *network) simple(spec source.Spec) *pairs {
	lines := g.withoutLoops()
	loops := len(g.ends)/2 - lines
	ends := g.ends[:2*lines]
	var own, other array[uint64]
	defer own.free()
	items := own.make(lines)
	byEnds := &sorting{key: func(i uint32) uint64 { return uint64(ends[2*i])<<32 | uint64(ends[2*i+1]) }}
	byEnds.sort(items, other.make(lines))
	other.free()
	p, n, parallel, beyond := newPairs(lines), 0, 0, 0
	for i := 0; i < lines; {
		first, value := uint32(items[i]), math.Inf(1)
		j := i
		for ; j < lines && byEnds.key(uint32(items[j])) == byEnds.key(first); j++ {
			value = min(value, g.value(uint32(items[j])))
		}
		parallel += j - i - 1
		if i = j; spec.MaxScale != nil && value > *spec.MaxScale {
			beyond++
			continue
		}
		p.u[n], p.v[n], p.value[n] = ends[2*first], ends[2*first+1], value
		n++
	}
	p.u, p.v, p.value = p.u[:n], p.v[:n], p.value[:n]
	for _, note := range []chain.Note{{What: "self-loops left out", Count: uint64(loops)}, {What: "parallel edges merged", Count: uint64(parallel)}, {What: "edges beyond --max-scale left out", Count: uint64(beyond)}} {
		if note.Count > 0 {
			g.complex.Notes = append(g.complex.Notes, note)
		}
	}
	return p
}

// withoutLoops moves the edges that are no loops to the front, smaller end first, and
// returns their number.
func (g *network) withoutLoops() (n int) {
	for i := 0; i < len(g.ends); i += 2 {
		u, v := g.ends[i], g.ends[i+1]
		if u == v {
			continue
		}
		g.ends[2*n], g.ends[2*n+1] = min(u, v), max(u, v)
		if g.values != nil {
			g.values[n] = g.values[i/2]
		}
		n++
	}
	return n
}

func (g *network) value(i uint32) float64 {
	if g.values == nil {
		return 1
	}
	return g.values[i]
}
