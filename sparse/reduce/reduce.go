package reduce

import (
	"fmt"
	"sync/atomic"

	"pairloom/sparse/block"
	"pairloom/sparse/column"
)

// Problem is one block in one route, as all workers see it; read-only.
type Problem struct {
	Columns  block.Columns
	Apparent []uint32    // row → the apparent column that has it as pivot, or block.None; nil: none used
	Dropped  column.Bits // rows that are read by nobody (row compression); nil: none
	Seed     uint64      // secret seed of the words of rows
	Form     column.Form // how changed columns are kept
	Tiling   Tiling
	Self     int // which worker of the tiling this is
}

// Failure is evidence of a wrong reduction: a damaged, lost or doubled column.
// Nothing may be published after it (exit code 70).
type Failure struct {
	Column uint32
	Why    string
}

func (f *Failure) Error() string { return fmt.Sprintf("reduce: column %d: %s", f.Column, f.Why) }

func failure(j uint32, format string, args ...any) error {
	return &Failure{j, fmt.Sprintf(format, args...)}
}

// Table holds the pivots that one worker owns. A slot is 0, or (column+1) in the
// high half and the Ref of its reduced form in the low half; a smaller column wins.
type Table struct {
	p     *Problem
	slots []atomic.Uint64
	arena column.Arena
}

// NewTable makes an empty table: 8 bytes a row owned.
func NewTable(p *Problem) *Table {
	return &Table{p: p, slots: make([]atomic.Uint64, p.Tiling.slots(p.Self))}
}

func pack(j uint32, r column.Ref) uint64 { return (uint64(j)+1)<<32 | uint64(r) }

func unpack(v uint64) (j uint32, r column.Ref) { return uint32(v>>32) - 1, column.Ref(v) }

// Counts is what a Hand did.
type Counts struct {
	Additions uint64 // columns added to columns
	Evictions uint64 // pivots taken from a larger column
	Settled   uint64 // pivots claimed, less those taken from others
	Zero      uint64
	Left      uint64 // columns handed to other workers
	Bytes     uint64 // space of changed columns, evicted ones included
}

// Add sums two counts.
func (c *Counts) Add(d Counts) {
	c.Additions += d.Additions
	c.Evictions += d.Evictions
	c.Settled += d.Settled
	c.Zero += d.Zero
	c.Left += d.Left
	c.Bytes += d.Bytes
}

// Left is a column whose pivot belongs to another worker's tile.
type Left struct {
	Tile   int
	Column column.Column // points into the sender's arena; never written again
}

// Hand reduces columns for one goroutine.
type Hand struct {
	t      *Table
	p      *Problem
	work   *column.Ladder
	shelf  *column.Shelf
	at     []uint32
	words  []uint64
	buf    []uint32
	zeros  []uint32
	left   []Left
	counts Counts
	tamper func(*column.Column) // tests damage columns here: before, and after, they are stored
}

// NewHand makes a goroutine's hand on a table: rows/8 bytes.
func (t *Table) NewHand() *Hand {
	rows, _ := t.p.Columns.Shape()
	return &Hand{t: t, p: t.p, work: column.NewLadder(rows), shelf: t.arena.Shelf()}
}

// Counts returns what the hand did so far.
func (h *Hand) Counts() Counts {
	c := h.counts
	c.Bytes = h.shelf.Bytes()
	return c
}

// TakeZeros returns the columns that became zero since the last call.
func (h *Hand) TakeZeros() []uint32 {
	z := h.zeros
	h.zeros = nil
	return z
}

// TakeLeft returns the columns that left since the last call.
func (h *Hand) TakeLeft() []Left {
	l := h.left
	h.left = nil
	return l
}

// FirstPivot returns the pivot of initial column j, dropped rows left out.
func (p *Problem) FirstPivot(j uint32, buf []uint32) (uint32, bool) {
	col := p.Columns.Column(j, buf)
	for i := len(col) - 1; i >= 0; i-- {
		if !p.Dropped.Has(col[i]) {
			return col[i], true
		}
	}
	return 0, false
}

func (p *Problem) owned(r uint32) bool {
	return p.Tiling.Workers == 1 || p.Tiling.Owner(p.Tiling.Tile(r)) == p.Self
}

func (p *Problem) apparent(r uint32) uint32 {
	if p.Apparent == nil {
		return block.None
	}
	return p.Apparent[r]
}

// OfferInitial reduces column j as the block has it. A column whose pivot is free
// is settled by that one read. Errors: *Failure, column.ErrFull.
func (h *Hand) OfferInitial(j uint32) error {
	if r, ok := h.p.FirstPivot(j, h.buf); ok && h.p.apparent(r) == block.None && h.p.owned(r) {
		if h.t.slots[h.p.Tiling.slot(r)].CompareAndSwap(0, pack(j, column.Raw)) {
			h.counts.Settled++
			return nil
		}
	}
	return h.reduce(j, h.addRaw(j), true)
}

// Offer reduces a copy of a column that another worker sent, after checking that
// it is what the sender had. Errors: *Failure, column.ErrFull.
func (h *Hand) Offer(c column.Column) error {
	if h.tamper != nil {
		h.tamper(&c)
	}
	if c.Checksum(h.p.Seed) != c.Sum {
		return failure(c.Index, "its entries do not have the checksum that was sent with them")
	}
	c.AddTo(h.work)
	return h.reduce(c.Index, c.Sum, false)
}

// addRaw adds initial column j to the working column and returns its checksum.
func (h *Hand) addRaw(j uint32) uint64 {
	col, sum := h.p.Columns.Column(j, h.buf), uint64(0)
	if h.p.Dropped == nil {
		for _, r := range col {
			h.work.Toggle(r)
			sum ^= column.Word(h.p.Seed, r)
		}
		return sum
	}
	for _, r := range col {
		if !h.p.Dropped.Has(r) {
			h.work.Toggle(r)
			sum ^= column.Word(h.p.Seed, r)
		}
	}
	return sum
}

// addStored adds the holder of a pivot and returns its checksum.
func (h *Hand) addStored(i uint32, ref column.Ref) uint64 {
	if ref == column.Raw {
		return h.addRaw(i)
	}
	c := h.t.arena.Get(i, ref)
	c.AddTo(h.work)
	return c.Sum
}

// reduce works on column j, which is in the working column with checksum sum;
// raw says that it is still as the block has it. It ends when no column is at hand:
// settled, zero or left, and so is whatever it evicted.
func (h *Hand) reduce(j uint32, sum uint64, raw bool) error {
	below := uint64(h.p.Tiling.Rows) // an addition must take the pivot away
	for {
		r, ok := h.work.Max()
		if !ok {
			return h.zero(j, sum)
		}
		if uint64(r) >= below {
			return failure(j, "its pivot is row %d after an addition that should have taken it below %d", r, below)
		}
		below = uint64(r)
		if a := h.p.apparent(r); a != block.None {
			if a >= j {
				return failure(j, "apparent column %d, not smaller, would be added", a)
			}
			sum ^= h.addRaw(a)
			raw = false
			h.counts.Additions++
			continue
		}
		if !h.p.owned(r) {
			return h.leave(j, sum, r)
		}
		slot := &h.t.slots[h.p.Tiling.slot(r)]
		held := slot.Load()
		i, ref := unpack(held)
		if held != 0 && i < j {
			sum ^= h.addStored(i, ref)
			raw = false
			h.counts.Additions++
			continue
		}
		if held != 0 && i == j {
			return failure(j, "two copies of it met at row %d", r)
		}
		mine, err := h.store(j, sum, raw)
		if err != nil {
			return err
		}
		if !slot.CompareAndSwap(held, pack(j, mine)) { // someone was faster: look again
			h.addStored(j, mine)
			if mine != column.Raw {
				h.shelf.Drop(mine)
			}
			below++
			continue
		}
		if held == 0 {
			h.counts.Settled++
			return nil
		}
		h.counts.Evictions++
		h.counts.Additions++
		sum = h.addStored(i, ref) ^ h.addStored(j, mine)
		j, raw = i, false
	}
}

func (h *Hand) zero(j uint32, sum uint64) error {
	if sum != 0 {
		return failure(j, "it became zero but its carried checksum did not")
	}
	h.zeros = append(h.zeros, j)
	h.counts.Zero++
	return nil
}

// store empties the working column into the arena, checked against its checksum.
func (h *Hand) store(j uint32, sum uint64, raw bool) (column.Ref, error) {
	if raw {
		h.work.Clear()
		return column.Raw, nil
	}
	var entries int
	h.at, h.words, entries = h.work.Drain(h.at, h.words)
	c := column.Column{Index: j, Sum: sum, Rows: h.at, Words: h.words}
	if h.tamper != nil {
		h.tamper(&c)
	}
	if c.Checksum(h.p.Seed) != sum {
		return 0, failure(j, "its entries do not have its carried checksum")
	}
	ref, err := h.shelf.Put(h.p.Form, sum, h.at, h.words, entries)
	if h.tamper != nil && err == nil {
		c = h.t.arena.Get(j, ref)
		h.tamper(&c)
	}
	return ref, err
}

func (h *Hand) leave(j uint32, sum uint64, r uint32) error {
	ref, err := h.store(j, sum, false)
	if err != nil {
		return err
	}
	h.left = append(h.left, Left{h.p.Tiling.Tile(r), h.t.arena.Get(j, ref)})
	h.counts.Left++
	return nil
}

// Pivots calls f with every owned row that has a pivot and its column, rows
// ascending. Final once the tiles that the rows belong to are done.
func (t *Table) Pivots(f func(row, col uint32)) {
	for s := range t.slots {
		if v := t.slots[s].Load(); v != 0 {
			j, _ := unpack(v)
			f(t.p.Tiling.row(t.p.Self, uint32(s)), j)
		}
	}
}

// Check verifies the table's invariants: every holder's stored copy has its row as
// pivot and its checksum. For tests; O(stored entries).
func (t *Table) Check() error {
	for s := range t.slots {
		v := t.slots[s].Load()
		if v == 0 {
			continue
		}
		j, ref := unpack(v)
		want := t.p.Tiling.row(t.p.Self, uint32(s))
		got, ok := t.p.FirstPivot(j, nil)
		if ref != column.Raw {
			c := t.arena.Get(j, ref)
			if c.Checksum(t.p.Seed) != c.Sum {
				return failure(j, "stored with a wrong checksum")
			}
			got, ok = c.Pivot()
		}
		if !ok || got != want {
			return failure(j, "stored at row %d but its pivot is %d", want, got)
		}
	}
	return nil
}
