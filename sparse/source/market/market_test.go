package market

import (
	"bytes"
	"compress/gzip"
	"fmt"
	"io"
	"math/big"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/gen"
	"pairloom/sparse/source"
)

func write(t testing.TB, text string) string {
	path := filepath.Join(t.TempDir(), "m.mtx")
	require.NoError(t, os.WriteFile(path, []byte(text), 0o644))
	return path
}

func squeezed(t testing.TB, text string) string {
	var b bytes.Buffer
	z := gzip.NewWriter(&b)
	_, err := io.WriteString(z, text)
	require.NoError(t, err)
	require.NoError(t, z.Close())
	return b.String()
}

// readAll returns the odd entries and the shape.
func readAll(path string) (entries [][2]uint32, shape [2]uint32, err error) {
	r, err := Open(path)
	if err != nil {
		return nil, shape, err
	}
	defer r.Close()
	shape[0], shape[1], _ = r.Shape()
	for {
		row, col, odd, err := r.Next()
		if err == io.EOF {
			return entries, shape, nil
		}
		if err != nil {
			return nil, shape, err
		}
		if odd {
			entries = append(entries, [2]uint32{row, col})
		}
	}
}

const (
	pattern = "%%MatrixMarket matrix coordinate pattern general\n"
	integer = "%%MatrixMarket matrix coordinate integer general\n"
	real    = "%%MatrixMarket matrix coordinate real general\n"
)

func TestMatrices(t *testing.T) {
	for name, c := range map[string]struct {
		text string
		want [][2]uint32
	}{
		"pattern":               {pattern + "3 2 2\n1 1\n3 2\n", [][2]uint32{{0, 0}, {2, 1}}},
		"no entry":              {pattern + "3 2 0\n", nil},
		"no cell":               {pattern + "0 0 0\n", nil},
		"comments and blanks":   {pattern + "% a\n\n%b\n 3\t2  1 \n\n% c\n\t3  2 \n\n", [][2]uint32{{2, 1}}},
		"CRLF":                  {strings.ReplaceAll(pattern+"3 2 1\n3 2\n", "\n", "\r\n"), [][2]uint32{{2, 1}}},
		"no last newline":       {pattern + "3 2 1\n3 2", [][2]uint32{{2, 1}}},
		"capitals":              {"%%MATRIXMARKET Matrix Coordinate Pattern General\n3 2 1\n3 2\n", [][2]uint32{{2, 1}}},
		"repeated":              {pattern + "1 1 2\n1 1\n1 1\n", [][2]uint32{{0, 0}, {0, 0}}},
		"integers mod 2":        {integer + "1 6 6\n1 1 1\n1 2 -1\n1 3 2\n1 4 +7\n1 5 0\n1 6 99999999999999999999999999999\n", [][2]uint32{{0, 0}, {0, 1}, {0, 3}, {0, 5}}},
		"whole reals":           {real + "1 9 9\n1 1 1.0\n1 2 -1\n1 3 2.\n1 4 3e0\n1 5 0.5e1\n1 6 1e300\n1 7 9007199254740993.0\n1 8 10e-1\n1 9 0e-999999999999\n", [][2]uint32{{0, 0}, {0, 1}, {0, 3}, {0, 4}, {0, 6}, {0, 7}}},
		"leading zeros in both": {real + "01 0001 1\n1 01 01.00\n", [][2]uint32{{0, 0}}},
	} {
		for form, text := range map[string]string{"plain": c.text, "gz": squeezed(t, c.text)} {
			got, _, err := readAll(write(t, text))
			require.NoError(t, err, "%s, %s", name, form)
			require.Equal(t, c.want, got, "%s, %s", name, form)
		}
	}
	_, shape, err := readAll(write(t, squeezed(t, pattern)+squeezed(t, "3 2 1\n3 2\n")))
	require.NoError(t, err, "two gzip members")
	require.Equal(t, [2]uint32{3, 2}, shape)
}

// allocated returns the bytes that one reading took, whether it was used up or not.
func allocated(path string) (uint64, error) {
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	_, _, err := readAll(path)
	runtime.ReadMemStats(&after)
	return after.TotalAlloc - before.TotalAlloc, err
}

// Each broken file gives one line that names the place and what was expected.
func TestBrokenMatrices(t *testing.T) {
	long := strings.Repeat("1", lineMost+1)
	cut := squeezed(t, pattern+"2 2 3\n1 1\n2 2\n1 2\n")
	flipped := []byte(cut)
	flipped[len(flipped)-6] ^= 1 // in the checksum
	for name, c := range map[string]struct{ text, want string }{
		"empty":                    {"", "empty; a Matrix Market file was expected"},
		"no banner":                {"3 2 1\n3 2\n", "line 1: a Matrix Market file begins with %%MatrixMarket"},
		"short banner":             {"%%MatrixMarket matrix coordinate\n", "line 1: a Matrix Market file begins"},
		"vector":                   {"%%MatrixMarket vector coordinate real general\n", "line 1: a Matrix Market file begins"},
		"array":                    {"%%MatrixMarket matrix array real general\n2 2\n", `line 1: format "array"; only coordinate`},
		"complex":                  {"%%MatrixMarket matrix coordinate complex general\n", `line 1: entries are "complex"`},
		"symmetric":                {"%%MatrixMarket matrix coordinate pattern symmetric\n", `line 1: symmetry "symmetric"`},
		"skew":                     {"%%MatrixMarket matrix coordinate real skew-symmetric\n", `line 1: symmetry "skew-symmetric"`},
		"hermitian":                {"%%MatrixMarket matrix coordinate real hermitian\n", `line 1: symmetry "hermitian"`},
		"long word":                {"%%MatrixMarket matrix " + strings.Repeat("x", 999) + " real general\n", `line 1: format "xxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx"`},
		"no size line":             {pattern + "% only a comment\n", "line 2: the size line (rows columns entries) is missing"},
		"two sizes":                {pattern + "3 2\n", "line 2: three whole numbers were expected"},
		"negative size":            {pattern + "3 -2 1\n", "line 2: three whole numbers"},
		"fractional size":          {pattern + "3 2.5 1\n", "line 2: three whole numbers"},
		"absurd rows":              {pattern + "4000000000 1 1\n1 1\n", "line 2: 4000000000 rows and 1 columns; more than a file of 68 bytes can mean"},
		"rows beyond 63 bits":      {pattern + "4000000000000000000 1 1\n1 1\n", "line 2: 4000000000000000000 rows and 1 columns; more than a file of 77 bytes"},
		"absurd columns":           {pattern + "1 9999999999999999999 1\n1 1\n", "line 2: 1 rows and 9999999999999999999 columns; more than a file"},
		"sizes beyond 64 bits":     {pattern + "1 99999999999999999999999 1\n1 1\n", "line 2: three whole numbers"},
		"absurd entries":           {pattern + "5 5 999999999999\n1 1\n", "line 2: 999999999999 entries are announced; a file of 70 bytes"},
		"missing entries":          {pattern + "5 5 3\n1 1\n2 2\n", "line 4: the file ends after 2 of 3 entries"},
		"too many entries":         {pattern + "5 5 1\n1 1\n2 2\n", "line 4: more entries than the 1 announced"},
		"row outside":              {pattern + "5 4 2\n1 1\n6 1\n", "line 4: entry (6, 1) is outside the 5 × 4 matrix"},
		"column outside":           {pattern + "5 4 1\n1 5\n", "line 3: entry (1, 5) is outside the 5 × 4 matrix"},
		"counted from 0":           {pattern + "5 4 1\n0 1\n", "line 3: entry (0, 1); rows and columns are counted from 1"},
		"one number":               {pattern + "5 4 1\n1\n", `line 3: "1"; row column was expected`},
		"value in a pattern":       {pattern + "5 4 1\n1 1 1\n", `line 3: "1 1 1"; row column was expected`},
		"no value":                 {integer + "5 4 1\n1 1\n", `line 3: "1 1"; row column and a whole number was expected`},
		"two values":               {integer + "5 4 1\n1 1 1 1\n", `line 3: "1 1 1 1"; row column and a whole number`},
		"a word":                   {pattern + "5 4 1\n1 x\n", `line 3: "1 x"; row column was expected`},
		"negative row":             {pattern + "5 4 1\n-1 1\n", `line 3: "-1 1"; row column was expected`},
		"1.5":                      {real + "5 4 1\n1 1 1.5\n", `line 3: "1 1 1.5"; row column and a whole number`},
		"1.0 in an integer matrix": {integer + "5 4 1\n1 1 1.0\n", `line 3: "1 1 1.0"; row column and a whole number`},
		"NaN":                      {real + "5 4 1\n1 1 NaN\n", `line 3: "1 1 NaN"`},
		"a word as a value":        {integer + "5 4 1\n1 1 one\n", `line 3: "1 1 one"; row column and a whole number`},
		"infinite":                 {real + "5 4 1\n1 1 inf\n", `line 3: "1 1 inf"`},
		"nearly whole":             {real + "5 4 1\n1 1 0.99999999999999999999999\n", `line 3: "1 1 0.999`},
		"small":                    {real + "5 4 1\n1 1 1e-300\n", `line 3: "1 1 1e-300"`},
		"only a sign":              {real + "5 4 1\n1 1 -\n", `line 3: "1 1 -"`},
		"only a point":             {real + "5 4 1\n1 1 .\n", `line 3: "1 1 ."`},
		"exponent without digits":  {real + "5 4 1\n1 1 1e+\n", `line 3: "1 1 1e+"`},
		"hexadecimal":              {real + "5 4 1\n1 1 0x1\n", `line 3: "1 1 0x1"`},
		"a long line":              {pattern + "5 4 1\n" + long + " 1\n", "line 3: longer than 65536 bytes"},
		"no newline at all":        {strings.Repeat("a", 3<<20), "line 1: longer than 65536 bytes"},
		"gzip cut short":           {cut[:len(cut)-12], "the compressed file is damaged or cut short"},
		"gzip without its end":     {cut[:len(cut)-8], "the compressed file is damaged or cut short"},
		"gzip with a flipped bit":  {string(flipped), "the compressed file is damaged or cut short"},
		"gzip header alone":        {cut[:5], "not a gzip file"},
		"bytes after gzip":         {cut + "tail", "the compressed file is damaged or cut short"},
		"gzip, absurd rows":        {squeezed(t, pattern+"4000000000 1 1\n1 1\n"), "line 2: 4000000000 rows and 1 columns; more than a file"},
		"gzip, rows beyond text":   {squeezed(t, pattern+"1600000 1 1\n1 1\n"), "1600000 rows and 1 columns; more than 65 bytes of text can mean"},
	} {
		taken, err := allocated(write(t, c.text))
		require.Less(t, taken, 2*uint64(len(c.text))+64<<20, name)
		broken := new(source.InputError)
		require.ErrorAs(t, err, &broken, name)
		require.Contains(t, err.Error(), c.want, name)
		require.NotContains(t, err.Error(), "\n", name)
		require.Less(t, len(err.Error()), 400, name)
	}
}

func TestMissingFilesAndFolders(t *testing.T) {
	_, err := Open(filepath.Join(t.TempDir(), "none.mtx"))
	require.ErrorIs(t, err, os.ErrNotExist)
	_, err = Open(t.TempDir())
	require.ErrorContains(t, err, "is a folder; a file was expected")
}

// A small file that inflates to 16 MiB of blank lines, and one that announces four
// million entries and has one, take no memory to speak of.
func TestBombs(t *testing.T) {
	blank := write(t, squeezed(t, pattern+"2 2 1\n1 1\n"+strings.Repeat("\n", 16<<20)))
	announced := write(t, squeezed(t, pattern+"100000 100000 4000000\n1 1\n"+strings.Repeat("%\n", 8<<20)))
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	got, _, err := readAll(blank)
	require.NoError(t, err)
	require.Len(t, got, 1)
	_, _, err = readAll(announced)
	require.ErrorContains(t, err, "the file ends after 1 of 4000000 entries")
	runtime.ReadMemStats(&after)
	require.Less(t, after.TotalAlloc-before.TotalAlloc, uint64(8<<20))
}

// Ten million zero bytes, compressed to a thousandth, are one line that never ends.
func TestZeroBomb(t *testing.T) {
	zeros := strings.Repeat("\x00", 10_000_000)
	for text, want := range map[string]string{
		zeros:                           "line 1: longer than 65536 bytes",
		pattern + zeros:                 "line 2: longer than 65536 bytes",
		pattern + "9 9 99999\n" + zeros: "line 3: longer than 65536 bytes",
	} {
		file := squeezed(t, text)
		require.Less(t, len(file), 20_000)
		taken, err := allocated(write(t, file))
		require.ErrorAs(t, err, new(*source.InputError))
		require.ErrorContains(t, err, want)
		require.Less(t, taken, uint64(4<<20))
	}
}

// Any bit of a compressed file may flip: the matrix stays the same or there is one
// error. Bits that mean nothing stand in the header (10 bytes) and in the byte before
// the length of the empty last block, 13 bytes from the end (RFC 1951, 3.2.4).
func TestFlippedBits(t *testing.T) {
	text := pattern + "40 40 40\n"
	for i := range 40 {
		text += fmt.Sprintf("%d %d\n", i+1, i*i%40+1)
	}
	whole := squeezed(t, text)
	want, _, err := readAll(write(t, whole))
	require.NoError(t, err)
	path, failed := write(t, ""), 0
	for at := range 8 * len(whole) {
		b := []byte(whole)
		b[at/8] ^= 1 << (at % 8)
		require.NoError(t, os.WriteFile(path, b, 0o644))
		got, _, err := readAll(path)
		if err == nil {
			require.True(t, at/8 < 10 || at/8 == len(whole)-13, "bit %d", at)
			require.Equal(t, want, got)
			continue
		}
		failed++
		require.ErrorAs(t, err, new(*source.InputError), "bit %d", at)
	}
	require.Greater(t, failed, 8*(len(whole)-11))
}

// The bounds on sizes, exactly: 8 a byte and 2^20, of text where it is compressed; and
// 2^32-2 in a file that is large enough for more.
func TestSizeBounds(t *testing.T) {
	for _, form := range []string{"%d 1 1\n1 1\n", "1 %d 1\n1 1\n"} {
		most := uint64(len(pattern)+len(fmt.Sprintf(form, 1<<20)))*sizePerByte + slack
		for extra, fails := range []bool{false, true} {
			text := pattern + fmt.Sprintf(form, most+uint64(extra))
			for _, file := range []string{text, squeezed(t, text)} {
				_, _, err := readAll(write(t, file))
				require.Equal(t, fails, err != nil, "%v", err)
			}
		}
	}
	r := gen.New(5)
	noise := new(strings.Builder)
	for range 40_000 {
		fmt.Fprintf(noise, "%%%016x%016x\n", r.Uint64(), r.Uint64())
	}
	for _, form := range []string{"%d 1", "1 %d"} {
		for size, want := range map[uint64]string{indexMost: "text can mean", indexMost + 1: "at most 2^32-2 fit"} {
			_, _, err := readAll(write(t, squeezed(t, pattern+noise.String()+fmt.Sprintf(form, size)+" 0\n")))
			require.ErrorContains(t, err, fmt.Sprint(size))
			require.ErrorContains(t, err, want)
		}
	}
}

// Nothing is allocated by the entry: ten thousand take what ten take.
func TestAllocations(t *testing.T) {
	var counts [2]float64
	for i, n := range []int{10, 10_000} {
		path := write(t, fmt.Sprintf("%s1 1 %d\n", real, n)+strings.Repeat("1 1 -3.0e0\n", n))
		counts[i] = testing.AllocsPerRun(5, func() {
			r, err := Open(path)
			for err == nil {
				_, _, _, err = r.Next()
			}
			r.Close()
		})
	}
	require.InDelta(t, counts[0], counts[1], 2)
}

// Boundary matrices written and read, plain and compressed.
func TestRoundTrip(t *testing.T) {
	for seed := range uint64(50) {
		f := gen.Chain(gen.New(seed), []int{1, 2, 1}, []int{0, 20, 30}, 3)
		dir := t.TempDir()
		paths, err := gen.WriteMarket(dir, "d", f.Boundary)
		require.NoError(t, err)
		for k, path := range paths {
			var want [][2]uint32
			for j, column := range f.Boundary[k+1] {
				for _, row := range column {
					want = append(want, [2]uint32{row, uint32(j)})
				}
			}
			text, err := os.ReadFile(path)
			require.NoError(t, err)
			for _, path := range []string{path, write(t, squeezed(t, string(text)))} {
				got, shape, err := readAll(path)
				require.NoError(t, err)
				require.Equal(t, want, got)
				require.Equal(t, [2]uint32{uint32(len(f.Boundary[k])), uint32(len(f.Boundary[k+1]))}, shape)
			}
		}
	}
}

func TestProgressAndLines(t *testing.T) {
	text := pattern + "% c\n5 4 2\n1 1\n\n2 2\n"
	r, err := Open(write(t, text))
	require.NoError(t, err)
	defer r.Close()
	require.Equal(t, 3, r.Line())
	for _, line := range []int{4, 6} {
		_, _, _, err = r.Next()
		require.NoError(t, err)
		require.Equal(t, line, r.Line())
	}
	require.Equal(t, uint64(len(text)), r.Size())
	require.Equal(t, r.Size(), r.BytesRead())
}

// Values against exact rational numbers.
func FuzzValue(f *testing.F) {
	for _, v := range []string{"1", "-1.0", "1.5", "3e2", "25e-1", "20e-1", "0.02e2", ".5e1", "1e", "e1", "+", "1e-5", "00.0", "NaN", "9007199254740993.0"} {
		f.Add(v)
	}
	f.Fuzz(func(t *testing.T, v string) {
		if len(v) == 0 || len(v) > 40 {
			return
		}
		odd, ok := (&Reader{real: true}).parity([]byte(v))
		if strings.ContainsAny(v, "_/xXpPbBoO") || strings.ContainsAny(v, "eE") && len(v[strings.IndexAny(v, "eE"):]) > 5 {
			return // the twin reads more forms, and takes long for large powers
		}
		x, known := new(big.Rat).SetString(v)
		require.Equal(t, known && x.IsInt(), ok, "%q", v)
		if ok {
			require.Equal(t, x.Num().Bit(0) == 1, odd, "%q", v)
		}
	})
}

// naive reads small well-formed files by splitting strings.
func naive(text string) (entries [][2]uint32, shape [2]uint32, ok bool) {
	lines := strings.Split(text, "\n")
	head := strings.Fields(strings.ToLower(lines[0]))
	if len(head) != 5 || head[3] != "pattern" {
		return nil, shape, false
	}
	declared, begun := 0, false
	for _, line := range lines[1:] {
		line = strings.TrimSpace(line)
		if line == "" || line[0] == '%' {
			continue
		}
		if !begun {
			if n, err := fmt.Sscanf(line, "%d %d %d", &shape[0], &shape[1], &declared); n != 3 || err != nil {
				return nil, shape, false
			}
			begun = true
			continue
		}
		var e [2]uint32
		if n, err := fmt.Sscanf(line, "%d %d", &e[0], &e[1]); n != 2 || err != nil {
			return nil, shape, false
		}
		entries = append(entries, [2]uint32{e[0] - 1, e[1] - 1})
	}
	return entries, shape, begun && declared == len(entries)
}

// Any bytes: a matrix whose entries lie inside, or one error; what is read is what the
// naive twin reads.
func FuzzMarket(f *testing.F) {
	for _, s := range []string{"", pattern + "3 2 2\n1 1\n3 2\n", integer + "2 2 1\n1 1 -3\n", real + "2 2 1\n1 1 1.0\n", squeezed(f, pattern+"1 1 1\n1 1\n"),
		pattern + "9999999 9999999 99999999\n", "%%MatrixMarket matrix array real general\n1 1\n", pattern + "1 1 2\n% x\n\n1 1\n1 1"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		got, shape, err := readAll(write(t, string(b)))
		if err != nil {
			require.ErrorAs(t, err, new(*source.InputError))
			return
		}
		for _, e := range got {
			require.Less(t, e[0], shape[0])
			require.Less(t, e[1], shape[1])
		}
		if want, wantShape, ok := naive(string(b)); ok {
			require.Equal(t, want, got)
			require.Equal(t, wantShape, shape)
		}
	})
}

func BenchmarkRead(b *testing.B) {
	paths, err := gen.WriteMarket(b.TempDir(), "d", gen.Chessboard(6, 7).Boundary)
	require.NoError(b, err)
	text, err := os.ReadFile(paths[3])
	require.NoError(b, err)
	lines := strings.SplitAfterN(string(text), "\n", 3)
	signed := strings.Replace(lines[0], "pattern", "integer", 1) + lines[1] + strings.ReplaceAll(lines[2], "\n", " -1\n")
	whole := strings.Replace(lines[0], "pattern", "real", 1) + lines[1] + strings.ReplaceAll(lines[2], "\n", " 1.0\n")
	for _, c := range []struct{ name, text, file string }{{"pattern", string(text), string(text)}, {"integer", signed, signed}, {"real", whole, whole}, {"gz", string(text), squeezed(b, string(text))}} {
		b.Run(c.name, func(b *testing.B) {
			path := write(b, c.file)
			b.SetBytes(int64(len(c.text)))
			b.ReportAllocs()
			for b.Loop() {
				r, err := Open(path)
				require.NoError(b, err)
				for err == nil {
					_, _, _, err = r.Next()
				}
				require.Equal(b, io.EOF, err)
				r.Close()
			}
		})
	}
}
