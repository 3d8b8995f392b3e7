package column

import "math/bits"

// Ladder is the working column: a 64-ary tree of words over the rows of a block,
// in which a row is toggled in O(levels) at worst and mostly O(1), and the largest
// set row is found in O(levels). Upper levels are cleaned lazily: a set bit above
// says that the word below may be non-zero, a clear bit that it is zero.
//
// Memory: rows/8 bytes and a sixty-fourth more. Not safe for concurrent use.
type Ladder struct {
	levels [][]uint64 // levels[0] has a bit a row; levels[l+1] a bit a word of levels[l]
}

// NewLadder returns an empty working column for a block of rows rows.
func NewLadder(rows uint32) *Ladder {
	t := &Ladder{}
	for n := (uint64(rows) + 63) / 64; ; n = (n + 63) / 64 {
		t.levels = append(t.levels, make([]uint64, max(n, 1)))
		if n <= 1 {
			return t
		}
	}
}

// Toggle adds the row r (Z/2).
func (t *Ladder) Toggle(r uint32) {
	w := r >> 6
	x := t.levels[0][w]
	if x == 0 {
		t.mark(w)
	}
	t.levels[0][w] = x ^ 1<<(r&63)
}

// Xor adds the 64 rows of word w at once.
func (t *Ladder) Xor(w uint32, rows uint64) {
	x := t.levels[0][w]
	if x == 0 {
		t.mark(w)
	}
	t.levels[0][w] = x ^ rows
}

// mark tells the levels above that word w is no longer empty. A bit that is set
// has set ancestors, so the climb ends there.
func (t *Ladder) mark(w uint32) {
	for l := 1; l < len(t.levels); l++ {
		p := &t.levels[l][w>>6]
		b := uint64(1) << (w & 63)
		if *p&b != 0 {
			return
		}
		*p |= b
		w >>= 6
	}
}

// Max returns the largest row that is set, and false if there is none.
func (t *Ladder) Max() (r uint32, ok bool) {
	top := len(t.levels) - 1
	l, i := top, uint32(0)
	for {
		w := t.levels[l][i]
		if w == 0 {
			if l == top {
				return 0, false
			}
			l++
			t.levels[l][i>>6] &^= 1 << (i & 63)
			i >>= 6
			continue
		}
		i = i<<6 | uint32(63-bits.LeadingZeros64(w))
		if l == 0 {
			return i, true
		}
		l--
	}
}

// Drain empties the working column into at and words, word numbers ascending,
// reusing their space; it returns them and the number of set rows.
func (t *Ladder) Drain(at []uint32, words []uint64) ([]uint32, []uint64, int) {
	at, words = at[:0], words[:0]
	entries := 0
	for {
		r, ok := t.Max()
		if !ok {
			break
		}
		w := t.levels[0][r>>6]
		t.levels[0][r>>6] = 0
		at, words = append(at, r>>6), append(words, w)
		entries += bits.OnesCount64(w)
	}
	for i, j := 0, len(at)-1; i < j; i, j = i+1, j-1 {
		at[i], at[j] = at[j], at[i]
		words[i], words[j] = words[j], words[i]
	}
	return at, words, entries
}

// Clear empties the working column.
func (t *Ladder) Clear() {
	for r, ok := t.Max(); ok; r, ok = t.Max() {
		t.levels[0][r>>6] = 0
	}
}
