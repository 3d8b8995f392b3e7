package order

import (
	"cmp"
	"slices"
)

// sorting is the order of 0..n−1 by a 64-bit key, then by tie (if there is one), then
// by the number itself. Each number travels with the leading 32 bits in which the keys
// differ, in one word: three passes of a radix sort over 8 bytes instead of six over
// 16. Runs that agree in those bits are sorted again by the rest. O(n) but for ties.
type sorting struct {
	key func(i uint32) uint64
	tie func(i, j uint32) int
}

const (
	radixBits = 11
	runSmall  = 24 // runs up to here are sorted by insertion
	runRadix  = 1 << 12
)

// sort fills items with words whose low half are 0..n−1 in order; other is scratch of
// the same length n < 2^32.
func (s *sorting) sort(items, other []uint64) {
	for i := range items {
		items[i] = uint64(i)
	}
	s.span(items, other)
}

// span sorts the numbers in the low halves of items.
func (s *sorting) span(items, other []uint64) {
	low, high, sorted := ^uint64(0), uint64(0), true
	last := uint64(0)
	for _, it := range items {
		k := s.key(uint32(it))
		low, high = min(low, k), max(high, k)
		sorted = sorted && last <= k
		last = k
	}
	shift := uint(0)
	for (high-low)>>shift > 1<<32-1 {
		shift++
	}
	switch {
	case low == high && s.tie == nil, len(items) < 2:
		return
	case low == high:
		slices.SortFunc(items, s.compare)
		return
	case sorted && s.tie == nil:
		return
	}
	for i, it := range items {
		items[i] = (s.key(uint32(it))-low)>>shift<<32 | it&(1<<32-1)
	}
	radix(items, other)
	if shift > 0 || s.tie != nil {
		s.refine(items, other)
	}
}

// radix sorts words by their high halves, stably; the result is in items.
func radix(items, other []uint64) {
	const size = 1 << radixBits
	var counts [3][size]uint32
	for _, it := range items {
		counts[0][it>>32&(size-1)]++
		counts[1][it>>(32+radixBits)&(size-1)]++
		counts[2][it>>(32+2*radixBits)]++
	}
	from, to := items, other
	for pass := range counts {
		count, shift := &counts[pass], uint(32+pass*radixBits)
		if int(count[from[0]>>shift&(size-1)]) == len(from) {
			continue
		}
		sum := uint32(0)
		for d, c := range count {
			count[d], sum = sum, sum+c
		}
		for _, it := range from {
			d := it >> shift & (size - 1)
			to[count[d]] = it
			count[d]++
		}
		from, to = to, from
	}
	if &from[0] != &items[0] {
		copy(items, from)
	}
}

// refine sorts the runs of equal high halves.
func (s *sorting) refine(items, other []uint64) {
	for i := 0; i < len(items); {
		j := i + 1
		for j < len(items) && items[j]>>32 == items[i]>>32 {
			j++
		}
		switch run := items[i:j]; {
		case len(run) > runRadix:
			s.span(run, other[i:j])
		case len(run) > runSmall:
			s.settle(run)
		case len(run) > 1:
			s.insertion(run)
		}
		i = j
	}
}

// settle sorts a run of some length; often it is all one value.
func (s *sorting) settle(run []uint64) {
	if !slices.IsSortedFunc(run, s.compare) {
		slices.SortFunc(run, s.compare)
	}
}

func (s *sorting) insertion(run []uint64) {
	for i := 1; i < len(run); i++ {
		for j := i; j > 0 && s.compare(run[j-1], run[j]) > 0; j-- {
			run[j-1], run[j] = run[j], run[j-1]
		}
	}
}

func (s *sorting) compare(a, b uint64) int {
	i, j := uint32(a), uint32(b)
	if c := cmp.Compare(s.key(i), s.key(j)); c != 0 {
		return c
	}
	if s.tie != nil {
		if c := s.tie(i, j); c != 0 {
			return c
		}
	}
	return cmp.Compare(i, j)
}
