package exchange

import (
	"encoding/binary"
	"hash/crc32"
	"math/rand/v2"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/column"
)

// rowsOf draws ascending rows below rows: runs of the given density with gaps between.
func rowsOf(r *rand.Rand, rows uint32, entries int, density float64, gap uint32) []uint32 {
	var out []uint32
	for at := r.Uint32N(gap + 1); len(out) < entries && at < rows; at++ {
		if r.Float64() < density {
			out = append(out, at)
		} else if r.IntN(8) == 0 {
			at += min(r.Uint32N(gap+1), rows-at-1)
		}
	}
	if out == nil {
		out = []uint32{r.Uint32N(rows)}
	}
	return out
}

func asPairs(rows []uint32) column.Column {
	var c column.Column
	eachWord(rows, func(at uint32, w uint64) { c.Rows, c.Words = append(c.Rows, at), append(c.Words, w) })
	return c
}

func entriesOf(c column.Column) []uint32 {
	var out []uint32
	c.Each(func(r uint32) { out = append(out, r) })
	return out
}

func drawn(r *rand.Rand, n int, rows, cols uint32, tiles int) ([]Item, [][]uint32) {
	items, want := make([]Item, n), make([][]uint32, n)
	for i := range items {
		want[i] = rowsOf(r, rows, 1+r.IntN(200), []float64{0.02, 0.3, 0.9}[r.IntN(3)], []uint32{0, 100, 1 << 20}[r.IntN(3)])
		c := column.Column{Rows: want[i]}
		if r.IntN(2) == 0 {
			c = asPairs(want[i])
		}
		c.Index, c.Sum = r.Uint32N(cols), r.Uint64()
		items[i] = Item{r.IntN(tiles), c}
	}
	return items, want
}

func TestRoundTripKeepsEveryColumn(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for range 300 {
		rows, cols, tiles := 1+r.Uint32N(1<<r.IntN(32)), 1+r.Uint32N(1<<r.IntN(32)), 1+r.IntN(500)
		items, want := drawn(r, r.IntN(20), rows, cols, tiles)
		got, err := DecodeItems(AppendItems([]byte("before"), items)[6:], rows, cols, tiles)
		require.NoError(t, err)
		require.Len(t, got, len(items))
		for i, g := range got {
			require.Equal(t, items[i].Tile, g.Tile)
			require.Equal(t, items[i].Column.Index, g.Column.Index)
			require.Equal(t, items[i].Column.Sum, g.Column.Sum)
			require.Equal(t, want[i], entriesOf(g.Column))
			require.Equal(t, column.PairsPay(len(asPairs(want[i]).Rows), len(want[i])), g.Column.Words != nil, "form")
		}
	}
}

// The ends of the number range: the largest block there can be.
func TestLargestRowAndIndex(t *testing.T) {
	const top = 1<<32 - 1
	rows := []uint32{0, 1, 63, 64, top - 65, top - 1}
	for _, c := range []column.Column{{Rows: rows}, asPairs(rows)} {
		c.Index = top - 1
		got, err := DecodeItems(AppendItems(nil, []Item{{1<<31 - 1, c}}), top, top, 1<<31)
		require.NoError(t, err)
		require.Equal(t, rows, entriesOf(got[0].Column))
	}
}

// Both forms of one column take the same bytes, and those of the shorter form.
func TestTheShorterFormIsWritten(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	for range 500 {
		rows := rowsOf(r, 1<<24, 1+r.IntN(300), []float64{0.05, 0.2, 0.5, 1}[r.IntN(4)], []uint32{0, 1 << 16}[r.IntN(2)])
		list, pairs := column.Column{Rows: rows}, asPairs(rows)
		a, b := AppendItems(nil, []Item{{0, list}}), AppendItems(nil, []Item{{0, pairs}})
		require.Equal(t, a, b)
		plain, packed := len(appendList(nil, &list)), len(appendPairs(nil, &list))
		entries, words, l, p := sizes(&pairs)
		require.Equal(t, []int{len(rows), len(pairs.Rows), plain, packed}, []int{entries, words, l, p})
		e, w, l2, p2 := sizes(&list)
		require.Equal(t, []int{e, w, l2, p2}, []int{entries, words, l, p})
		head := len(AppendItems(nil, []Item{{0, column.Column{Rows: []uint32{5}}}})) - 1
		require.LessOrEqual(t, len(a), head+min(plain, packed)+2)
	}
}

// Every byte cut off and every bit turned over is refused: the CRC sees all of them.
func TestDamageIsRefused(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	items, _ := drawn(r, 3, 5000, 900, 7)
	b := AppendItems(nil, items)
	for n := range b {
		_, err := DecodeItems(b[:n], 5000, 900, 7)
		require.Error(t, err)
		for bit := range 8 {
			c := append([]byte(nil), b...)
			c[n] ^= 1 << bit
			_, err = DecodeItems(c, 5000, 900, 7)
			require.Error(t, err)
		}
	}
}

func signed(b ...byte) []byte {
	return binary.LittleEndian.AppendUint32(b, crc32.Checksum(b, crc32.MakeTable(crc32.Castagnoli)))
}

// Bytes with a right CRC that no sender writes.
func TestWhatCannotBeIsRefused(t *testing.T) {
	sum := []byte{1, 2, 3, 4, 5, 6, 7, 8}
	item := func(tile, index byte, rest ...byte) []byte {
		return signed(append(append([]byte{1, tile, index}, sum...), rest...)...)
	}
	word := []byte{1, 0, 0, 0, 0, 0, 0, 0x80}
	_, err := DecodeItems(item(1, 9, 2*3, 0, 0, 97), 100, 10, 2)
	require.NoError(t, err, "rows 0, 1, 99")
	_, err = DecodeItems(item(1, 9, append([]byte{2*1 + 1, 0}, word...)...), 64, 10, 2)
	require.NoError(t, err, "rows 0, 63")
	for name, c := range map[string]struct {
		b   []byte
		why string
	}{
		"nothing":                 {nil, "too short"},
		"only a checksum":         {signed(), "too short"},
		"trailing byte":           {item(1, 9, 2*1, 5, 0), "after the last"},
		"more columns":            {signed(append([]byte{2, 0, 0}, sum...)...), "more columns than bytes"},
		"huge count":              {signed(0xff, 0xff, 0xff, 0xff, 0x7f), "more columns than bytes"},
		"endless varint":          {signed(0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff), "more columns than bytes"},
		"tile":                    {item(2, 9, 2*1, 5), "no such tile"},
		"index":                   {item(1, 10, 2*1, 5), "no such column"},
		"row":                     {item(1, 9, 2*2, 5, 94), "no such row"},
		"first row":               {item(1, 9, 2*1, 100), "no such row"},
		"row far off":             {item(1, 9, 2*2, 5, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 1), "no such row"},
		"no entries":              {item(1, 9, 0, 5), "without entries"},
		"no words":                {item(1, 9, 1, 5), "without entries"},
		"more entries than bytes": {item(1, 9, 2*9, 5, 5), "more entries than bytes"},
		"more words than bytes":   {item(1, 9, append([]byte{2*2 + 1, 0, 0}, word...)...), "more words than bytes"},
		"empty word":              {item(1, 9, 2*1+1, 0, 0, 0, 0, 0, 0, 0, 0, 0), "an empty word"},
		"word beyond the rows":    {item(1, 9, append([]byte{2*1 + 1, 1}, word...)...), "no such row"},
		"word number":             {item(1, 9, append([]byte{2*1 + 1, 2}, word...)...), "no such row"},
	} {
		t.Run(name, func(t *testing.T) {
			_, err := DecodeItems(c.b, 100, 10, 2)
			var m *Malformed
			require.ErrorAs(t, err, &m)
			require.ErrorContains(t, err, c.why)
		})
	}
}

// A count of millions in a few bytes takes no memory.
func TestMemoryFollowsTheBytes(t *testing.T) {
	b := signed(append([]byte{1, 0, 0, 1, 2, 3, 4, 5, 6, 7, 8}, binary.AppendUvarint(nil, 2<<31)...)...)
	per := testing.Benchmark(func(b2 *testing.B) {
		b2.ReportAllocs()
		for range b2.N {
			_, _ = DecodeItems(b, 1<<31, 10, 2)
		}
	}).AllocedBytesPerOp()
	require.Less(t, per, int64(4096))
}

// What decodes, encodes and decodes to the same; whatever the bytes, no panic.
func FuzzDecode(f *testing.F) {
	r := rand.New(rand.NewPCG(7, 8))
	for range 8 {
		items, _ := drawn(r, 1+r.IntN(3), 5000, 900, 7)
		b := AppendItems(nil, items)
		f.Add(b[:len(b)-crcBytes], uint32(5000), uint32(900), 7)
	}
	f.Fuzz(func(t *testing.T, b []byte, rows, cols uint32, tiles int) {
		_, _ = DecodeItems(b, rows, cols, tiles)
		items, err := DecodeItems(signed(b...), rows, cols, tiles)
		if err != nil {
			return
		}
		again, err := DecodeItems(AppendItems(nil, items), rows, cols, tiles)
		require.NoError(t, err)
		require.Equal(t, items, again)
		for i := range items {
			last := -1
			items[i].Column.Each(func(r uint32) {
				require.Greater(t, int(r), last)
				require.Less(t, r, rows)
				last = int(r)
			})
			require.GreaterOrEqual(t, last, 0)
		}
	})
}

// Batches as they leave workers: 4 KiB of thin columns (grids), and of dense ones.
func benchmarkBatch(b *testing.B, entries int, density float64, gap uint32) []Item {
	r := rand.New(rand.NewPCG(9, 10))
	var items []Item
	for bytes := 0; bytes < 4096; {
		c := column.Column{Index: r.Uint32N(1 << 20), Sum: r.Uint64(), Rows: rowsOf(r, 1<<22, entries, density, gap)}
		if p := asPairs(c.Rows); column.PairsPay(len(p.Rows), len(c.Rows)) {
			c.Rows, c.Words = p.Rows, p.Words
		}
		it := Item{r.IntN(64), c}
		items = append(items, it)
		bytes += Size(&it)
	}
	return items
}

func benchmarkShapes(b *testing.B, run func(b *testing.B, items []Item)) {
	for _, s := range []struct {
		name    string
		entries int
		density float64
		gap     uint32
	}{{"thin", 8, 0.02, 20000}, {"middle", 60, 0.2, 500}, {"dense", 2000, 0.5, 0}} {
		b.Run(s.name, func(b *testing.B) {
			items := benchmarkBatch(b, s.entries, s.density, s.gap)
			b.ReportAllocs()
			b.ResetTimer()
			run(b, items)
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N*len(items)), "ns/column")
			b.ReportMetric(float64(len(AppendItems(nil, items)))/float64(len(items)), "bytes/column")
		})
	}
}

func BenchmarkAppend(b *testing.B) {
	benchmarkShapes(b, func(b *testing.B, items []Item) {
		var buf []byte
		for range b.N {
			buf = AppendItems(buf[:0], items)
		}
	})
}

func BenchmarkDecode(b *testing.B) {
	benchmarkShapes(b, func(b *testing.B, items []Item) {
		enc := AppendItems(nil, items)
		for range b.N {
			if _, err := DecodeItems(enc, 1<<22, 1<<20, 64); err != nil {
				b.Fatal(err)
			}
		}
	})
}
