package npy

import (
	"encoding/binary"
	"io"
	"math"
	"strconv"
	"strings"

	"pairloom/sparse/source"
)

// Header is what an array file says about its values.
type Header struct {
	Shape     []int  // extent of each axis, 0..32 axes, every one > 0
	Fortran   bool   // values are stored first axis fastest
	DType     string // "u8", "u16", "i16", "i32", "i64", "f32" or "f64": kind and bits
	BigEndian bool   // byte order of values of more than one byte

	item int // bytes of one value
}

const (
	magic          = "\x93NUMPY"
	axesMax        = 32      // as many as the format's own writers make
	headerBytesMax = 1 << 20 // a header says three things; the format's writers stay below 64 KiB
	accepted       = "accepted are u1 u2 i2 i4 f4 f8, and i8 with values that float64 holds exactly"
)

// types maps the descr without its byte-order mark to the name and size here.
var types = map[string]struct {
	name string
	item int
}{
	"u1": {"u8", 1}, "u2": {"u16", 2}, "i2": {"i16", 2}, "i4": {"i32", 4}, "i8": {"i64", 8}, "f4": {"f32", 4}, "f8": {"f64", 8},
}

// readHeader reads everything before the first value and returns the offset of that value.
func readHeader(path string, in io.Reader, size int64) (Header, int64, error) {
	broken := func(at int64, format string, args ...any) (Header, int64, error) {
		e := source.Broken(path, 0, format, args...)
		e.Where = "byte " + strconv.FormatInt(at, 10)
		return Header{}, 0, e
	}
	var lead [12]byte
	if n, _ := io.ReadFull(in, lead[:8]); n < 8 || string(lead[:6]) != magic {
		return broken(0, "not a NumPy .npy file: the first bytes are not \\x93NUMPY and a version")
	}
	version, width := lead[6], int64(4)
	if version < 1 || version > 3 || lead[7] != 0 {
		return broken(6, "format version %d.%d; versions 1.0, 2.0 and 3.0 are read", lead[6], lead[7])
	}
	if version == 1 {
		width = 2
	}
	if _, err := io.ReadFull(in, lead[8:8+width]); err != nil {
		return broken(8, "the file ends before the length of its header")
	}
	length := int64(binary.LittleEndian.Uint32(lead[8:]))
	offset := 8 + width
	if length > size-offset {
		return broken(8, "a header of %d bytes is announced, %d bytes follow; the file was cut short", length, size-offset)
	}
	if length > headerBytesMax {
		return broken(8, "a header of %d bytes is announced, at most %d are sensible", length, headerBytesMax)
	}
	text := make([]byte, length)
	if _, err := io.ReadFull(in, text); err != nil {
		return broken(offset, "the header cannot be read: %v", err)
	}
	p := parser{text: string(text)}
	head, why := p.header()
	if why != "" {
		return broken(offset+int64(p.at), "%s", why)
	}
	return head, offset + length, nil
}

// parser reads the header's dict literal; at is the byte it stands on. Its methods
// return what is wrong as a sentence, or "".
type parser struct {
	text string
	at   int
}

const grammar = "the header must read {'descr': '<f4', 'fortran_order': False, 'shape': (2, 3), }"

// header parses the whole dict; every key must be there exactly once.
func (p *parser) header() (h Header, why string) {
	if !p.take('{') {
		return h, grammar
	}
	seen := map[string]bool{}
	for !p.take('}') {
		if len(seen) > 0 && !p.take(',') {
			return h, grammar
		}
		if len(seen) > 0 && p.take('}') { // a comma may end the list
			break
		}
		key, ok := p.quoted()
		if !ok || !p.take(':') {
			return h, grammar
		}
		if seen[key] {
			return h, "the header says '" + key + "' twice"
		}
		seen[key] = true
		if why = p.value(key, &h); why != "" {
			return h, why
		}
	}
	if p.skip(); p.at != len(p.text) {
		return h, "bytes after the header's closing brace"
	}
	for _, key := range []string{"descr", "fortran_order", "shape"} {
		if !seen[key] {
			return h, "the header does not say '" + key + "'; " + grammar
		}
	}
	return h, ""
}

func (p *parser) value(key string, h *Header) string {
	switch key {
	case "descr":
		return p.descr(h)
	case "fortran_order":
		return p.boolean(&h.Fortran)
	case "shape":
		return p.shape(h)
	}
	return "the header has the key " + strconv.QuoteToASCII(key) + "; only descr, fortran_order and shape are known"
}

// descr reads the type: a byte-order mark and a kind with its bytes.
func (p *parser) descr(h *Header) string {
	text, ok := p.quoted()
	if !ok {
		if p.skip(); p.at < len(p.text) && p.text[p.at] == '[' {
			return "values with several fields are not read; " + accepted
		}
		return grammar
	}
	mark, rest := "", text
	if strings.IndexAny(text, "<>|") == 0 {
		mark, rest = text[:1], text[1:]
	}
	t, ok := types[rest]
	if !ok || mark == "" || (mark == "|" && t.item > 1) {
		return "values of type " + strconv.QuoteToASCII(text) + " are not read; " + accepted
	}
	h.DType, h.item, h.BigEndian = t.name, t.item, mark == ">" && t.item > 1
	return ""
}

func (p *parser) boolean(to *bool) string {
	p.skip()
	for _, word := range []string{"True", "False"} {
		if strings.HasPrefix(p.text[p.at:], word) {
			p.at += len(word)
			*to = word == "True"
			return ""
		}
	}
	return "fortran_order must be True or False"
}

// shape reads a tuple of whole numbers; one axis is written (n,).
func (p *parser) shape(h *Header) string {
	const want = "shape must be a tuple of whole numbers, such as (2, 3) or (5,)"
	if !p.take('(') {
		return want
	}
	h.Shape = []int{}
	comma := true
	for !p.take(')') {
		if !comma {
			return want
		}
		if len(h.Shape) == axesMax {
			return "the array has more than " + strconv.Itoa(axesMax) + " axes"
		}
		n, why := p.whole()
		if why != "" {
			return why
		}
		h.Shape = append(h.Shape, n)
		comma = p.take(',')
	}
	if len(h.Shape) == 1 && !comma {
		return want
	}
	if len(h.Shape) == 0 {
		h.Shape = nil
	}
	return ""
}

// whole reads a number ≥ 0 without overflow; old writers end it with an L.
func (p *parser) whole() (int, string) {
	p.skip()
	start, n := p.at, 0
	if p.at < len(p.text) && p.text[p.at] == '-' {
		return 0, "shape has a negative length"
	}
	for ; p.at < len(p.text) && p.text[p.at]-'0' < 10; p.at++ {
		digit := int(p.text[p.at] - '0')
		if n > (math.MaxInt-digit)/10 {
			return 0, "shape has a length beyond 64 bits"
		}
		n = 10*n + digit
	}
	if p.at == start {
		return 0, "shape must be a tuple of whole numbers, such as (2, 3) or (5,)"
	}
	if p.at < len(p.text) && p.text[p.at] == 'L' {
		p.at++
	}
	return n, ""
}

// quoted reads a string in single or double quotes; escapes are not part of any key or type.
func (p *parser) quoted() (string, bool) {
	p.skip()
	if p.at == len(p.text) || (p.text[p.at] != '\'' && p.text[p.at] != '"') {
		return "", false
	}
	end := strings.IndexByte(p.text[p.at+1:], p.text[p.at])
	if end < 0 {
		return "", false
	}
	s := p.text[p.at+1 : p.at+1+end]
	p.at += end + 2
	if len(s) > 64 {
		s = s[:64] // only ever shown
	}
	return s, true
}

// take steps over blanks and the byte c, if it is next.
func (p *parser) take(c byte) bool {
	if p.skip(); p.at < len(p.text) && p.text[p.at] == c {
		p.at++
		return true
	}
	return false
}

func (p *parser) skip() {
	for p.at < len(p.text) && strings.IndexByte(" \t\r\n", p.text[p.at]) >= 0 {
		p.at++
	}
}

// shapeText writes a shape as 3 × 4.
func shapeText(shape []int) string {
	if len(shape) == 0 {
		return "()"
	}
	var b strings.Builder
	for i, n := range shape {
		if i > 0 {
			b.WriteString(" × ")
		}
		b.WriteString(strconv.Itoa(n))
	}
	return b.String()
}
