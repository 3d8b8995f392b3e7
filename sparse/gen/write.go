package gen

import (
	"bufio"
	"encoding/binary"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
)

// WriteMarket writes ∂_1, ∂_2, … as the Matrix Market files name-1.mtx, … in dir,
// (k−1)-cells as rows, and returns their paths.
func WriteMarket(dir, name string, boundary [][][]uint32) (paths []string, err error) {
	for k := 1; k < len(boundary); k++ {
		path := filepath.Join(dir, fmt.Sprintf("%s-%d.mtx", name, k))
		if err := WriteMatrix(path, len(boundary[k-1]), boundary[k]); err != nil {
			return nil, err
		}
		paths = append(paths, path)
	}
	return paths, nil
}

// WriteMatrix writes one Matrix Market file, pattern, column after column.
func WriteMatrix(path string, rows int, columns [][]uint32) error {
	return written(path, func(w *bufio.Writer) {
		entries := 0
		for _, c := range columns {
			entries += len(c)
		}
		fmt.Fprintf(w, "%%%%MatrixMarket matrix coordinate pattern general\n%d %d %d\n", rows, len(columns), entries)
		var line []byte
		for j, c := range columns {
			for _, r := range c {
				line = strconv.AppendUint(line[:0], uint64(r)+1, 10)
				line = strconv.AppendInt(append(line, ' '), int64(j)+1, 10)
				w.Write(append(line, '\n'))
			}
		}
	})
}

// written makes a file; the buffer keeps the first error until it is flushed.
func written(path string, write func(*bufio.Writer)) error {
	f, err := os.Create(path)
	if err != nil {
		return err
	}
	w := bufio.NewWriterSize(f, 1<<16)
	write(w)
	err = w.Flush()
	if cl := f.Close(); err == nil {
		err = cl
	}
	return err
}

// Transpose exchanges rows and columns.
func Transpose(rows int, columns [][]uint32) [][]uint32 {
	out := make([][]uint32, rows)
	for j, c := range columns {
		for _, r := range c {
			out[r] = append(out[r], uint32(j))
		}
	}
	return out
}

// WriteSimplices writes value,v0,v1,… one simplex a line, degree by degree.
func WriteSimplices(path string, f *Filtered) error {
	return written(path, func(w *bufio.Writer) {
		var line []byte
		for k := range f.Vertices {
			for j, simplex := range f.Vertices[k] {
				line = strconv.AppendFloat(line[:0], f.Values[k][j], 'g', -1, 64)
				for _, v := range simplex {
					line = strconv.AppendUint(append(line, ','), uint64(v), 10)
				}
				w.Write(append(line, '\n'))
			}
		}
	})
}

// WriteNPY writes an array of float64, little-endian, C order, format 1.0.
func WriteNPY(path string, shape []int, values []float64) error {
	return written(path, func(w *bufio.Writer) {
		var axes strings.Builder
		for _, n := range shape {
			fmt.Fprintf(&axes, "%d,", n)
		}
		const before, align = 10, 64 // magic, version and length stand before the header
		head := fmt.Sprintf("{'descr': '<f8', 'fortran_order': False, 'shape': (%s), }", axes.String())
		head += strings.Repeat(" ", align-1-(before+len(head))%align) + "\n"
		w.WriteString("\x93NUMPY\x01\x00")
		w.Write(binary.LittleEndian.AppendUint16(nil, uint16(len(head))))
		w.WriteString(head)
		var b [8]byte
		for _, v := range values {
			binary.LittleEndian.PutUint64(b[:], math.Float64bits(v))
			w.Write(b[:])
		}
	})
}
