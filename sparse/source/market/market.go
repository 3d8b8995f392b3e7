// Package market streams sparse matrices over Z/2 in Matrix Market form (.mtx,
// .mtx.gz): coordinate, general, with pattern, integer or real (whole) entries,
// taken mod 2. Indices are 1-based in the file and 0-based here. A declared size is
// believed only as far as the bytes of the file can hold it, and an entry is handed
// out as it arrives: no memory is taken by an announcement. Repeated entries come out
// as often as they stand there, in the file's order.
//
// Cost: O(bytes); two buffers of 1 MiB, no allocation an entry. Not safe for
// concurrent use.
package market

import (
	"bufio"
	"bytes"
	"compress/flate"
	"compress/gzip"
	"errors"
	"io"
	"math"
	"os"
	"strings"

	"pairloom/sparse/source"
)

const (
	bufferBytes  = 1 << 20
	slack        = 1 << 20 // rows or columns beyond 8 a byte of the file
	inflateMost  = 1032    // deflate cannot expand more: RFC 1951, longest match for the shortest code
	sizePerByte  = 8
	indexMost    = math.MaxUint32 - 1
	lineMost     = 1 << 16
	bytesEntry   = 4 // the shortest line of an entry: "1 1\n"
	sniffedBytes = 2
	digitsMost   = 19      // of a row or column: fits 64 bits
	exponentMost = 1 << 20 // beyond it every digit is on one side of the point
)

// Reader reads one matrix, entry by entry.
type Reader struct {
	path     string
	file     *os.File
	counted  *counter // bytes of the file
	inflated *counter // bytes of text; the same where nothing is compressed
	in       *bufio.Reader
	line     int
	pattern  bool
	real     bool
	rows     uint32
	cols     uint32
	declared uint64 // entries announced
	seen     uint64
	size     uint64
}

// counter counts the bytes that pass.
type counter struct {
	r io.Reader
	n uint64
}

func (c *counter) Read(b []byte) (int, error) {
	n, err := c.r.Read(b)
	c.n += uint64(n)
	return n, err
}

// Open reads the header and the size line. Errors: *source.InputError, or what the
// operating system says.
func Open(path string) (*Reader, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	r := &Reader{path: path, file: f}
	if err := r.start(); err != nil {
		f.Close()
		return nil, err
	}
	return r, nil
}

func (r *Reader) start() error {
	info, err := r.file.Stat()
	if err != nil {
		return err
	}
	if info.IsDir() {
		return source.Broken(r.path, 0, "is a folder; a file was expected")
	}
	r.size = uint64(info.Size())
	r.counted = &counter{r: r.file}
	r.inflated = r.counted
	r.in = bufio.NewReaderSize(r.counted, bufferBytes)
	most := r.size
	if magic, _ := r.in.Peek(sniffedBytes); len(magic) == 2 && magic[0] == 0x1f && magic[1] == 0x8b {
		z, err := gzip.NewReader(r.in)
		if err != nil {
			return source.Broken(r.path, 0, "not a gzip file: %v", err)
		}
		r.inflated = &counter{r: z}
		r.in = bufio.NewReaderSize(r.inflated, bufferBytes)
		most *= inflateMost
	}
	if err := r.banner(); err != nil {
		return err
	}
	return r.sizeLine(most)
}

// text returns the next line without its end and without blanks around it.
func (r *Reader) text() ([]byte, error) {
	line, err := r.in.ReadSlice('\n')
	if errors.Is(err, bufio.ErrBufferFull) || len(line) > lineMost {
		return nil, source.Broken(r.path, r.line+1, "longer than %d bytes; this is no Matrix Market file", lineMost)
	}
	if err != nil && (err != io.EOF || len(line) == 0) {
		return nil, r.ended(err)
	}
	r.line++
	return bytes.TrimSpace(line), nil
}

// ended tells the end of the file from a broken stream.
func (r *Reader) ended(err error) error {
	if err == io.EOF {
		return io.EOF
	}
	if errors.Is(err, io.ErrUnexpectedEOF) || errors.Is(err, gzip.ErrChecksum) || errors.Is(err, gzip.ErrHeader) || errors.As(err, new(flate.CorruptInputError)) {
		return source.Broken(r.path, r.line+1, "the compressed file is damaged or cut short: %v", err)
	}
	return err
}

func (r *Reader) banner() error {
	line, err := r.text()
	if err == io.EOF {
		return source.Broken(r.path, 0, "empty; a Matrix Market file was expected")
	}
	if err != nil {
		return err
	}
	f := strings.Fields(strings.ToLower(string(line)))
	if len(f) != 5 || f[0] != "%%matrixmarket" || f[1] != "matrix" {
		return source.Broken(r.path, 1, "a Matrix Market file begins with %%%%MatrixMarket matrix coordinate …")
	}
	r.pattern, r.real = f[3] == "pattern", f[3] == "real"
	switch {
	case f[2] != "coordinate":
		return source.Broken(r.path, 1, "format %q; only coordinate (sparse) matrices are boundary matrices", clip(f[2]))
	case !r.pattern && !r.real && f[3] != "integer":
		return source.Broken(r.path, 1, "entries are %q; pattern, integer or real (whole numbers) was expected", clip(f[3]))
	case f[4] != "general":
		return source.Broken(r.path, 1, "symmetry %q; a boundary matrix is general", clip(f[4]))
	}
	return nil
}

func (r *Reader) sizeLine(most uint64) error {
	for {
		line, err := r.text()
		if err == io.EOF {
			return source.Broken(r.path, r.line, "the size line (rows columns entries) is missing")
		}
		if err != nil {
			return err
		}
		if len(line) == 0 || line[0] == '%' {
			continue
		}
		f := bytes.Fields(line)
		var n [3]uint64
		ok := len(f) == 3
		for i := 0; ok && i < 3; i++ {
			n[i], ok = whole(f[i])
		}
		switch {
		case !ok:
			return source.Broken(r.path, r.line, "three whole numbers were expected: rows, columns, entries")
		case n[0] > sizePerByte*most+slack || n[1] > sizePerByte*most+slack:
			return source.Broken(r.path, r.line, "%d rows and %d columns; more than a file of %d bytes can mean (8 a byte and 2^20)", n[0], n[1], r.size)
		case n[0] > indexMost || n[1] > indexMost:
			return source.Broken(r.path, r.line, "%d rows and %d columns; at most 2^32-2 fit", n[0], n[1])
		case n[2] > most/bytesEntry+1:
			return source.Broken(r.path, r.line, "%d entries are announced; a file of %d bytes cannot hold them", n[2], r.size)
		}
		r.rows, r.cols, r.declared = uint32(n[0]), uint32(n[1]), n[2]
		return nil
	}
}

// whole reads a whole number of up to digitsMost digits.
func whole(b []byte) (uint64, bool) {
	if len(b) == 0 || len(b) > digitsMost {
		return 0, false
	}
	v := uint64(0)
	for _, c := range b {
		if c-'0' > 9 {
			return 0, false
		}
		v = v*10 + uint64(c-'0')
	}
	return v, true
}

// Shape returns rows, columns and the announced number of entries.
func (r *Reader) Shape() (rows, cols uint32, entries uint64) { return r.rows, r.cols, r.declared }

// Next returns the next entry and whether it is odd; io.EOF after the last one.
func (r *Reader) Next() (row, col uint32, odd bool, err error) {
	for {
		line, err := r.text()
		if err == io.EOF {
			return 0, 0, false, r.finish()
		}
		if err != nil {
			return 0, 0, false, err
		}
		if len(line) == 0 || line[0] == '%' {
			continue
		}
		return r.entry(line)
	}
}

// finish checks at the end of the file what was announced at its beginning; the text
// of a compressed file has its true length only now.
func (r *Reader) finish() error {
	switch most := sizePerByte*r.inflated.n + slack; {
	case r.seen < r.declared:
		return source.Broken(r.path, r.line, "the file ends after %d of %d entries", r.seen, r.declared)
	case uint64(r.rows) > most || uint64(r.cols) > most:
		return source.Broken(r.path, 0, "%d rows and %d columns; more than %d bytes of text can mean (8 a byte and 2^20)", r.rows, r.cols, r.inflated.n)
	}
	return io.EOF
}

func (r *Reader) entry(line []byte) (row, col uint32, odd bool, err error) {
	if r.seen++; r.seen > r.declared {
		return 0, 0, false, source.Broken(r.path, r.line, "more entries than the %d announced", r.declared)
	}
	i, a := token(line, 0)
	j, b := token(line, a)
	v, c := token(line, b)
	x, ok1 := whole(i)
	y, ok2 := whole(j)
	odd = true
	ok3 := r.pattern == (len(v) == 0) && len(bytes.TrimSpace(line[c:])) == 0
	if ok3 && !r.pattern {
		odd, ok3 = r.parity(v)
	}
	switch {
	case !ok1 || !ok2 || !ok3:
		return 0, 0, false, source.Broken(r.path, r.line, "%q; %s was expected", clip(line), r.form())
	case x == 0 || y == 0:
		return 0, 0, false, source.Broken(r.path, r.line, "entry (%d, %d); rows and columns are counted from 1", x, y)
	case x > uint64(r.rows) || y > uint64(r.cols):
		return 0, 0, false, source.Broken(r.path, r.line, "entry (%d, %d) is outside the %d × %d matrix", x, y, r.rows, r.cols)
	}
	return uint32(x - 1), uint32(y - 1), odd, nil
}

// clip keeps a message to one line.
func clip[T string | []byte](b T) T { return b[:min(len(b), 40)] }

func (r *Reader) form() string {
	if r.pattern {
		return "row column"
	}
	return "row column and a whole number"
}

// token returns the next run of bytes that are not blank, from position at.
func token(line []byte, at int) (t []byte, end int) {
	for at < len(line) && (line[at] == ' ' || line[at] == '\t') {
		at++
	}
	from := at
	for at < len(line) && line[at] != ' ' && line[at] != '\t' {
		at++
	}
	return line[from:at], at
}

// parity reads a whole number mod 2, of any length.
func (r *Reader) parity(v []byte) (odd, ok bool) {
	if v[0] == '-' || v[0] == '+' {
		v = v[1:]
	}
	if n := digits(v); n == len(v) {
		return n > 0 && v[n-1]&1 == 1, n > 0
	}
	if !r.real {
		return false, false
	}
	return decimal(v)
}

// digits counts the digits that b begins with.
func digits(b []byte) int {
	for i, c := range b {
		if c-'0' > 9 {
			return i
		}
	}
	return len(b)
}

// decimal reads digits[.digits][e±digits] mod 2, exactly: the number is whole if every
// digit right of the point, moved by the exponent, is 0.
func decimal(v []byte) (odd, ok bool) {
	n := digits(v)
	left, right, rest := v[:n], v[n:n], v[n:]
	if len(rest) > 0 && rest[0] == '.' {
		n = digits(rest[1:])
		right, rest = rest[1:1+n], rest[1+n:]
	}
	exponent, ok := power(rest)
	if !ok || len(left)+len(right) == 0 {
		return false, false
	}
	point := len(left) + exponent // digits left of the moved point
	for i, part := range [2][]byte{left, right} {
		for j, c := range part {
			at := i*len(left) + j
			if at >= point && c != '0' {
				return false, false
			}
			odd = odd || at == point-1 && c&1 == 1
		}
	}
	return odd, true
}

// power reads the exponent of a decimal, 0 where there is none.
func power(b []byte) (exponent int, ok bool) {
	if len(b) == 0 {
		return 0, true
	}
	if b[0] != 'e' && b[0] != 'E' {
		return 0, false
	}
	b, sign := b[1:], 1
	if len(b) > 0 && (b[0] == '-' || b[0] == '+') {
		if b[0] == '-' {
			sign = -1
		}
		b = b[1:]
	}
	if len(b) == 0 || digits(b) != len(b) {
		return 0, false
	}
	for _, c := range b {
		exponent = min(10*exponent+int(c-'0'), exponentMost)
	}
	return sign * exponent, true
}

// Line returns the 1-based number of the line read last.
func (r *Reader) Line() int { return r.line }

// BytesRead returns how many bytes of the file were read, of Size.
func (r *Reader) BytesRead() uint64 { return r.counted.n }

// Size returns the size of the file in bytes.
func (r *Reader) Size() uint64 { return r.size }

// Close closes the file.
func (r *Reader) Close() error { return r.file.Close() }
