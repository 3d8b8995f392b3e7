// Package block holds the sparse boundary matrices: ∂_k in ranks, one column per
// k-cell, its entries the ranks of its facets.
//
// Conventions. Cells of each degree are numbered by rank 0..n_k−1 (uint32) in
// their order. Block k has n_{k−1} rows and n_k columns; the entries of a column
// ascend strictly; the pivot of a column is its largest entry. The anti-transpose
// of a block (the coboundary route; de Silva, Morozov, Vejdemo-Johansson 2011)
// re-indexes rows and columns by i ↦ n−1−i.
//
// Memory: 4 bytes an entry, plus 8 bytes a column where columns have no common
// length. Blocks are mapped files (package record); a Matrix is read-only after
// it is published and safe for concurrent use.
package block

import (
	"fmt"
	"math"

	"pairloom/sparse/record"
)

// None marks "no rank", "no column": the one uint32 that is never a rank.
const None = math.MaxUint32

// Columns is what the reduction needs to know of a block; explicit blocks answer
// from memory, implicit ones compute.
type Columns interface {
	// Shape returns the numbers of rows and columns.
	Shape() (rows, cols uint32)
	// Column returns the ascending entries of column j. The slice may be buf or
	// point into the block; it is valid until the next call with the same buf and
	// must not be changed.
	Column(j uint32, buf []uint32) []uint32
	// Nonzeros returns the number of entries of all columns.
	Nonzeros() uint64
}

// Matrix is an explicit block: compressed sparse columns.
type Matrix struct {
	Rows, Cols uint32
	Width      uint32   // entries per column, or 0 where columns differ
	Offsets    []uint64 // Cols+1 offsets into Entries where Width is 0
	Entries    []uint32 // ranks of facets, ascending within a column
	file       *record.File
}

// Shape implements Columns.
func (m *Matrix) Shape() (rows, cols uint32) { return m.Rows, m.Cols }

// Nonzeros implements Columns.
func (m *Matrix) Nonzeros() uint64 { return uint64(len(m.Entries)) }

// Column implements Columns without copying; buf is not used.
func (m *Matrix) Column(j uint32, _ []uint32) []uint32 {
	if m.Width != 0 {
		at := uint64(j) * uint64(m.Width)
		return m.Entries[at : at+uint64(m.Width) : at+uint64(m.Width)]
	}
	return m.Entries[m.Offsets[j]:m.Offsets[j+1]:m.Offsets[j+1]]
}

const fileKind record.FileKind = 0xB10C

const (
	secShape record.SectionKind = iota + 1
	secOffsets
	secEntries
)

// Create lays out a block file for writing. With width > 0 every column has width
// entries and nonzeros is ignored; with width 0 the caller fills Offsets too. The
// caller writes Entries and then calls Publish or Discard.
func Create(path string, rows, cols, width uint32, nonzeros uint64) (*Matrix, error) {
	layout := []record.Section{{Kind: secShape, Bytes: 16}}
	if width == 0 {
		layout = append(layout, record.Section{Kind: secOffsets, Bytes: 8 * (uint64(cols) + 1)})
	} else {
		nonzeros = uint64(cols) * uint64(width)
	}
	layout = append(layout, record.Section{Kind: secEntries, Bytes: 4 * nonzeros})
	f, err := record.Create(path, fileKind, layout...)
	if err != nil {
		return nil, err
	}
	shape := record.View[uint32](f, secShape)
	shape[0], shape[1], shape[2] = rows, cols, width
	return &Matrix{Rows: rows, Cols: cols, Width: width, Offsets: record.View[uint64](f, secOffsets), Entries: record.View[uint32](f, secEntries), file: f}, nil
}

// Publish seals a created block under its name; it stays mapped for reading.
func (m *Matrix) Publish(durable bool) error { return m.file.Publish(durable) }

// Discard drops a block that was not published.
func (m *Matrix) Discard() { m.file.Discard() }

// Close unmaps the block.
func (m *Matrix) Close() error {
	if m.file == nil {
		return nil
	}
	return m.file.Close()
}

// Verify recomputes the checksums of the block's file.
func (m *Matrix) Verify() error {
	if m.file == nil {
		return nil
	}
	return m.file.Verify()
}

// Digest identifies the block's content.
func (m *Matrix) Digest() uint32 { return m.file.Digest() }

// Open maps a published block and checks its shape against its sections; with
// trust unset it also checks every byte and every entry.
func Open(path string, trust bool) (*Matrix, error) {
	f, err := record.Open(path, fileKind, trust)
	if err != nil {
		return nil, err
	}
	m := &Matrix{Offsets: record.View[uint64](f, secOffsets), Entries: record.View[uint32](f, secEntries), file: f}
	shape := record.View[uint32](f, secShape)
	if len(shape) == 4 {
		m.Rows, m.Cols, m.Width = shape[0], shape[1], shape[2]
	}
	if why := m.misshapen(len(shape)); why != "" {
		f.Close()
		return nil, &record.Damage{Path: path, Why: why}
	}
	if !trust {
		if err := m.Check(); err != nil {
			f.Close()
			return nil, fmt.Errorf("%s: %w", path, err)
		}
	}
	return m, nil
}

func (m *Matrix) misshapen(shape int) string {
	switch {
	case shape != 4:
		return "a block without a shape"
	case m.Width > 0 && uint64(len(m.Entries)) != uint64(m.Cols)*uint64(m.Width):
		return "a block whose entries do not fill its columns"
	case m.Width == 0 && (uint64(len(m.Offsets)) != uint64(m.Cols)+1 || m.Offsets[0] != 0 || m.Offsets[m.Cols] != uint64(len(m.Entries))):
		return "a block whose offsets do not span its entries"
	}
	return ""
}

// Check reads the whole block: entries ascend strictly and lie below Rows,
// offsets ascend. O(nonzeros).
func (m *Matrix) Check() error {
	for j := range m.Cols {
		if m.Width == 0 && (m.Offsets[j] > m.Offsets[j+1] || m.Offsets[j+1] > uint64(len(m.Entries))) {
			return fmt.Errorf("block: offsets of column %d do not ascend", j)
		}
		last := int64(-1)
		for _, r := range m.Column(j, nil) {
			if int64(r) <= last || r >= m.Rows {
				return fmt.Errorf("block: column %d has entry %d after %d of %d rows", j, r, last, m.Rows)
			}
			last = int64(r)
		}
	}
	return nil
}

// FromColumns builds a block in memory, for tests and small complexes.
func FromColumns(rows uint32, cols [][]uint32) *Matrix {
	m := &Matrix{Rows: rows, Cols: uint32(len(cols)), Offsets: make([]uint64, 1, len(cols)+1)}
	for _, c := range cols {
		m.Entries = append(m.Entries, c...)
		m.Offsets = append(m.Offsets, uint64(len(m.Entries)))
	}
	return m
}
