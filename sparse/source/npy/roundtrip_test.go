package npy

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/source"
)

// encode writes an array file as the format says: the header is padded with blanks so
// that the values start at a multiple of 64, and ends with a line feed.
func encode(version byte, descr string, fortran bool, shape string, values []byte) []byte {
	word := map[bool]string{false: "False", true: "True"}[fortran]
	text := fmt.Sprintf("{'descr': '%s', 'fortran_order': %s, 'shape': %s, }", descr, word, shape)
	lead := 10
	if version > 1 {
		lead = 12
	}
	text += strings.Repeat(" ", 63-(lead+len(text))%64) + "\n"
	out := append([]byte("\x93NUMPY"), version, 0)
	if version == 1 {
		out = binary.LittleEndian.AppendUint16(out, uint16(len(text)))
	} else {
		out = binary.LittleEndian.AppendUint32(out, uint32(len(text)))
	}
	return append(append(out, text...), values...)
}

// drain reads an array file to its end by parts of the given size.
func drain(path string, part int) (Header, []float64, error) {
	r, err := Open(path)
	if err != nil {
		return Header{}, nil, err
	}
	defer r.Close()
	var all []float64
	for buf := make([]float64, part); ; {
		n, err := r.Read(buf)
		all = append(all, buf[:n]...)
		switch {
		case errors.Is(err, io.EOF) && len(all) == r.Len():
			return r.Header(), all, nil
		case err != nil:
			return r.Header(), all, err
		case n == 0:
			return r.Header(), all, fmt.Errorf("no value and no end after %d of %d", len(all), r.Len())
		}
	}
}

// kinds are the accepted types: extremes, what a random word stands for in the type,
// and how a value is stored.
var kinds = []struct {
	descr, name string
	extremes    []float64
	draw        func(u uint64) float64
	put         func(o binary.AppendByteOrder, to []byte, v float64) []byte
}{
	{"u1", "u8", []float64{0, 255}, func(u uint64) float64 { return float64(uint8(u)) },
		func(_ binary.AppendByteOrder, to []byte, v float64) []byte { return append(to, uint8(v)) }},
	{"u2", "u16", []float64{0, 65535}, func(u uint64) float64 { return float64(uint16(u)) },
		func(o binary.AppendByteOrder, to []byte, v float64) []byte { return o.AppendUint16(to, uint16(v)) }},
	{"i2", "i16", []float64{-32768, 32767, -1}, func(u uint64) float64 { return float64(int16(u)) },
		func(o binary.AppendByteOrder, to []byte, v float64) []byte {
			return o.AppendUint16(to, uint16(int16(v)))
		}},
	{"i4", "i32", []float64{-2147483648, 2147483647, -1}, func(u uint64) float64 { return float64(int32(u)) },
		func(o binary.AppendByteOrder, to []byte, v float64) []byte {
			return o.AppendUint32(to, uint32(int32(v)))
		}},
	{"i8", "i64", []float64{math.MinInt64, 1 << 53, -1 << 53, 3 << 61}, func(u uint64) float64 { return float64(int64(u) >> 11) },
		func(o binary.AppendByteOrder, to []byte, v float64) []byte {
			return o.AppendUint64(to, uint64(int64(v)))
		}},
	{"f4", "f32", []float64{math.MaxFloat32, math.SmallestNonzeroFloat32, math.Inf(-1), math.NaN()}, func(u uint64) float64 { return float64(math.Float32frombits(uint32(u))) },
		func(o binary.AppendByteOrder, to []byte, v float64) []byte {
			return o.AppendUint32(to, math.Float32bits(float32(v)))
		}},
	{"f8", "f64", []float64{math.MaxFloat64, math.SmallestNonzeroFloat64, math.Inf(1), math.NaN()}, math.Float64frombits,
		func(o binary.AppendByteOrder, to []byte, v float64) []byte {
			return o.AppendUint64(to, math.Float64bits(v))
		}},
}

// Every type comes back exactly, whatever the byte order, the order of axes, the
// version and the size of the parts that are asked for.
func TestRoundTrip(t *testing.T) {
	r := rand.New(rand.NewPCG(31, 1))
	for _, kind := range kinds {
		for i := range 48 {
			shape := []int{1 + r.IntN(9), 1 + r.IntN(9), 1 + r.IntN(9)}
			want := make([]float64, shape[0]*shape[1]*shape[2])
			for j := range want {
				want[j] = kind.draw(r.Uint64())
			}
			for j, v := range kind.extremes {
				want[(7*j)%len(want)] = v
			}
			var order binary.AppendByteOrder = binary.LittleEndian
			mark, fortran, version := "<", i/2%2 == 0, byte(1+i/4%3)
			if i%2 == 1 {
				order, mark = binary.BigEndian, ">"
			}
			var raw []byte
			for _, v := range want {
				raw = kind.put(order, raw, v)
			}
			text := fmt.Sprintf("(%d, %d, %d)", shape[0], shape[1], shape[2])
			path := filepath.Join(t.TempDir(), "in.npy")
			require.NoError(t, os.WriteFile(path, encode(version, mark+kind.descr, fortran, text, raw), 0o644))
			h, got, err := drain(path, 1+r.IntN(300))
			what := fmt.Sprintf("%s%s %s, version %d", mark, kind.descr, text, version)
			require.NoError(t, err, what)
			require.Equal(t, shape, h.Shape, what)
			require.Equal(t, kind.name, h.DType, what)
			require.Equal(t, fortran, h.Fortran, what)
			require.Equal(t, i%2 == 1 && kind.descr != "u1", h.BigEndian, what)
			require.Len(t, got, len(want), what)
			for j, v := range want {
				if v != got[j] && !(math.IsNaN(v) && math.IsNaN(got[j])) {
					require.Equal(t, v, got[j], "%s: value %d", what, j)
				}
			}
		}
	}
}

// Every beginning of a sound file is a broken file.
func TestCut(t *testing.T) {
	for version := byte(1); version <= 3; version++ {
		whole := encode(version, "<i2", false, "(2, 2)", make([]byte, 8))
		for n := range whole {
			_, err := newReader("in.npy", bytes.NewReader(whole[:n]), int64(n))
			require.ErrorAs(t, err, new(*source.InputError), "%d bytes of version %d", n, version)
		}
		_, err := newReader("in.npy", bytes.NewReader(whole), int64(len(whole)))
		require.NoError(t, err)
	}
}

// A file costs no memory by what it claims: less than 1 MiB for each of these, and
// no more than the buffer for an array of 32 MiB.
func TestMemory(t *testing.T) {
	long := append([]byte("\x93NUMPY\x02\x00\x00\x00\x20\x00"), make([]byte, 2<<20)...) // a header of 2 MiB, all there
	for name, content := range map[string][]byte{
		"header of 4 GiB":    append([]byte("\x93NUMPY\x03\x00\xff\xff\xff\xff"), "{'descr': '<f8'"...),
		"header of 2 MiB":    long,
		"8 TB of values":     encode(1, "<f8", false, "(1000000, 1000000)", make([]byte, 48)),
		"product beyond":     encode(1, "|u1", false, "(4294967296, 4294967296)", nil),
		"product wraps to 0": encode(1, "<f8", false, "(2305843009213693952,)", nil),
		"length beyond":      encode(1, "<f8", false, "(9223372036854775808,)", nil),
		"axes without end":   encode(1, "|u1", false, "("+strings.Repeat("1,", 30000)+")", []byte{0}),
		"a type of 60000":    encode(1, strings.Repeat("<", 60000), false, "(1,)", nil),
		"cut short":          encode(1, "|u1", false, "(33554433,)", make([]byte, 32<<20)),
		"whole":              encode(1, "|u1", false, "(33554432,)", make([]byte, 32<<20)),
	} {
		path := filepath.Join(t.TempDir(), "in.npy")
		require.NoError(t, os.WriteFile(path, content, 0o644))
		buf := make([]float64, 1<<10)
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		r, err := Open(path)
		if name == "whole" {
			for err == nil {
				_, err = r.Read(buf)
			}
			require.ErrorIs(t, err, io.EOF)
			require.NoError(t, r.Close())
		}
		runtime.ReadMemStats(&after)
		if name != "whole" {
			require.ErrorAs(t, err, new(*source.InputError), name)
			require.Less(t, len(err.Error()), len(path)+400, name)
		}
		require.Less(t, after.TotalAlloc-before.TotalAlloc, uint64(1<<20), name)
	}
}
