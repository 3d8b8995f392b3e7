package order

// Item is a sort key with the index of what it stands for.
type Item struct {
	Key   uint64
	Index uint32
}

// Sort orders items by Key, stably: least-significant-digit radix sort of 11-bit
// digits, skipping digits in which all keys agree. O(n) per digit that differs;
// memory: a second array of len(items).
func Sort(items []Item) []Item {
	const bits, size = 11, 1 << 11
	if len(items) < 2 {
		return items
	}
	or, and := uint64(0), ^uint64(0)
	sorted := true
	for i, it := range items {
		or |= it.Key
		and &= it.Key
		sorted = sorted && (i == 0 || items[i-1].Key <= it.Key)
	}
	if sorted {
		return items
	}
	other := make([]Item, len(items))
	var count [size]uint32
	for shift := uint(0); shift < 64; shift += bits {
		if (or^and)>>shift&(size-1) == 0 {
			continue
		}
		clear(count[:])
		for _, it := range items {
			count[it.Key>>shift&(size-1)]++
		}
		sum := uint32(0)
		for d, c := range count {
			count[d], sum = sum, sum+c
		}
		for _, it := range items {
			d := it.Key >> shift & (size - 1)
			other[count[d]] = it
			count[d]++
		}
		items, other = other, items
	}
	return items
}
