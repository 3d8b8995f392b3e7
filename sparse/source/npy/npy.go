// Package npy streams NumPy .npy arrays as float64 values.
//
// Format (the array file format of the NumPy project, versions 1, 2 and 3): the
// magic bytes "\x93NUMPY", two version bytes, the header's length (uint16, from
// version 2 on uint32, little endian), the header, the values without gaps. The
// header is a Python dict literal with the keys descr, fortran_order and shape.
//
// Accepted types: u1 u2 i2 i4 f4 f8 and i8 where every value is a whole number
// that float64 holds exactly, in either byte order. Everything else is refused by
// name. The file's length must be what shape and type say, to the byte, before a
// single value is read; nothing is allocated by a length that a file claims.
//
// Values arrive in FILE order: C order, or Fortran order (first axis fastest) if
// Header.Fortran is set. −0 becomes 0; NaN and infinities pass, the caller judges.
//
// Cost: one sequential pass, a buffer of 256 KiB whatever the size. A Reader is
// for one goroutine.
package npy

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"math/bits"
	"os"

	"pairloom/sparse/source"
)

const bufferBytes = 256 << 10 // a multiple of every item size

// Reader yields the values of one array, in file order.
type Reader struct {
	path   string
	in     io.Reader
	closer io.Closer
	head   Header
	count  int // values in the array
	next   int // values handed out
	buf    []byte
	full   []byte // the part of buf that is read but not yet handed out
}

// Open checks the header of an array file against the file's length and leaves
// the reader at the first value. Errors: *source.InputError for what the file
// holds; what the operating system says (fs.ErrNotExist, …) for the file itself.
func Open(path string) (*Reader, error) {
	info, err := os.Stat(path) // before opening: a pipe would block
	if err != nil {
		return nil, err
	}
	if !info.Mode().IsRegular() {
		return nil, source.Broken(path, 0, "not a regular file; a .npy file is expected")
	}
	file, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	if info, err = file.Stat(); err != nil {
		file.Close()
		return nil, err
	}
	r, err := newReader(path, file, info.Size())
	if err != nil {
		file.Close()
		return nil, err
	}
	r.closer = file
	return r, nil
}

// newReader reads the header from in, which holds size bytes.
func newReader(path string, in io.Reader, size int64) (*Reader, error) {
	head, offset, err := readHeader(path, in, size)
	if err != nil {
		return nil, err
	}
	count, err := head.checkSize(path, size-offset)
	if err != nil {
		return nil, err
	}
	r := &Reader{path: path, in: in, head: head, count: count}
	r.buf = make([]byte, min(bufferBytes, int64(count)*int64(head.item)))
	return r, nil
}

// checkSize compares shape × item size with the bytes that follow the header.
func (h *Header) checkSize(path string, found int64) (int, error) {
	want := uint64(h.item)
	for axis, n := range h.Shape {
		if n == 0 {
			return 0, source.Broken(path, 0, "axis %d of the array has length 0; every axis needs at least one value", axis)
		}
		over, product := bits.Mul64(want, uint64(n))
		if over != 0 || product > math.MaxInt64 {
			return 0, source.Broken(path, 0, "shape %s is more than any file can hold, %d bytes found after the header", shapeText(h.Shape), found)
		}
		want = product
	}
	if want != uint64(found) {
		return 0, source.Broken(path, 0, "%d bytes expected after the header (shape %s of %s), %d found; the file was cut short or damaged, write it again",
			want, shapeText(h.Shape), h.DType, found)
	}
	return int(want) / h.item, nil
}

// Header is what the file says about the array. Its Shape must not be changed.
func (r *Reader) Header() Header { return r.head }

// Len is the number of values in the array.
func (r *Reader) Len() int { return r.count }

// Close closes the file. It may be called more than once.
func (r *Reader) Close() error {
	if r.closer == nil {
		return nil
	}
	c := r.closer
	r.closer = nil
	return c.Close()
}

// Read fills dst with the next values and returns how many; fewer than len(dst)
// only at the end of the array, then (0, io.EOF). dst belongs to the caller.
// Errors: *source.InputError for a value that is not exact in float64 or a file
// that ends early; otherwise what the operating system says.
func (r *Reader) Read(dst []float64) (int, error) {
	if r.next == r.count && len(dst) > 0 {
		return 0, io.EOF
	}
	done := 0
	for done < len(dst) && r.next < r.count {
		if len(r.full) == 0 {
			if err := r.fill(); err != nil {
				return done, err
			}
		}
		n := min(len(dst)-done, len(r.full)/r.head.item)
		part := dst[done : done+n]
		if bad := r.head.decode(part, r.full); bad >= 0 {
			return done + bad, source.Broken(r.path, 0, "value %d (in file order) is a 64-bit integer that no float64 holds exactly; convert the array to f8 first", r.next+bad)
		}
		r.full = r.full[n*r.head.item:]
		r.next += n
		done += n
	}
	return done, nil
}

// fill reads the next buffer of whole values.
func (r *Reader) fill() error {
	left := int64(r.count-r.next) * int64(r.head.item)
	want := r.buf[:min(int64(len(r.buf)), left)]
	n, err := io.ReadFull(r.in, want)
	if errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
		return source.Broken(r.path, 0, "the file ends %d bytes early; did it change while it was read?", left-int64(n))
	}
	if err != nil {
		return fmt.Errorf("%s: %w", r.path, err)
	}
	r.full = want
	return nil
}

// decode turns the first len(dst) items of raw into float64, −0 into 0. It returns
// the index of the first value that is not exact, or −1.
func (h *Header) decode(dst []float64, raw []byte) int {
	big := h.BigEndian
	raw = raw[:len(dst)*h.item]
	switch h.DType {
	case "u8":
		for i, b := range raw {
			dst[i] = float64(b)
		}
	case "u16":
		for i := range dst {
			dst[i] = float64(load16(raw[2*i:], big))
		}
	case "i16":
		for i := range dst {
			dst[i] = float64(int16(load16(raw[2*i:], big)))
		}
	case "i32":
		for i := range dst {
			dst[i] = float64(int32(load32(raw[4*i:], big)))
		}
	case "f32":
		for i := range dst {
			dst[i] = source.Clean(float64(math.Float32frombits(load32(raw[4*i:], big))))
		}
	case "f64":
		for i := range dst {
			dst[i] = source.Clean(math.Float64frombits(load64(raw[8*i:], big)))
		}
	case "i64":
		for i := range dst {
			v := int64(load64(raw[8*i:], big))
			if !exact(v) {
				return i
			}
			dst[i] = float64(v)
		}
	}
	return -1
}

// load16, load32 and load64 read a number of either byte order without an indirect call.
func load16(raw []byte, big bool) uint16 {
	u := binary.LittleEndian.Uint16(raw)
	if big {
		u = bits.ReverseBytes16(u)
	}
	return u
}

func load32(raw []byte, big bool) uint32 {
	u := binary.LittleEndian.Uint32(raw)
	if big {
		u = bits.ReverseBytes32(u)
	}
	return u
}

func load64(raw []byte, big bool) uint64 {
	u := binary.LittleEndian.Uint64(raw)
	if big {
		u = bits.ReverseBytes64(u)
	}
	return u
}

// exact says whether a float64 holds v: at most 53 bits between its first and last one.
func exact(v int64) bool {
	u := uint64(v)
	if v < 0 {
		u = -u
	}
	return u == 0 || bits.Len64(u)-bits.TrailingZeros64(u) <= 53
}
