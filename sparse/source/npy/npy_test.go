package npy

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"testing/iotest"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/source"
)

// file lays out an array file by the format's description: magic, version, header, values.
func file(version byte, head string, values ...byte) []byte {
	out := []byte("\x93NUMPY" + string(version) + "\x00")
	if version == 1 {
		out = binary.LittleEndian.AppendUint16(out, uint16(len(head)))
	} else {
		out = binary.LittleEndian.AppendUint32(out, uint32(len(head)))
	}
	return append(append(out, head...), values...)
}

func head(descr, order, shape string) string {
	return fmt.Sprintf("{'descr': '%s', 'fortran_order': %s, 'shape': %s, }", descr, order, shape)
}

func onDisk(t testing.TB, text []byte) string {
	path := filepath.Join(t.TempDir(), "in.npy")
	require.NoError(t, os.WriteFile(path, text, 0o644))
	return path
}

// readAll reads an array in pieces of n values.
func readAll(r *Reader, n int) (all []float64, err error) {
	buf := make([]float64, n)
	for {
		n, err := r.Read(buf)
		all = append(all, buf[:n]...)
		if err == io.EOF {
			return all, nil
		}
		if err != nil {
			return all, err
		}
	}
}

// Every type in both byte orders: bytes written down by hand.
func TestTypes(t *testing.T) {
	for _, at := range []struct {
		descr, name string
		bytes       string
		want        []float64
	}{
		{"|u1", "u8", "\x00\xff", []float64{0, 255}},
		{"<u1", "u8", "\x80\x01", []float64{128, 1}},
		{"<u2", "u16", "\x01\x80\xff\xff", []float64{32769, 65535}},
		{">u2", "u16", "\x80\x01\x00\x02", []float64{32769, 2}},
		{"<i2", "i16", "\x01\x80\xff\xff", []float64{-32767, -1}},
		{">i2", "i16", "\x80\x00\x7f\xff", []float64{-32768, 32767}},
		{"<i4", "i32", "\xfe\xff\xff\xff\x00\x00\x00\x80", []float64{-2, -2147483648}},
		{">i4", "i32", "\xff\xff\xff\xfe\x00\x00\x00\x07", []float64{-2, 7}},
		{"<i8", "i64", "\x00\x00\x00\x00\x00\x00\x20\x00\xff\xff\xff\xff\xff\xff\xff\xff", []float64{1 << 53, -1}},
		{">i8", "i64", "\x80\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x00\x05", []float64{-1 << 63, 5}},
		{"<f4", "f32", "\x00\x00\xc0\x3f\x00\x00\x00\x80", []float64{1.5, 0}},
		{">f4", "f32", "\x3f\xc0\x00\x00\xff\x80\x00\x00", []float64{1.5, math.Inf(-1)}},
		{"<f8", "f64", "\x9a\x99\x99\x99\x99\x99\xb9\x3f\x00\x00\x00\x00\x00\x00\x00\x80", []float64{0.1, 0}},
		{">f8", "f64", "\x3f\xb9\x99\x99\x99\x99\x99\x9a\x7f\xf0\x00\x00\x00\x00\x00\x00", []float64{0.1, math.Inf(1)}},
	} {
		r, err := Open(onDisk(t, file(1, head(at.descr, "False", "(2,)"), []byte(at.bytes)...)))
		require.NoError(t, err)
		got, err := readAll(r, 5)
		require.NoError(t, err)
		require.Equal(t, at.want, got, at.descr)
		for _, v := range got {
			require.False(t, v == 0 && math.Signbit(v), "−0 in %s", at.descr)
		}
		require.Equal(t, at.name, r.Header().DType)
		require.Equal(t, at.descr[0] == '>', r.Header().BigEndian)
		require.NoError(t, r.Close())
		require.NoError(t, r.Close())
	}
}

// The grammar's freedom: versions, quotes, blanks, order of keys, commas at the end.
func TestHeaders(t *testing.T) {
	for text, want := range map[string]Header{
		head("|u1", "False", "(2, 3)"):                                      {Shape: []int{2, 3}, DType: "u8", item: 1},
		head("|u1", "True", "(2, 3, )"):                                     {Shape: []int{2, 3}, Fortran: true, DType: "u8", item: 1},
		head("|u1", "False", "(6,)") + strings.Repeat(" ", 70) + "\n":       {Shape: []int{6}, DType: "u8", item: 1},
		head("|u1", "False", "(6L, 1L)"):                                    {Shape: []int{6, 1}, DType: "u8", item: 1},
		" {\"shape\":(1,06),\"fortran_order\" :True , \"descr\":\"|u1\"}\n": {Shape: []int{1, 6}, Fortran: true, DType: "u8", item: 1},
		head(">i2", "False", "(3,)"):                                        {Shape: []int{3}, DType: "i16", BigEndian: true, item: 2},
		head("|u1", "False", "("+strings.Repeat("1, ", 31)+"6)"):            {Shape: append(ones(31), 6), DType: "u8", item: 1},
	} {
		for version := range byte(3) {
			r, err := newReader("a.npy", bytes.NewReader(file(version+1, text, 1, 2, 3, 4, 5, 6)), int64(len(file(version+1, text))+6))
			require.NoError(t, err, text)
			require.Equal(t, want, r.Header())
			require.Equal(t, 6/want.item, r.Len())
		}
	}
	r, err := Open(onDisk(t, file(1, head("|u1", "False", "()"), 7)))
	require.NoError(t, err)
	require.Nil(t, r.Header().Shape)
	got, err := readAll(r, 1)
	require.NoError(t, err)
	require.Equal(t, []float64{7}, got)
	require.NoError(t, r.Close())
}

func ones(n int) (list []int) {
	for range n {
		list = append(list, 1)
	}
	return list
}

// Values arrive in file order whatever the pieces asked for; the buffer is refilled on the way.
func TestPieces(t *testing.T) {
	const n = bufferBytes/8*2 + 77
	var values []byte
	want := make([]float64, n)
	for i := range want {
		want[i] = float64(i) / 3
		values = binary.LittleEndian.AppendUint64(values, math.Float64bits(want[i]))
	}
	path := onDisk(t, file(2, head("<f8", "True", fmt.Sprintf("(1, %d)", n)), values...))
	for _, piece := range []int{1000, bufferBytes / 8, n + 1} {
		r, err := Open(path)
		require.NoError(t, err)
		none, err := r.Read(nil)
		require.NoError(t, err)
		require.Zero(t, none)
		got, err := readAll(r, piece)
		require.NoError(t, err)
		require.Equal(t, want, got)
		require.NoError(t, r.Close())
	}
}

// Each broken file is refused with one line about what is wrong with it.
func TestBroken(t *testing.T) {
	good := file(1, head("<i2", "False", "(2,)"), 1, 0, 2, 0)
	start := len(good) - 4
	wrong := func(at int, b byte) []byte {
		out := bytes.Clone(good)
		out[at] = b
		return out
	}
	shaped := func(shape string) []byte { return file(1, head("|u1", "False", shape), 1) }
	typed := func(descr string) []byte { return file(1, head(descr, "False", "(1,)"), 1) }
	for name, at := range map[string]struct {
		text []byte
		why  string
	}{
		"empty":          {nil, "byte 0: not a NumPy .npy file"},
		"seven bytes":    {good[:7], "byte 0: not a NumPy .npy file"},
		"magic":          {wrong(0, 'N'), "byte 0: not a NumPy .npy file"},
		"version 0":      {wrong(6, 0), "byte 6: format version 0.0"},
		"version 4":      {wrong(6, 4), "byte 6: format version 4.0; versions 1.0, 2.0 and 3.0 are read"},
		"version 1.1":    {wrong(7, 1), "byte 6: format version 1.1"},
		"no length":      {good[:9], "byte 8: the file ends before the length of its header"},
		"short header":   {good[:30], "byte 8: a header of 57 bytes is announced, 20 bytes follow"},
		"huge header":    {append([]byte("\x93NUMPY\x02\x00\xff\xff\xff\xff"), "{}"...), "a header of 4294967295 bytes is announced, 2 bytes follow"},
		"long header":    {file(2, head("|u1", "False", "(1,)")+strings.Repeat(" ", headerBytesMax), 1), "at most 1048576 are sensible"},
		"no value":       {good[:start], "4 bytes expected after the header (shape 2 of i16), 0 found"},
		"cut short":      {good[:start+3], "4 bytes expected after the header (shape 2 of i16), 3 found"},
		"trailing":       {append(bytes.Clone(good), 0), "4 bytes expected after the header (shape 2 of i16), 5 found"},
		"0-d, no value":  {file(1, head("<f8", "False", "()")), "8 bytes expected after the header (shape () of f64), 0 found"},
		"empty axis":     {shaped("(3, 0)"), "axis 1 of the array has length 0"},
		"overflow":       {shaped("(4294967296, 4294967296)"), "shape 4294967296 × 4294967296 is more than any file can hold"},
		"wraps to one":   {shaped("(3, 12297829382473034411)"), "a length beyond 64 bits"},
		"20 digits":      {shaped("(99999999999999999999,)"), "a length beyond 64 bits"},
		"negative":       {shaped("(-1,)"), "negative length"},
		"fraction":       {shaped("(1.0,)"), "shape must be a tuple"},
		"no tuple":       {shaped("1"), "shape must be a tuple"},
		"a number":       {shaped("(1)"), "shape must be a tuple"},
		"a list":         {shaped("[1]"), "shape must be a tuple"},
		"lone comma":     {shaped("(,)"), "shape must be a tuple"},
		"no comma":       {shaped("(1 1)"), "shape must be a tuple"},
		"two commas":     {shaped("(1,,1)"), "shape must be a tuple"},
		"open tuple":     {shaped("(1,"), "shape must be a tuple"},
		"33 axes":        {shaped("(" + strings.Repeat("1,", 33) + ")"), "more than 32 axes"},
		"complex":        {typed("<c8"), "values of type \"<c8\" are not read; accepted are u1 u2 i2 i4 f4 f8, and i8"},
		"u4":             {typed("<u4"), "values of type \"<u4\" are not read"},
		"bool":           {typed("|b1"), "values of type \"|b1\" are not read"},
		"objects":        {typed("|O"), "values of type \"|O\" are not read"},
		"half":           {typed("<f2"), "values of type \"<f2\" are not read"},
		"no byte order":  {typed("|f4"), "values of type \"|f4\" are not read"},
		"no mark":        {typed("f4"), "values of type \"f4\" are not read"},
		"no type":        {typed(""), "values of type \"\" are not read"},
		"control bytes":  {typed("\n\x00"), "values of type \"\\n\\x00\" are not read"},
		"fields":         {file(1, "{'descr': [('a', '<f4')], 'fortran_order': False, 'shape': (1,)}"), "values with several fields are not read"},
		"type a number":  {file(1, "{'descr': 4, 'fortran_order': False, 'shape': (1,)}"), "the header must read"},
		"order":          {file(1, head("|u1", "Maybe", "(1,)"), 1), "fortran_order must be True or False"},
		"no dict":        {file(1, "descr", 1), "the header must read"},
		"no brace":       {file(1, "{'descr': '|u1'", 1), "the header must read"},
		"no colon":       {file(1, "{'descr' '|u1'}", 1), "the header must read"},
		"no separator":   {file(1, "{'descr': '|u1' 'shape': (1,)}", 1), "the header must read"},
		"open quote":     {file(1, "{'descr", 1), "the header must read"},
		"empty header":   {file(1, "", 1), "the header must read"},
		"nothing said":   {file(1, "{}", 1), "the header does not say 'descr'"},
		"no shape":       {file(1, "{'descr': '|u1', 'fortran_order': False}", 1), "the header does not say 'shape'"},
		"said twice":     {file(1, "{'descr': '|u1', 'descr': '<f8'}", 1), "the header says 'descr' twice"},
		"another key":    {file(1, "{'descr': '|u1', 'colour': 3}", 1), "the header has the key \"colour\""},
		"after the dict": {file(1, head("|u1", "False", "(1,)")+"x", 1), "bytes after the header's closing brace"},
	} {
		_, err := Open(onDisk(t, at.text))
		var broken *source.InputError
		require.ErrorAs(t, err, &broken, name)
		require.Contains(t, err.Error(), at.why, name)
		require.NotContains(t, err.Error(), "\n", name)
	}
}

// A refused value is named by its place, and the values before it have arrived.
func TestInexact(t *testing.T) {
	values := binary.LittleEndian.AppendUint64(nil, 1<<60)
	values = binary.LittleEndian.AppendUint64(values, 1<<53+1)
	r, err := Open(onDisk(t, file(1, head("<i8", "False", "(2,)"), values...)))
	require.NoError(t, err)
	defer r.Close()
	got, err := readAll(r, 8)
	require.Equal(t, []float64{1 << 60}, got)
	require.ErrorContains(t, err, "value 1 (in file order) is a 64-bit integer that no float64 holds exactly")
}

// What is not a regular file, or changes while it is read, is an error, never a wait.
func TestFiles(t *testing.T) {
	_, err := Open(filepath.Join(t.TempDir(), "missing.npy"))
	require.ErrorIs(t, err, fs.ErrNotExist)
	_, err = Open(t.TempDir())
	require.ErrorContains(t, err, "not a regular file")

	text := file(1, head("<i2", "False", "(2,)"), 1, 0, 2, 0)
	r, err := newReader("a.npy", bytes.NewReader(text[:len(text)-1]), int64(len(text)))
	require.NoError(t, err)
	_, err = readAll(r, 2)
	require.ErrorContains(t, err, "the file ends 1 bytes early")

	failing := errors.New("the disk is on fire")
	cut := len(text) - 3
	r, err = newReader("a.npy", io.MultiReader(bytes.NewReader(text[:cut]), iotest.ErrReader(failing)), int64(len(text)))
	require.NoError(t, err)
	_, err = readAll(r, 2)
	require.ErrorIs(t, err, failing)
}

// Any bytes are an array whose values all arrive, or one *source.InputError.
func FuzzOpen(f *testing.F) {
	f.Add(file(1, head("<i2", "False", "(2,)"), 1, 0, 2, 0))
	f.Add(file(2, head(">f8", "True", "(1, 1)"), 1, 0, 2, 0, 0, 0, 0, 0))
	f.Add(file(3, head("<i8", "False", "()"), 1, 0, 2, 0, 0, 0, 0x30, 0))
	f.Add([]byte("\x93NUMPY\x02\x00\xff\xff\xff\xff"))
	f.Fuzz(func(t *testing.T, text []byte) {
		r, err := newReader("a.npy", bytes.NewReader(text), int64(len(text)))
		var broken *source.InputError
		if err != nil {
			require.ErrorAs(t, err, &broken)
			return
		}
		got, err := readAll(r, 7)
		if err != nil {
			require.ErrorAs(t, err, &broken)
			return
		}
		require.Len(t, got, r.Len())
	})
}

func BenchmarkRead(b *testing.B) {
	const n = 1 << 20
	for _, descr := range []string{"|u1", "<i2", "<f4", ">f4", "<f8"} {
		b.Run(descr[1:]+descr[:1], func(b *testing.B) {
			item := int(descr[2] - '0')
			path := onDisk(b, file(1, head(descr, "False", fmt.Sprintf("(%d,)", n)), make([]byte, n*item)...))
			buf := make([]float64, 1<<14)
			b.SetBytes(int64(n * item))
			b.ReportAllocs()
			for b.Loop() {
				r, err := Open(path)
				require.NoError(b, err)
				for err == nil {
					_, err = r.Read(buf)
				}
				require.ErrorIs(b, err, io.EOF)
				require.NoError(b, r.Close())
			}
		})
	}
}
