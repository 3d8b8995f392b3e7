package report

import (
	"bufio"
	"cmp"
	"context"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/column"
	"pairloom/sparse/evidence"
	"pairloom/sparse/stage"
)

// pair is one row of pairs.csv before it is printed: 16 bytes.
type pair struct {
	birth, death uint32 // ranks; death block.None: essential
}

// Write reads the pairs of all blocks of a finished job and writes pairs.csv, betti.csv
// and summary.json into dst, which is made if it is missing. Zero-length pairs are written with keepZero,
// or where the complex asks for them. Errors: *evidence.Broken if a cell is both a birth
// and a death, and input or output errors; a file appears whole or not at all.
// Memory: 8 bytes a printed pair of one degree and the masks.
func Write(ctx context.Context, job, dst string, run *Run, keepZero bool) (*Summary, error) {
	if err := os.MkdirAll(dst, 0o755); err != nil {
		return nil, err
	}
	t, err := chain.OpenTable(stage.Order(job))
	if err != nil {
		return nil, err
	}
	defer t.Close()
	w := &writer{job: job, t: t, keep: keepZero || t.KeepZero, betti: make([]*uint64, t.Degrees+1)}
	if err := publish(filepath.Join(dst, "pairs.csv"), func(out *bufio.Writer) error { return w.pairs(ctx, out) }); err != nil {
		return nil, err
	}
	if err := publish(filepath.Join(dst, "betti.csv"), w.writeBetti); err != nil {
		return nil, err
	}
	s := summarise(run, w.betti)
	s.longest = w.longest
	return s, publish(filepath.Join(dst, "summary.json"), s.WriteJSON)
}

// publish writes a file aside, syncs it, and gives it its name by link.
func publish(path string, fill func(*bufio.Writer) error) error {
	f, err := os.CreateTemp(filepath.Dir(path), "."+filepath.Base(path)+".*.part")
	if err != nil {
		return err
	}
	defer os.Remove(f.Name())
	defer f.Close()
	out := bufio.NewWriterSize(f, 1<<20)
	if err := cmp.Or(fill(out), out.Flush(), f.Chmod(0o644), f.Sync()); err != nil {
		return err
	}
	return os.Link(f.Name(), path)
}

// Long is one of the longest-lived pairs, for people.
type Long struct {
	Degree       int
	Birth, Death float64
	Where        string
}

type writer struct {
	job     string
	t       *chain.Table
	keep    bool
	betti   []*uint64 // by degree; nil: not claimed
	longest []Long
}

func (w *writer) pairs(ctx context.Context, out *bufio.Writer) error {
	if _, err := out.WriteString("degree,birth,death,birth_cell,death_cell\n"); err != nil {
		return err
	}
	for k := w.t.First; k <= w.t.Degrees; k++ {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		list, err := w.degree(k)
		if err != nil {
			return err
		}
		if err := w.print(out, k, list); err != nil {
			return err
		}
	}
	return nil
}

// mates opens the pairs of block k, nil if there is no such block.
func (w *writer) mates(k int) (*stage.Pairs, error) {
	if k < 1 || k > w.t.Top() {
		return nil, nil
	}
	return stage.OpenPairs(w.job, k, w.t.Cells[k-1], w.t.Cells[k])
}

// degree lists the pairs born in degree k, essential ones too, sorted for printing.
func (w *writer) degree(k int) ([]pair, error) {
	below, err := w.mates(k)
	if err != nil {
		return nil, err
	}
	var deaths column.Bits
	if below != nil {
		deaths = below.Deaths(w.t.Cells[k])
		if err := below.Close(); err != nil {
			return nil, err
		}
	}
	above, err := w.mates(k + 1)
	if err != nil {
		return nil, err
	}
	var mate []uint32
	if above != nil {
		mate = above.Mate
		defer above.Close()
	}
	var list []pair
	betti := uint64(0)
	for i := range w.t.Cells[k] {
		j := uint32(block.None)
		if mate != nil {
			j = mate[i]
		}
		switch {
		case deaths.Has(i) && j != block.None:
			return nil, &evidence.Broken{Check: "births and deaths", Degree: k, Why: fmt.Sprintf("cell %d is both", i)}
		case deaths.Has(i):
			continue
		case j == block.None:
			betti++
		case !w.keep && (w.t.SameCentre(k, i, k+1, j) || w.t.Value(k, i) == w.t.Value(k+1, j)):
			continue
		}
		list = append(list, pair{i, j})
	}
	w.betti[k] = &betti
	slices.SortFunc(list, func(a, b pair) int { return w.compare(k, a, b) })
	return list, nil
}

// compare orders by birth, death (essential last), then the ranks of the named cells.
func (w *writer) compare(k int, a, b pair) int {
	if c := cmp.Compare(w.t.Value(k, a.birth), w.t.Value(k, b.birth)); c != 0 {
		return c
	}
	if a.death == block.None || b.death == block.None {
		if a.death != b.death {
			return cmp.Compare(a.death, b.death)
		}
	} else if c := cmp.Compare(w.t.Value(k+1, a.death), w.t.Value(k+1, b.death)); c != 0 {
		return c
	}
	if c := cmp.Compare(w.t.NameRank(k, a.birth), w.t.NameRank(k, b.birth)); c != 0 {
		return c
	}
	if a.death == block.None {
		return 0
	}
	return cmp.Compare(w.t.NameRank(k+1, a.death), w.t.NameRank(k+1, b.death))
}

func (w *writer) print(out *bufio.Writer, k int, list []pair) error {
	var line []byte
	for _, p := range list {
		birth := w.t.Value(k, p.birth)
		line = strconv.AppendInt(line[:0], int64(k), 10)
		line = append(number(append(line, ','), birth), ',')
		if p.death == block.None {
			line = append(w.cell(append(line, "inf,"...), k, p.birth), ',')
		} else {
			death := w.t.Value(k+1, p.death)
			line = append(w.cell(append(number(line, death), ','), k, p.birth), ',')
			line = w.cell(line, k+1, p.death)
			w.remember(k, birth, death, p.birth)
		}
		if _, err := out.Write(append(line, '\n')); err != nil {
			return err
		}
	}
	return nil
}

// number appends the shortest text that reads back to v.
func number(dst []byte, v float64) []byte { return strconv.AppendFloat(dst, v, 'g', -1, 64) }

// cell appends a cell's name, quoted where a label needs it.
func (w *writer) cell(dst []byte, k int, r uint32) []byte {
	from := len(dst)
	dst = w.t.AppendName(dst, k, r)
	if name := string(dst[from:]); w.t.Labels != nil && strings.ContainsAny(name, ",\"\n") {
		dst = append(append(dst[:from], '"'), strings.ReplaceAll(name, `"`, `""`)...)
		dst = append(dst, '"')
	}
	return dst
}

// longestKept is how many pairs a degree are told to people.
const longestKept = 3

// remember keeps the longest pairs of each degree.
func (w *writer) remember(k int, birth, death float64, cell uint32) {
	at := len(w.longest)
	for at > 0 && w.longest[at-1].Degree == k && death-birth > w.longest[at-1].Death-w.longest[at-1].Birth {
		at--
	}
	first := at
	for first > 0 && w.longest[first-1].Degree == k {
		first--
	}
	if at-first >= longestKept {
		return
	}
	w.longest = slices.Insert(w.longest, at, Long{k, birth, death, string(w.t.AppendName(nil, k, cell))})
	w.longest = w.longest[:min(len(w.longest), first+longestKept)]
}

func (w *writer) writeBetti(out *bufio.Writer) error {
	if _, err := out.WriteString("degree,betti\n"); err != nil {
		return err
	}
	for k, b := range w.betti {
		if b == nil {
			continue
		}
		if _, err := fmt.Fprintf(out, "%d,%d\n", k, *b); err != nil {
			return err
		}
	}
	return nil
}

// WriteJSON writes the summary, indented.
func (s *Summary) WriteJSON(out *bufio.Writer) error {
	e := json.NewEncoder(out)
	e.SetIndent("", "  ")
	return e.Encode(s)
}
