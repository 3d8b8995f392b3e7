// Package table streams delimited text: comma, semicolon, tab or blanks, found
// from the first data line; lines that start with # are comments, empty lines are
// skipped; one header line is recognised by having no number; CRLF and a byte order
// mark are accepted; a field may stand in double quotes.
//
// Memory: one buffer of 1 MiB, or the longest line. No allocation per line without
// quotes. A Reader is not safe for concurrent use; the readers of OpenParts may be
// used side by side.
package table

import (
	"bytes"
	"io"
	"os"

	"pairloom/sparse/source"
)

const (
	bufferBytes = 1 << 20
	lineMost    = 16 << 20 // longer lines are refused
)

// Reader reads one file, line by line.
type Reader struct {
	path      string
	file      *os.File
	in        io.Reader // the file, or a part of it
	start     int64     // where the part begins
	size      uint64    // of the file or the part
	buf       []byte
	from, to  int // unread bytes of buf
	ended     bool
	begun     bool // a data line was seen
	line      int
	delimiter byte // 0: not known yet; ' ' stands for blanks and tabs
	fields    [][]byte
	header    []string
	err       error
	read      uint64
}

// Open opens a file of text. Errors: what the operating system says, or
// *source.InputError for what is not a regular file.
func Open(path string) (*Reader, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	info, err := f.Stat()
	if err == nil && info.IsDir() {
		err = source.Broken(path, 0, "is a folder; a file was expected")
	}
	if err != nil {
		f.Close()
		return nil, err
	}
	return &Reader{path: path, file: f, in: f, size: uint64(info.Size()), buf: make([]byte, bufferBytes)}, nil
}

// Next reads the next data line; false at the end or on an error (see Err).
func (r *Reader) Next() bool {
	for r.err == nil {
		line, ok := r.nextLine()
		if !ok {
			return false
		}
		line = bytes.TrimSpace(line)
		if len(line) == 0 || line[0] == '#' {
			continue
		}
		if r.delimiter == 0 {
			first := r.header == nil && !r.begun
			r.delimiter = find(line)
			if r.split(line) && first && r.isHeader() {
				r.delimiter = 0 // the first data line decides
				continue
			}
			r.begun = true
			if len(r.fields) == 1 {
				r.delimiter = 0 // a line of one field leaves it open
			}
			return r.err == nil
		}
		return r.split(line)
	}
	return false
}

// isHeader takes the fields as a header if none is a number.
func (r *Reader) isHeader() bool {
	for _, f := range r.fields {
		if _, ok := ParseFloat(f); ok {
			return false
		}
	}
	for _, f := range r.fields {
		r.header = append(r.header, string(f))
	}
	return true
}

// find finds the delimiter of a line. Tabs among blanks delimit as blanks do if that
// makes numbers of all fields.
func find(line []byte) byte {
	for _, d := range []byte{',', ';'} {
		if bytes.IndexByte(line, d) >= 0 {
			return d
		}
	}
	if bytes.IndexByte(line, '\t') < 0 {
		return ' '
	}
	for _, f := range bytes.Fields(line) {
		if _, ok := ParseFloat(f); !ok {
			return '\t'
		}
	}
	return ' '
}

// nextLine returns the next line without its end.
func (r *Reader) nextLine() ([]byte, bool) {
	for scanned := r.from; ; {
		if i := bytes.IndexByte(r.buf[scanned:r.to], '\n'); i >= 0 {
			line := r.buf[r.from : scanned+i]
			r.from = scanned + i + 1
			r.line++
			return r.checked(line)
		}
		if r.ended {
			line := r.buf[r.from:r.to]
			r.from = r.to
			if len(line) == 0 {
				return nil, false
			}
			r.line++
			return r.checked(line)
		}
		scanned = r.fill()
		if r.err != nil {
			return nil, false
		}
	}
}

func (r *Reader) checked(line []byte) ([]byte, bool) {
	if r.start == 0 && r.line == 1 {
		line = bytes.TrimPrefix(line, []byte("\xef\xbb\xbf"))
	}
	if bytes.IndexByte(line, 0) >= 0 {
		r.err = source.Broken(r.path, r.Line(), "a zero byte; this is no text file")
		return nil, false
	}
	return line, true
}

// fill reads more into the buffer, which it shifts or grows; it returns where the
// new bytes begin.
func (r *Reader) fill() int {
	n := copy(r.buf, r.buf[r.from:r.to])
	r.from, r.to = 0, n
	if n == len(r.buf) {
		if n >= lineMost {
			r.err = source.Broken(r.path, r.Line()+1, "longer than %d MiB; this is no table", lineMost>>20)
			return n
		}
		r.buf = append(r.buf, make([]byte, len(r.buf))...)
	}
	got, err := r.in.Read(r.buf[n:])
	r.to += got
	r.read += uint64(got)
	switch {
	case err == io.EOF:
		r.ended = true
	case err != nil:
		r.err = err
	}
	return n
}

// split cuts a line into fields.
func (r *Reader) split(line []byte) bool {
	r.fields = r.fields[:0]
	if bytes.IndexByte(line, '"') >= 0 {
		return r.splitQuoted(line)
	}
	if r.delimiter == ' ' {
		for len(line) > 0 {
			i := 0
			for i < len(line) && line[i] != ' ' && line[i] != '\t' {
				i++
			}
			r.fields = append(r.fields, line[:i])
			for i < len(line) && (line[i] == ' ' || line[i] == '\t') {
				i++
			}
			line = line[i:]
		}
		return true
	}
	for {
		i := bytes.IndexByte(line, r.delimiter)
		if i < 0 {
			r.fields = append(r.fields, trim(line))
			return true
		}
		r.fields = append(r.fields, trim(line[:i]))
		line = line[i+1:]
	}
}

func trim(b []byte) []byte {
	for len(b) > 0 && (b[0] == ' ' || b[0] == '\t') {
		b = b[1:]
	}
	for len(b) > 0 && (b[len(b)-1] == ' ' || b[len(b)-1] == '\t') {
		b = b[:len(b)-1]
	}
	return b
}

// splitQuoted is split for lines with quotes; a quote inside a field is doubled.
func (r *Reader) splitQuoted(line []byte) bool {
	var field []byte
	quoted, any := false, false
	push := func() {
		r.fields = append(r.fields, append([]byte(nil), trim(field)...))
		field, any = field[:0], false
	}
	for i := 0; i < len(line); i++ {
		c := line[i]
		switch {
		case c == '"' && quoted && i+1 < len(line) && line[i+1] == '"':
			field = append(field, c)
			i++
		case c == '"':
			quoted, any = !quoted, true
		case !quoted && (c == r.delimiter || r.delimiter == ' ' && c == '\t'):
			if r.delimiter != ' ' || any || len(field) > 0 {
				push()
			}
		default:
			field = append(field, c)
		}
	}
	if quoted {
		r.err = source.Broken(r.path, r.Line(), "a quote that is not closed")
		return false
	}
	push()
	return true
}

// Fields returns the fields of the line; valid until the next call of Next.
func (r *Reader) Fields() [][]byte { return r.fields }

// Line returns the 1-based number of the line in the file. In a part of a file the
// lines before it are counted anew at every call: meant for error messages.
func (r *Reader) Line() int {
	if r.start == 0 {
		return r.line
	}
	return r.line + newlines(io.NewSectionReader(r.file, 0, r.start))
}

// Err returns what ended the reading, nil at the end of the file.
func (r *Reader) Err() error { return r.err }

// Header returns the header's fields, nil if there is none.
func (r *Reader) Header() []string { return r.header }

// BytesRead returns how many bytes were read so far, of Size.
func (r *Reader) BytesRead() uint64 { return r.read }

// Size returns the size of the file, or of the part, in bytes.
func (r *Reader) Size() uint64 { return r.size }

// Path returns the file's path.
func (r *Reader) Path() string { return r.path }

// Close closes the file.
func (r *Reader) Close() error { return r.file.Close() }
