// Package column is one column over Z/2: the working column that additions go
// into (Ladder), the form in which changed columns are kept and sent (Column),
// the pointer-free store that holds them (Arena), and their compact encoding.
//
// Conventions: entries are row ranks (uint32), ascending; the pivot is the
// largest. A column is kept as a list of rows, or, where fill-in piles up in dense
// runs, as bitmap pairs (word number, 64-bit word): pairs when
// 3 × words < entries, since a pair takes 12 bytes and a row 4.
//
// Every Column carries the XOR of its entries' words (algorithm-based fault
// tolerance: Huang and Abraham 1984), so that a column damaged on its way is seen.
package column

import (
	"math/bits"
)

// Column is a column on its way or at rest. Its slices are read-only.
type Column struct {
	Index uint32   // which column of the block this is a copy of
	Sum   uint64   // XOR of the words of its entries
	Rows  []uint32 // the entries, ascending; or, with Words, the word numbers, ascending
	Words []uint64 // nil, or word i holds rows 64·Rows[i]+0..63, bit by bit; never zero
}

// Pivot returns the largest entry, and false for the zero column.
func (c *Column) Pivot() (uint32, bool) {
	n := len(c.Rows)
	switch {
	case n == 0:
		return 0, false
	case c.Words == nil:
		return c.Rows[n-1], true
	}
	return c.Rows[n-1]<<6 | uint32(63-bits.LeadingZeros64(c.Words[n-1])), true
}

// Entries returns the number of entries.
func (c *Column) Entries() int {
	if c.Words == nil {
		return len(c.Rows)
	}
	n := 0
	for _, w := range c.Words {
		n += bits.OnesCount64(w)
	}
	return n
}

// Bytes is the memory that the column's slices take.
func (c *Column) Bytes() int { return 4*len(c.Rows) + 8*len(c.Words) }

// Each calls f with every entry, ascending.
func (c *Column) Each(f func(row uint32)) {
	if c.Words == nil {
		for _, r := range c.Rows {
			f(r)
		}
		return
	}
	for i, at := range c.Rows {
		for w := c.Words[i]; w != 0; w &= w - 1 {
			f(at<<6 | uint32(bits.TrailingZeros64(w)))
		}
	}
}

// AddTo adds the column to a working column.
func (c *Column) AddTo(t *Ladder) {
	if c.Words == nil {
		for _, r := range c.Rows {
			t.Toggle(r)
		}
		return
	}
	for i, at := range c.Rows {
		t.Xor(at, c.Words[i])
	}
}

// Checksum recomputes the XOR of the entries' words from the entries.
func (c *Column) Checksum(seed uint64) uint64 {
	sum := uint64(0)
	if c.Words == nil {
		for _, r := range c.Rows {
			sum ^= Word(seed, r)
		}
		return sum
	}
	for i, at := range c.Rows {
		for w := c.Words[i]; w != 0; w &= w - 1 {
			sum ^= Word(seed, at<<6|uint32(bits.TrailingZeros64(w)))
		}
	}
	return sum
}

// Word is the 64-bit word of row r under a job's secret seed: the SplitMix64
// finaliser (Steele, Lea, Flood 2014). It is not linear over Z/2, which is what
// makes an XOR of words see a wrong column; a CRC would not.
func Word(seed uint64, r uint32) uint64 {
	z := seed + (uint64(r)+1)*0x9E3779B97F4A7C15
	z = (z ^ z>>30) * 0xBF58476D1CE4E5B9
	z = (z ^ z>>27) * 0x94D049BB133111EB
	return z ^ z>>31
}

// PairsPay says whether bitmap pairs are the smaller form of a column.
func PairsPay(words, entries int) bool { return 3*words < entries }

// Form is how changed columns are kept.
type Form uint8

// The forms: the smaller of the two for each column, or always one (tests).
const (
	Smaller Form = iota
	Lists
	Pairs
)

func (f Form) pairs(words, entries int) bool {
	return f == Pairs || f == Smaller && PairsPay(words, entries)
}
