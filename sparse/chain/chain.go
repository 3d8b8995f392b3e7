// Package chain is the filtered chain complex that a source publishes and that
// everything after it reads: how many cells, what each cell is called, at which
// value it enters, and where the boundary blocks are.
//
// In a folder, beside each other:
//
//	complex.json   the Complex below
//	centres        lower stars and grids: per rank of a vertex (or top cell) its index and value
//	cells-K        per k-cell in rank order: its centre's rank, or its value and vertices
//	boundary-K     ∂_K (package block), K = 1..top
//
// Everything is addressed by (degree k, rank r), 0-based. complex.json is written
// last, so a folder that has it is whole.
package chain

import (
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"strconv"

	"pairloom/sparse/block"
	"pairloom/sparse/record"
)

// Naming says how cells are called in result files.
type Naming string

// The four ways of naming a cell.
const (
	ByGridIndex Naming = "grid"    // the grid point or top cell that gives the value: "i j k" in array order
	ByVertex    Naming = "vertex"  // the vertex that gives the value (lower stars)
	BySimplex   Naming = "simplex" // the cell's own vertices, ascending
	ByColumn    Naming = "column"  // 0-based column within the degree (matrices)
)

// Note is something that a reader left out, merged or counted, said in the report.
type Note struct {
	What  string `json:"what"`  // one phrase, e.g. "NaN voxels outside the complex"
	Count uint64 `json:"count"` // how many
}

// GraphCounts treats an edge list as a directed multigraph (every line an edge).
type GraphCounts struct {
	Vertices   uint64 `json:"vertices"`
	Edges      uint64 `json:"edges"`
	Rank       uint64 `json:"rank"`       // of the incidence matrix: vertices − components
	Components uint64 `json:"components"` // vertices − rank
	Loops      uint64 `json:"loops"`      // independent loops: edges − rank
}

// Complex describes a published filtered complex. Slices are indexed by degree.
type Complex struct {
	Kind        string       `json:"kind"` // points, distances, graph, grid, facets, simplices, matrix
	Naming      Naming       `json:"naming"`
	Shape       []int        `json:"shape,omitempty"`  // ByGridIndex: extent of the array whose cells give names (array order)
	Labels      []string     `json:"labels,omitempty"` // BySimplex, ByVertex: names of vertices where the input had labels
	Cells       []uint32     `json:"cells"`            // n_k; degrees 0..top. Blocks 1..top exist
	Degrees     int          `json:"degrees"`          // K: Betti numbers are claimed for degrees First..K only
	First       int          `json:"first"`            // lowest degree claimed (0, or 1 where ∂_first is the first matrix given)
	Truncated   bool         `json:"truncated"`        // cut above degree K: degree K+1 cells are there only to kill
	KeepZero    bool         `json:"keep_zero"`        // zero-length pairs are reported (matrices without values)
	RowsAtMost2 []bool       `json:"rows_at_most_2"`   // per k: every row of ∂_k has at most two entries (a graph by duality)
	ColsAtMost2 []bool       `json:"cols_at_most_2"`   // per k: every column of ∂_k has at most two entries (a graph)
	Graph       *GraphCounts `json:"graph,omitempty"`
	Notes       []Note       `json:"notes,omitempty"`
}

// Top is the highest degree that has cells.
func (c *Complex) Top() int { return len(c.Cells) - 1 }

// BlockPath, CellsPath and CentresPath name the files in a complex's folder.
func BlockPath(dir string, k int) string { return filepath.Join(dir, fmt.Sprintf("boundary-%d", k)) }

// CellsPath names the cell table of degree k.
func CellsPath(dir string, k int) string { return filepath.Join(dir, fmt.Sprintf("cells-%d", k)) }

// CentresPath names the table of vertices or top cells of a lower star.
func CentresPath(dir string) string { return filepath.Join(dir, "centres") }

const (
	kindCells   record.FileKind = 0xCE11
	kindCentres record.FileKind = 0xCE27
)

const (
	secCentre record.SectionKind = iota + 1
	secVertices
	secValues
	secIndex
)

// Cells is the cell table of one degree k. Exactly one of the forms is there:
// Centre (lower stars and grids); Vertices and Values (simplices); Values alone
// (matrices with values); nothing (matrices without: every value is 0).
type Cells struct {
	Centre   []uint32  // per rank: rank of the vertex or top cell that gives value and name; ascending
	Vertices []uint32  // per rank: k+1 vertex numbers, ascending
	Values   []float64 // per rank: the value, not descending
	file     *record.File
}

// CreateStar lays out a cell table that refers to centres; CreateSimplices one
// with vertices and values of n simplices of degree k; CreateValues one with
// values alone. Fill the slices, then Publish or Discard.
func CreateStar(path string, n uint32) (*Cells, error) {
	f, err := record.Create(path, kindCells, record.Section{Kind: secCentre, Bytes: 4 * uint64(n)})
	return tables(f, err)
}

// CreateSimplices is described at CreateStar.
func CreateSimplices(path string, n uint32, k int) (*Cells, error) {
	f, err := record.Create(path, kindCells,
		record.Section{Kind: secVertices, Bytes: 4 * uint64(n) * uint64(k+1)}, record.Section{Kind: secValues, Bytes: 8 * uint64(n)})
	return tables(f, err)
}

// CreateValues is described at CreateStar.
func CreateValues(path string, n uint32) (*Cells, error) {
	f, err := record.Create(path, kindCells, record.Section{Kind: secValues, Bytes: 8 * uint64(n)})
	return tables(f, err)
}

func tables(f *record.File, err error) (*Cells, error) {
	if err != nil {
		return nil, err
	}
	return &Cells{Centre: record.View[uint32](f, secCentre), Vertices: record.View[uint32](f, secVertices), Values: record.View[float64](f, secValues), file: f}, nil
}

// Publish seals a created table; Discard drops it; Close unmaps it.
func (c *Cells) Publish(durable bool) error { return c.file.Publish(durable) }

// Discard drops a table that was not published.
func (c *Cells) Discard() { c.file.Discard() }

// Close unmaps the table.
func (c *Cells) Close() error {
	if c.file == nil {
		return nil
	}
	return c.file.Close()
}

// Centres are the vertices (or top cells) of a lower star or grid, by rank.
type Centres struct {
	Index  []uint32  // rank → vertex number, or flat array-order index into Shape
	Values []float64 // rank → value, not descending
	file   *record.File
}

// CreateCentres lays out the centres' table for n entries.
func CreateCentres(path string, n uint32) (*Centres, error) {
	f, err := record.Create(path, kindCentres, record.Section{Kind: secIndex, Bytes: 4 * uint64(n)}, record.Section{Kind: secValues, Bytes: 8 * uint64(n)})
	if err != nil {
		return nil, err
	}
	return &Centres{Index: record.View[uint32](f, secIndex), Values: record.View[float64](f, secValues), file: f}, nil
}

// Publish seals a created table.
func (c *Centres) Publish(durable bool) error { return c.file.Publish(durable) }

// Discard drops a table that was not published.
func (c *Centres) Discard() { c.file.Discard() }

// Close unmaps the table.
func (c *Centres) Close() error { return c.file.Close() }

// Write publishes complex.json, the last file of a complex's folder.
func (c *Complex) Write(dir string) error {
	b, err := json.MarshalIndent(c, "", "  ")
	if err != nil {
		return err
	}
	return os.WriteFile(filepath.Join(dir, "complex.json"), append(b, '\n'), 0o644)
}

// Read reads complex.json alone: counts and kinds, no table is opened.
func Read(dir string) (*Complex, error) {
	b, err := os.ReadFile(filepath.Join(dir, "complex.json"))
	if err != nil {
		return nil, err
	}
	c := new(Complex)
	if err := json.Unmarshal(b, c); err != nil {
		return nil, fmt.Errorf("%s: %w", filepath.Join(dir, "complex.json"), err)
	}
	return c, nil
}

// Table is a complex with its cell tables open: it answers what a cell is called
// and when it enters. Safe for concurrent use.
type Table struct {
	*Complex
	centres *Centres
	cells   []*Cells
}

// OpenTable opens complex.json, centres and cell tables of a folder (not the blocks).
func OpenTable(dir string) (*Table, error) {
	c, err := Read(dir)
	if err != nil {
		return nil, err
	}
	t := &Table{Complex: c}
	if c.Naming == ByGridIndex || c.Naming == ByVertex {
		f, err := record.Open(CentresPath(dir), kindCentres, false)
		if err != nil {
			return nil, err
		}
		t.centres = &Centres{Index: record.View[uint32](f, secIndex), Values: record.View[float64](f, secValues), file: f}
	}
	for k := range c.Cells {
		f, err := record.Open(CellsPath(dir, k), kindCells, false)
		if os.IsNotExist(err) && c.Naming == ByColumn {
			t.cells = append(t.cells, &Cells{})
			continue
		}
		cells, err := tables(f, err)
		if err == nil {
			err = cells.check(k, c.Cells[k], t.centres)
		}
		if err != nil {
			t.Close()
			return nil, err
		}
		t.cells = append(t.cells, cells)
	}
	return t, nil
}

func (c *Cells) check(k int, n uint32, centres *Centres) error {
	ok := uint64(len(c.Centre)) == uint64(n) && centres != nil
	if c.file.Has(secValues) {
		ok = uint64(len(c.Values)) == uint64(n) && (!c.file.Has(secVertices) || uint64(len(c.Vertices)) == uint64(n)*uint64(k+1))
	}
	for _, r := range c.Centre {
		ok = ok && int(r) < len(centres.Index)
	}
	if !ok {
		return &record.Damage{Path: c.file.Path(), Why: "the table does not fit the complex's cell counts"}
	}
	return nil
}

// Close unmaps all tables.
func (t *Table) Close() {
	for _, c := range t.cells {
		c.Close()
	}
	if t.centres != nil {
		t.centres.file.Close()
	}
}

// Value is the value at which k-cell r enters.
func (t *Table) Value(k int, r uint32) float64 {
	c := t.cells[k]
	switch {
	case c.Centre != nil:
		return t.centres.Values[c.Centre[r]]
	case c.Values != nil:
		return c.Values[r]
	}
	return 0
}

// NameRank orders the names of k-cells as result files do: the rank of the cell that the name stands for.
func (t *Table) NameRank(k int, r uint32) uint32 {
	if c := t.cells[k].Centre; c != nil {
		return c[r]
	}
	return r
}

// SameCentre says whether a k-cell and a l-cell get value and name from one vertex or top cell.
func (t *Table) SameCentre(k int, r uint32, l int, s uint32) bool {
	a, b := t.cells[k].Centre, t.cells[l].Centre
	return a != nil && b != nil && a[r] == b[s]
}

// AppendName appends the name of k-cell r to dst; see Naming.
func (t *Table) AppendName(dst []byte, k int, r uint32) []byte {
	switch t.Naming {
	case ByGridIndex:
		return t.appendIndex(dst, t.centres.Index[t.cells[k].Centre[r]])
	case ByVertex:
		return t.appendVertex(dst, t.centres.Index[t.cells[k].Centre[r]])
	case BySimplex:
		for i, v := range t.cells[k].Vertices[uint64(r)*uint64(k+1) : uint64(r+1)*uint64(k+1)] {
			if i > 0 {
				dst = append(dst, ' ')
			}
			dst = t.appendVertex(dst, v)
		}
		return dst
	}
	return strconv.AppendUint(dst, uint64(r), 10)
}

func (t *Table) appendVertex(dst []byte, v uint32) []byte {
	if int(v) < len(t.Labels) {
		return append(dst, t.Labels[v]...)
	}
	return strconv.AppendUint(dst, uint64(v), 10)
}

func (t *Table) appendIndex(dst []byte, at uint32) []byte {
	var coords [8]uint32
	for d := len(t.Shape) - 1; d >= 0; d-- {
		coords[d] = at % uint32(t.Shape[d])
		at /= uint32(t.Shape[d])
	}
	for d := range t.Shape {
		if d > 0 {
			dst = append(dst, ' ')
		}
		dst = strconv.AppendUint(dst, uint64(coords[d]), 10)
	}
	return dst
}

// OpenBlock maps ∂_k of a complex's folder.
func OpenBlock(dir string, k int, trust bool) (*block.Matrix, error) {
	return block.Open(BlockPath(dir, k), trust)
}
