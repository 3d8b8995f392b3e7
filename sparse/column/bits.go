package column

import "math/bits"

// Bits is a set of ranks, one bit each: bit r&63 of word r>>6.
type Bits []uint64

// NewBits returns an empty set for ranks below n.
func NewBits(n uint32) Bits { return make(Bits, (uint64(n)+63)/64) }

// Has says whether r is in the set; a nil set is empty.
func (b Bits) Has(r uint32) bool { return b != nil && b[r>>6]>>(r&63)&1 != 0 }

// Set adds r.
func (b Bits) Set(r uint32) { b[r>>6] |= 1 << (r & 63) }

// Count returns the number of members.
func (b Bits) Count() uint64 {
	n := 0
	for _, w := range b {
		n += bits.OnesCount64(w)
	}
	return uint64(n)
}
