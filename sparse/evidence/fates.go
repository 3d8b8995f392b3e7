package evidence

import (
	"fmt"

	"pairloom/sparse/block"
)

// Fate is what became of a column of a block in the block's route.
type Fate uint8

// The fates. Every column gets exactly one.
const (
	Unknown  Fate = iota
	Apparent      // settled by an apparent pair
	Graph         // settled, or found to be zero, by union–find
	Cleared       // zero, because the neighbouring block pairs its cell
	Settled       // reduced to a pivot
	Zero          // reduced to zero
	fates
)

var fateNames = [...]string{"unknown", "apparent", "graph", "cleared", "settled", "zero"}

func (f Fate) String() string { return fateNames[f] }

// Fates records the fate of every column of block Degree and the pivots that come
// with them, and refuses a second fate, a second owner of a pivot, or a hole.
type Fates struct {
	Degree int
	fate   []Fate
	mate   []uint32 // row → column that has it as pivot, or block.None
	counts [fates]uint64
}

// NewFates starts a block's record: rows and columns of its route.
func NewFates(degree int, rows, cols uint32) *Fates {
	f := &Fates{Degree: degree, fate: make([]Fate, cols), mate: make([]uint32, rows)}
	for r := range f.mate {
		f.mate[r] = block.None
	}
	return f
}

func (f *Fates) broken(format string, args ...any) error {
	return &Broken{"recorded fates", f.Degree, fmt.Sprintf(format, args...)}
}

// Record gives column j a fate.
func (f *Fates) Record(j uint32, as Fate) error {
	if uint64(j) >= uint64(len(f.fate)) {
		return f.broken("column %d does not exist", j)
	}
	if f.fate[j] != Unknown {
		return f.broken("column %d is %s and %s", j, f.fate[j], as)
	}
	f.fate[j] = as
	f.counts[as]++
	return nil
}

// Pair gives column j a fate and the pivot r.
func (f *Fates) Pair(r, j uint32, as Fate) error {
	if uint64(r) >= uint64(len(f.mate)) {
		return f.broken("row %d does not exist", r)
	}
	if f.mate[r] != block.None {
		return f.broken("row %d is the pivot of columns %d and %d", r, f.mate[r], j)
	}
	f.mate[r] = j
	return f.Record(j, as)
}

// Rest gives every column without a fate this one: for union–find, which sees all columns.
func (f *Fates) Rest(as Fate) {
	for j, x := range f.fate {
		if x == Unknown {
			f.fate[j] = as
			f.counts[as]++
		}
	}
}

// Done checks that the fates partition the columns and returns the pairs.
func (f *Fates) Done() (mate []uint32, err error) {
	for j, x := range f.fate {
		if x == Unknown {
			return nil, f.broken("column %d has no fate: it was lost", j)
		}
	}
	return f.mate, nil
}

// Count returns how many columns have a fate.
func (f *Fates) Count(as Fate) uint64 { return f.counts[as] }

// SamePairs compares two answers for one block: row → column in the block's own ranks.
func SamePairs(degree int, first, second []uint32) error {
	if len(first) != len(second) {
		return &Broken{"second answer", degree, "the two answers have different numbers of rows"}
	}
	for r := range first {
		if first[r] != second[r] {
			return &Broken{"second answer", degree, fmt.Sprintf("row %d is paired with %s, and with %s by the other route", r, name(first[r]), name(second[r]))}
		}
	}
	return nil
}

func name(j uint32) string {
	if j == block.None {
		return "nothing"
	}
	return fmt.Sprintf("column %d", j)
}
