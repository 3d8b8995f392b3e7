package exchange

import (
	"encoding/binary"
	"fmt"
	"hash/crc32"
	"math/bits"

	"pairloom/sparse/column"
)

// The encoding of a batch's columns (LEB128 varints, little-endian words):
//
//	varint  number of columns
//	per column:
//	  varint  tile
//	  varint  index
//	  8 bytes checksum
//	  varint  2·n for a list of n rows, 2·n+1 for n word pairs; n ≥ 1
//	  list:   n varints, the first row, then each row − the one before − 1
//	  pairs:  n varints, word numbers in the same way; then n words of 8 bytes
//	4 bytes CRC-32C of everything before
//
// A list takes 1 byte an entry in dense runs, a pair 9 to 13 bytes: each column
// takes the shorter. Rows ascend by construction, whatever the bytes are.

const (
	sumBytes  = 8
	wordBytes = 8
	crcBytes  = 4
	itemMin   = 1 + 1 + sumBytes + 1 + 1 // bytes of the smallest column
	chunkMost = 2048                     // entries that the decoder takes from the heap at once, beyond need
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

// Malformed says where the bytes of a batch are not what AppendItems writes.
type Malformed struct {
	Offset int // in the encoding
	Why    string
}

func (m *Malformed) Error() string {
	return fmt.Sprintf("exchange: batch broken at byte %d: %s", m.Offset, m.Why)
}

// AppendItems appends the encoding of columns to dst and returns it. Columns must
// not be empty, as no tile waits for a zero column. Cost: linear in the bytes that
// the columns take.
func AppendItems(dst []byte, items []Item) []byte {
	start := len(dst)
	dst = binary.AppendUvarint(dst, uint64(len(items)))
	for i := range items {
		dst = appendItem(dst, &items[i])
	}
	return binary.LittleEndian.AppendUint32(dst, crc32.Checksum(dst[start:], castagnoli))
}

func appendItem(dst []byte, it *Item) []byte {
	c := &it.Column
	dst = binary.AppendUvarint(dst, uint64(it.Tile))
	dst = binary.AppendUvarint(dst, uint64(c.Index))
	dst = binary.LittleEndian.AppendUint64(dst, c.Sum)
	entries, words, list, pairs := sizes(c)
	if list <= pairs {
		return appendList(binary.AppendUvarint(dst, uint64(entries)<<1), c)
	}
	return appendPairs(binary.AppendUvarint(dst, uint64(words)<<1|1), c)
}

// sizes returns the entries and words of a column and the bytes of its two forms.
func sizes(c *column.Column) (entries, words, list, pairs int) {
	row, word := int64(-1), int64(-1) // the last ones seen
	if c.Words == nil {
		for _, r := range c.Rows {
			list += varintBytes(uint64(int64(r) - row - 1))
			if w := int64(r >> 6); w != word {
				pairs += wordBytes + varintBytes(uint64(w-word-1))
				word = w
				words++
			}
			row = int64(r)
		}
		return len(c.Rows), words, list, pairs
	}
	for i, at := range c.Rows {
		w, n := c.Words[i], bits.OnesCount64(c.Words[i])
		first := int64(at)<<6 | int64(bits.TrailingZeros64(w))
		list += varintBytes(uint64(first-row-1)) + n - 1 // steps inside a word take a byte
		pairs += wordBytes + varintBytes(uint64(int64(at)-word-1))
		row, word = int64(at)<<6|int64(63-bits.LeadingZeros64(w)), int64(at)
		entries += n
	}
	return entries, len(c.Rows), list, pairs
}

func varintBytes(x uint64) int { return (bits.Len64(x|1) + 6) / 7 }

func appendList(dst []byte, c *column.Column) []byte {
	next := uint64(0) // least row that may come
	c.Each(func(r uint32) {
		dst = binary.AppendUvarint(dst, uint64(r)-next)
		next = uint64(r) + 1
	})
	return dst
}

func appendPairs(dst []byte, c *column.Column) []byte {
	next := uint64(0)
	if c.Words != nil {
		for _, at := range c.Rows {
			dst = binary.AppendUvarint(dst, uint64(at)-next)
			next = uint64(at) + 1
		}
		for _, w := range c.Words {
			dst = binary.LittleEndian.AppendUint64(dst, w)
		}
		return dst
	}
	eachWord(c.Rows, func(at uint32, _ uint64) {
		dst = binary.AppendUvarint(dst, uint64(at)-next)
		next = uint64(at) + 1
	})
	eachWord(c.Rows, func(_ uint32, w uint64) { dst = binary.LittleEndian.AppendUint64(dst, w) })
	return dst
}

// eachWord calls f with the words of a list of rows, ascending.
func eachWord(rows []uint32, f func(at uint32, w uint64)) {
	for i := 0; i < len(rows); {
		at, w := rows[i]>>6, uint64(0)
		for ; i < len(rows) && rows[i]>>6 == at; i++ {
			w |= 1 << (rows[i] & 63)
		}
		f(at, w)
	}
}

// DecodeItems reads what AppendItems wrote, for a block of rows × cols in tiles
// tiles. Columns come in the form that column.PairsPay chooses, in fresh memory: at
// most 8 bytes a byte read. Any byte that cannot be right gives *Malformed, and no
// memory is taken for more than the bytes that are there can hold.
func DecodeItems(b []byte, rows, cols uint32, tiles int) ([]Item, error) {
	d := decoder{all: b, rows: uint64(rows), cols: uint64(cols), tiles: uint64(max(tiles, 0))}
	if len(b) < 1+crcBytes {
		return nil, d.bad("too short")
	}
	end := len(b) - crcBytes
	d.b = b[:end]
	if binary.LittleEndian.Uint32(b[end:]) != crc32.Checksum(d.b, castagnoli) {
		d.b = nil
		return nil, d.bad("the checksum differs")
	}
	n, ok := d.varint()
	if !ok || n > uint64(len(d.b)/itemMin) {
		return nil, d.bad("more columns than bytes")
	}
	items := make([]Item, n)
	for i := range items {
		if err := d.item(&items[i]); err != nil {
			return nil, err
		}
	}
	if len(d.b) > 0 {
		return nil, d.bad("bytes after the last column")
	}
	return items, nil
}

// decoder walks a batch; entries and words of columns are cut from chunks.
type decoder struct {
	all, b            []byte // everything; what is still to be read, without the CRC
	rows, cols, tiles uint64
	small             []uint32 // free rest of a chunk
	large             []uint64
}

func (d *decoder) bad(why string) error {
	return &Malformed{max(len(d.all)-crcBytes-len(d.b), 0), why}
}

func (d *decoder) varint() (uint64, bool) {
	if len(d.b) > 0 && d.b[0] < 0x80 {
		x := uint64(d.b[0])
		d.b = d.b[1:]
		return x, true
	}
	x, n := binary.Uvarint(d.b)
	if n <= 0 {
		return 0, false
	}
	d.b = d.b[n:]
	return x, true
}

func (d *decoder) item(it *Item) error {
	tile, ok := d.varint()
	if !ok || tile >= d.tiles {
		return d.bad("no such tile")
	}
	index, ok := d.varint()
	if !ok || index >= d.cols {
		return d.bad("no such column")
	}
	if len(d.b) < sumBytes {
		return d.bad("cut short")
	}
	it.Tile = int(tile)
	it.Column = column.Column{Index: uint32(index), Sum: binary.LittleEndian.Uint64(d.b)}
	d.b = d.b[sumBytes:]
	n, ok := d.varint()
	if !ok || n < 2 {
		return d.bad("a column without entries")
	}
	if n&1 != 0 {
		return d.pairs(&it.Column, n>>1)
	}
	return d.list(&it.Column, n>>1)
}

// ascending reads n numbers below limit, each as its distance to the one before.
func (d *decoder) ascending(to []uint32, limit uint64) error {
	next := uint64(0)
	for i := range to {
		x, ok := d.varint()
		if !ok || x >= limit || next+x >= limit {
			return d.bad("no such row")
		}
		to[i] = uint32(next + x)
		next += x + 1
	}
	return nil
}

func (d *decoder) list(c *column.Column, n uint64) error {
	if n > uint64(len(d.b)) {
		return d.bad("more entries than bytes")
	}
	rows := d.take32(int(n))
	if err := d.ascending(rows, d.rows); err != nil {
		return err
	}
	words, last := 0, ^uint32(0)
	for _, r := range rows {
		if r>>6 != last {
			last = r >> 6
			words++
		}
	}
	if column.PairsPay(words, len(rows)) {
		d.packed(c, rows, words)
	} else {
		c.Rows = rows[:n:n]
	}
	return nil
}

// packed gives a list of rows, taken last, the form of word pairs in its own place.
func (d *decoder) packed(c *column.Column, rows []uint32, words int) {
	c.Words = d.take64(words)
	i := 0
	eachWord(rows, func(at uint32, w uint64) { // i never passes the rows being read
		rows[i], c.Words[i] = at, w
		i++
	})
	c.Rows = rows[:words:words]
	d.small = rows[words : len(rows)+len(d.small)]
}

func (d *decoder) pairs(c *column.Column, n uint64) error {
	if n > uint64(len(d.b)/(1+wordBytes)) {
		return d.bad("more words than bytes")
	}
	at := d.take32(int(n))[:n:n]
	if err := d.ascending(at, (d.rows+63)/64); err != nil {
		return err
	}
	if len(d.b)/wordBytes < len(at) {
		return d.bad("more words than bytes")
	}
	words, entries := d.take64(len(at)), 0
	for i := range words {
		words[i] = binary.LittleEndian.Uint64(d.b[i*wordBytes:])
		if words[i] == 0 {
			return d.bad("an empty word")
		}
		entries += bits.OnesCount64(words[i])
	}
	c.Rows, c.Words = at, words
	if p, _ := c.Pivot(); uint64(p) >= d.rows {
		return d.bad("no such row")
	}
	d.b = d.b[len(at)*wordBytes:]
	if !column.PairsPay(len(at), entries) {
		rows := make([]uint32, 0, entries)
		c.Each(func(r uint32) { rows = append(rows, r) })
		c.Rows, c.Words = rows, nil
	}
	return nil
}

// take32 cuts n entries from the chunk, whose rest stays in their capacity. At most
// one entry a byte still to be read is taken ahead.
func (d *decoder) take32(n int) []uint32 {
	if n > len(d.small) {
		d.small = make([]uint32, max(n, min(len(d.b), chunkMost)))
	}
	s := d.small[:n]
	d.small = d.small[n:]
	return s
}

func (d *decoder) take64(n int) []uint64 {
	if n > len(d.large) {
		d.large = make([]uint64, max(n, min(len(d.b)/wordBytes, chunkMost/2)))
	}
	s := d.large[:n:n]
	d.large = d.large[n:]
	return s
}
