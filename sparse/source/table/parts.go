package table

import (
	"bytes"
	"io"
	"math"
)

// partLeast is the shortest part that is worth a reader of its own, in bytes.
const partLeast = 1 << 16

// OpenParts opens a file as up to n readers of consecutive parts, cut between lines.
// One after the other they give the lines, in the same fields and with the same
// numbers, that Open's one reader gives. Small files, and files in which no line of
// the first MiB shows the delimiter, are not cut. Close them all.
func OpenParts(path string, n int) ([]*Reader, error) {
	probe, err := Open(path)
	if err != nil {
		return nil, err
	}
	defer probe.Close()
	size := int64(probe.size)
	n = int(min(int64(n), size/partLeast))
	for n > 1 && probe.delimiter == 0 && probe.read <= bufferBytes && probe.Next() {
	}
	seen := int64(probe.read) - int64(probe.to-probe.from)
	cuts := []int64{0}
	for i := 1; i < n && probe.delimiter != 0 && probe.err == nil; i++ {
		at, err := lineAfter(probe.file, max(size/int64(n)*int64(i), seen))
		if err != nil {
			return nil, err
		}
		if at > cuts[len(cuts)-1] && at < size {
			cuts = append(cuts, at)
		}
	}
	return openAt(path, probe, append(cuts, math.MaxInt64))
}

// openAt opens the parts between cuts; those after the first know what the probe saw.
func openAt(path string, probe *Reader, cuts []int64) ([]*Reader, error) {
	var parts []*Reader
	for i, start := range cuts[:len(cuts)-1] {
		r, err := Open(path)
		if err != nil {
			for _, p := range parts {
				p.Close()
			}
			return nil, err
		}
		r.start, r.in = start, io.NewSectionReader(r.file, start, cuts[i+1]-start)
		r.size = uint64(min(cuts[i+1], int64(r.size))) - uint64(start)
		if i > 0 {
			r.header, r.begun, r.delimiter = probe.header, true, probe.delimiter
		}
		parts = append(parts, r)
	}
	return parts, nil
}

// lineAfter returns where the first line begins that starts after a byte, or at it.
func lineAfter(file io.ReaderAt, at int64) (int64, error) {
	block := make([]byte, 1<<16)
	for at--; ; {
		n, err := file.ReadAt(block, at)
		if i := bytes.IndexByte(block[:n], '\n'); i >= 0 {
			return at + int64(i) + 1, nil
		}
		at += int64(n)
		if err == io.EOF {
			return at, nil
		}
		if err != nil {
			return 0, err
		}
	}
}

// newlines counts the line ends that can be read.
func newlines(in io.Reader) (n int) {
	block := make([]byte, bufferBytes)
	for {
		got, err := in.Read(block)
		n += bytes.Count(block[:got], []byte{'\n'})
		if err != nil {
			return n
		}
	}
}
