// Package stage is the job folder: where every stage of a job leaves what it made,
// and the formats of surveys, pairs and tile results.
//
//	job.json        what was asked (coordinator/journal)
//	inputs.json     the inputs' sizes and digests
//	input/          uploaded inputs
//	order/          the filtered complex (package chain): cell tables, boundary blocks
//	block/          survey-K, turned-K, turned-survey-K
//	tiles/          results of tiles, one file a worker and block
//	pairs/          K: the pairs of block K, once its fates partition its columns
//	result/         pairs.csv, betti.csv, summary.json
//	events.jsonl    what happened, one JSON object a line
//
// Every file is published by link(2) under its final name (package record).
package stage

import (
	"bytes"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"

	"github.com/RoaringBitmap/roaring/v2"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/column"
	"pairloom/sparse/record"
)

// Order, Result and Input name the folders inside a job folder.
func Order(job string) string { return filepath.Join(job, "order") }

// Result is where the published result stands.
func Result(job string) string { return filepath.Join(job, "result") }

// Input is where uploads go.
func Input(job string) string { return filepath.Join(job, "input") }

// PairsPath names the pairs of block k.
func PairsPath(job string, k int) string { return filepath.Join(job, "pairs", fmt.Sprint(k)) }

// SurveyPath names the survey of block k in a route.
func SurveyPath(job string, k int, turned bool) string {
	if turned {
		return filepath.Join(job, "block", fmt.Sprintf("turned-survey-%d", k))
	}
	return filepath.Join(job, "block", fmt.Sprintf("survey-%d", k))
}

// MatrixPath names the block of degree k in a route.
func MatrixPath(job string, k int, turned bool) string {
	if turned {
		return filepath.Join(job, "block", fmt.Sprintf("turned-%d", k))
	}
	return chain.BlockPath(Order(job), k)
}

// TilesPath names the results of one worker's tiles of block k.
func TilesPath(job string, k int, attempt, place uint32) string {
	return filepath.Join(job, "tiles", fmt.Sprintf("%d-attempt-%d-place-%d", k, attempt, place))
}

// Make creates the folders of a job.
func Make(job string) error {
	for _, d := range []string{"order", "block", "tiles", "pairs"} {
		if err := os.MkdirAll(filepath.Join(job, d), 0o755); err != nil {
			return err
		}
	}
	return nil
}

// InputFile is one input as it was read.
type InputFile struct {
	Path   string `json:"path"`
	Bytes  uint64 `json:"bytes"`
	SHA256 string `json:"sha256"`
}

// WriteInputs publishes inputs.json.
func WriteInputs(job string, files []InputFile) error {
	b, err := json.MarshalIndent(files, "", "  ")
	if err != nil {
		return err
	}
	return os.WriteFile(filepath.Join(job, "inputs.json"), append(b, '\n'), 0o644)
}

// ReadInputs reads inputs.json.
func ReadInputs(job string) ([]InputFile, error) {
	b, err := os.ReadFile(filepath.Join(job, "inputs.json"))
	if err != nil {
		return nil, err
	}
	var files []InputFile
	return files, json.Unmarshal(b, &files)
}

const (
	kindSurvey record.FileKind = 0x50AE
	kindPairs  record.FileKind = 0xFA15
	kindTiles  record.FileKind = 0x711E
)

const (
	secPivotOf record.SectionKind = iota + 1
	secResidual
	secRows
	secCols
	secZeros
)

// Survey is what compression found in a block without its neighbours.
type Survey struct {
	PivotOf  []uint32        // row → its apparent column, or block.None; nil where apparent pairs were not sought
	Residual *roaring.Bitmap // every other column
	file     *record.File
}

// WriteSurvey publishes a survey. residual holds every column that is not apparent.
func WriteSurvey(path string, pivotOf []uint32, residual *roaring.Bitmap) error {
	residual.RunOptimize()
	set, err := residual.ToBytes()
	if err != nil {
		return err
	}
	f, err := record.Create(path, kindSurvey, record.Section{Kind: secPivotOf, Bytes: 4 * uint64(len(pivotOf))}, record.Section{Kind: secResidual, Bytes: uint64(len(set))})
	if err != nil {
		return err
	}
	copy(record.View[uint32](f, secPivotOf), pivotOf)
	copy(f.Bytes(secResidual), set)
	return closeAfter(f, f.Publish(false))
}

func closeAfter(f *record.File, err error) error {
	if err != nil {
		f.Discard()
		return err
	}
	return f.Close()
}

// OpenSurvey maps a survey of a block with so many rows and columns.
func OpenSurvey(path string, rows, cols uint32) (*Survey, error) {
	f, err := record.Open(path, kindSurvey, false)
	if err != nil {
		return nil, err
	}
	s := &Survey{PivotOf: record.View[uint32](f, secPivotOf), Residual: roaring.New(), file: f}
	if err = readSet(s.Residual, f, secResidual, cols); err == nil && s.PivotOf != nil && uint64(len(s.PivotOf)) != uint64(rows) {
		err = &record.Damage{Path: path, Why: "a survey of another block"}
	}
	if err != nil {
		f.Close()
		return nil, err
	}
	return s, nil
}

func readSet(to *roaring.Bitmap, f *record.File, kind record.SectionKind, below uint32) error {
	if _, err := to.ReadFrom(bytes.NewReader(f.Bytes(kind))); err != nil {
		return &record.Damage{Path: f.Path(), Why: "a set that cannot be read: " + err.Error()}
	}
	if !to.IsEmpty() && to.Maximum() >= below {
		return &record.Damage{Path: f.Path(), Why: "a set with members beyond the block"}
	}
	return nil
}

// VerifySurvey re-reads the bytes of a survey of any block.
func VerifySurvey(path string) error {
	f, err := record.Open(path, kindSurvey, false)
	if err != nil {
		return err
	}
	return f.Close()
}

// Close unmaps the survey.
func (s *Survey) Close() error { return s.file.Close() }

// Pairs are the pairs of one block in its own ranks: Mate[i] is the k-cell that
// kills (k−1)-cell i, or block.None.
type Pairs struct {
	Mate []uint32
	file *record.File
}

// WritePairs publishes the pairs of block k.
func WritePairs(job string, k int, mate []uint32) (digest uint32, err error) {
	f, err := record.Create(PairsPath(job, k), kindPairs, record.Section{Kind: secPivotOf, Bytes: 4 * uint64(len(mate))})
	if err != nil {
		return 0, err
	}
	copy(record.View[uint32](f, secPivotOf), mate)
	if err = f.Publish(false); err != nil {
		f.Discard()
		return 0, err
	}
	digest = f.Digest()
	return digest, f.Close()
}

// OpenPairs maps the pairs of block k, which has so many rows and columns.
func OpenPairs(job string, k int, rows, cols uint32) (*Pairs, error) {
	path := PairsPath(job, k)
	f, err := record.Open(path, kindPairs, false)
	if err != nil {
		return nil, err
	}
	p := &Pairs{Mate: record.View[uint32](f, secPivotOf), file: f}
	ok := uint64(len(p.Mate)) == uint64(rows)
	for _, j := range p.Mate {
		ok = ok && (j < cols || j == block.None)
	}
	if !ok {
		f.Close()
		return nil, &record.Damage{Path: path, Why: "pairs of another block"}
	}
	return p, nil
}

// Digest identifies the pairs.
func (p *Pairs) Digest() uint32 { return p.file.Digest() }

// Close unmaps the pairs.
func (p *Pairs) Close() error { return p.file.Close() }

// Births is the set of (k−1)-cells that some k-cell kills.
func (p *Pairs) Births() column.Bits {
	b := column.NewBits(uint32(len(p.Mate)))
	for r, j := range p.Mate {
		if j != block.None {
			b.Set(uint32(r))
		}
	}
	return b
}

// Deaths is the set of k-cells that kill; cols is their number.
func (p *Pairs) Deaths(cols uint32) column.Bits {
	b := column.NewBits(cols)
	for _, j := range p.Mate {
		if j != block.None {
			b.Set(j)
		}
	}
	return b
}

// Tiles are the results of one worker's tiles of a block, in the ranks of its route.
type Tiles struct {
	Rows, Cols []uint32 // Cols[i] has pivot Rows[i]
	Zeros      []uint32 // columns reduced to zero
	file       *record.File
}

// WriteTiles publishes tile results.
func WriteTiles(path string, rows, cols, zeros []uint32) error {
	f, err := record.Create(path, kindTiles, record.Section{Kind: secRows, Bytes: 4 * uint64(len(rows))},
		record.Section{Kind: secCols, Bytes: 4 * uint64(len(cols))}, record.Section{Kind: secZeros, Bytes: 4 * uint64(len(zeros))})
	if err != nil {
		return err
	}
	copy(record.View[uint32](f, secRows), rows)
	copy(record.View[uint32](f, secCols), cols)
	copy(record.View[uint32](f, secZeros), zeros)
	return closeAfter(f, f.Publish(false))
}

// OpenTiles maps tile results.
func OpenTiles(path string) (*Tiles, error) {
	f, err := record.Open(path, kindTiles, false)
	if err != nil {
		return nil, err
	}
	t := &Tiles{Rows: record.View[uint32](f, secRows), Cols: record.View[uint32](f, secCols), Zeros: record.View[uint32](f, secZeros), file: f}
	if len(t.Rows) != len(t.Cols) {
		f.Close()
		return nil, &record.Damage{Path: path, Why: "rows and columns differ in number"}
	}
	return t, nil
}

// Close unmaps the results.
func (t *Tiles) Close() error { return t.file.Close() }
