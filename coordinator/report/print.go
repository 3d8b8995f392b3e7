package report

import (
	"context"
	"fmt"
	"io"
	"math"
	"runtime"
	"strconv"
	"strings"
	"sync"

	"pairloom/sparse/block"
	"pairloom/sparse/guard"
)

const (
	chunk      = 1 << 14 // pairs that a goroutine formats at once
	formatters = 8       // goroutines that format, at most
)

// print formats the pairs in chunks side by side and writes them in order.
func (d *diagram) print(ctx context.Context, out io.Writer, k int, list []pair) error {
	buffers := make([][]byte, min(runtime.GOMAXPROCS(0), formatters))
	errs := make([]error, len(buffers))
	for len(list) > 0 {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		var wg sync.WaitGroup
		for n := range buffers {
			part := list[:min(chunk, len(list))]
			list = list[len(part):]
			wg.Go(func() {
				errs[n] = guard.Run(func() error { buffers[n] = d.lines(buffers[n][:0], k, part); return nil })
			})
		}
		wg.Wait()
		for n, b := range buffers {
			if errs[n] != nil {
				return errs[n]
			}
			if _, err := out.Write(b); err != nil {
				return err
			}
		}
	}
	return nil
}

// lines appends the rows of some pairs.
func (d *diagram) lines(dst []byte, k int, list []pair) []byte {
	for _, p := range list {
		dst = append(strconv.AppendInt(dst, int64(k), 10), ',')
		dst = append(number(dst, d.t.Value(k, p.birth)), ',')
		if p.death == block.None {
			dst = append(d.cell(append(dst, "inf,"...), k, p.birth), ",\n"...)
			continue
		}
		dst = append(number(dst, d.t.Value(k+1, p.death)), ',')
		dst = append(d.cell(dst, k, p.birth), ',')
		dst = append(d.cell(dst, k+1, p.death), '\n')
	}
	return dst
}

// number appends the shortest decimal digits that read back to v, with an exponent
// below 1e-4 and from 1e21 on only, so that whole numbers look whole.
func number(dst []byte, v float64) []byte {
	size := math.Abs(v)
	switch {
	case size < 1<<53 && v == math.Trunc(v):
		return strconv.AppendInt(dst, int64(v), 10) // the same text, sooner
	case size >= 1e-4 && size < 1e21:
		return strconv.AppendFloat(dst, v, 'f', -1, 64)
	}
	return strconv.AppendFloat(dst, v, 'e', -1, 64)
}

// cell appends a cell's name, quoted where a label needs it (RFC 4180).
func (d *diagram) cell(dst []byte, k int, r uint32) []byte {
	from := len(dst)
	dst = d.t.AppendName(dst, k, r)
	if d.t.Labels == nil {
		return dst
	}
	name := string(dst[from:])
	if !strings.ContainsAny(name, ",\"\r\n") {
		return dst
	}
	dst = append(dst[:from], '"')
	return append(append(dst, strings.ReplaceAll(name, `"`, `""`)...), '"')
}

// writeBetti prints betti.csv: claimed degrees only.
func (d *diagram) writeBetti(out io.Writer) error {
	if _, err := io.WriteString(out, "degree,betti\n"); err != nil {
		return err
	}
	for k, b := range d.betti {
		if b == nil {
			continue
		}
		if _, err := fmt.Fprintf(out, "%d,%d\n", k, *b); err != nil {
			return err
		}
	}
	return nil
}
