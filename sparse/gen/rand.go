package gen

import "math/bits"

// Rand draws numbers by SplitMix64 (Steele, Lea, Flood 2014): 64 bits of state, the
// same numbers in any language. Not safe for concurrent use.
type Rand struct{ state uint64 }

// New returns a generator; equal seeds draw equal numbers.
func New(seed uint64) *Rand { return &Rand{seed} }

// Uint64 draws 64 bits.
func (r *Rand) Uint64() uint64 {
	r.state += 0x9E3779B97F4A7C15
	z := r.state
	z = (z ^ z>>30) * 0xBF58476D1CE4E5B9
	z = (z ^ z>>27) * 0x94D049BB133111EB
	return z ^ z>>31
}

// IntN draws from 0..n−1; n is at least 1. The bias is below n/2⁶⁴.
func (r *Rand) IntN(n int) int {
	high, _ := bits.Mul64(r.Uint64(), uint64(n))
	return int(high)
}

// Chance is true in num of den cases, by the remainder of the next number.
func (r *Rand) Chance(num, den uint64) bool { return r.Uint64()%den < num }

// Perm draws an order of 0..n−1.
func (r *Rand) Perm(n int) []int {
	p := make([]int, n)
	for i := range p {
		j := r.IntN(i + 1)
		p[i], p[j] = p[j], i
	}
	return p
}
