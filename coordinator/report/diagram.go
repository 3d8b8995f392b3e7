package report

import (
	"cmp"
	"context"
	"fmt"
	"io"
	"math"
	"slices"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/column"
	"pairloom/sparse/evidence"
	"pairloom/sparse/record"
	"pairloom/sparse/stage"
)

// pair is one row of pairs.csv before it is printed: ranks of a k-cell and of the
// (k+1)-cell that kills it; block.None where none does.
type pair struct{ birth, death uint32 }

// diagram lists and prints the pairs of all claimed degrees.
type diagram struct {
	job      string
	t        *chain.Table
	keepZero bool
	betti    []*uint64 // by degree; nil: not claimed
	longest  []Long    // the longest finite pairs, a few a degree
}

// Long is one of the longest-lived pairs, for people.
type Long struct {
	Degree       int
	Birth, Death float64
	Born, Dies   string // names of cells
}

// stop is how many cells or pairs are handled between two looks at the context.
const stop = 1 << 20

// write prints pairs.csv.
func (d *diagram) write(ctx context.Context, out io.Writer) error {
	if _, err := io.WriteString(out, "degree,birth,death,birth_cell,death_cell\n"); err != nil {
		return err
	}
	deaths, err := d.firstDeaths()
	if err != nil {
		return err
	}
	for k := d.t.First; k <= d.t.Degrees; k++ {
		var list []pair
		if list, deaths, err = d.degree(ctx, k, deaths); err != nil {
			return err
		}
		if err := d.ascending(k, list); err != nil {
			return err
		}
		d.sort(k, list)
		d.remember(k, list)
		if err := d.print(ctx, out, k, list); err != nil {
			return err
		}
	}
	return nil
}

// mates opens the pairs of block k, nil if there is no such block.
func (d *diagram) mates(k int) (*stage.Pairs, error) {
	if k < 1 || k > d.t.Top() {
		return nil, nil
	}
	return stage.OpenPairs(d.job, k, d.t.Cells[k-1], d.t.Cells[k])
}

// firstDeaths marks the cells of the lowest claimed degree that kill; nil: none does.
func (d *diagram) firstDeaths() (column.Bits, error) {
	below, err := d.mates(d.t.First)
	if err != nil || below == nil {
		return nil, err
	}
	return below.Deaths(d.t.Cells[d.t.First]), below.Close()
}

// degree lists the pairs born in degree k that are to be printed, essential ones too,
// by ascending birth, and marks the cells of degree k+1 that kill.
func (d *diagram) degree(ctx context.Context, k int, deaths column.Bits) (list []pair, next column.Bits, err error) {
	var mate []uint32
	above, err := d.mates(k + 1)
	if err != nil {
		return nil, nil, err
	}
	if above != nil {
		defer above.Close()
		mate, next = above.Mate, column.NewBits(d.t.Cells[k+1])
	}
	essential := uint64(0)
	for i := range d.t.Cells[k] {
		if i%stop == 0 && ctx.Err() != nil {
			return nil, nil, context.Cause(ctx)
		}
		j := uint32(block.None)
		if mate != nil {
			j = mate[i]
		}
		if j == block.None {
			if !deaths.Has(i) {
				essential++
				list = append(list, pair{i, j})
			}
			continue
		}
		if next.Has(j) || deaths.Has(i) {
			return nil, nil, twice(k, i, j, next)
		}
		next.Set(j)
		short, err := d.short(k, i, j)
		if err != nil {
			return nil, nil, err
		}
		if !short {
			list = append(list, pair{i, j})
		}
	}
	d.betti[k] = &essential
	return list, next, nil
}

func twice(k int, i, j uint32, next column.Bits) error {
	if next.Has(j) {
		return &evidence.Broken{Check: "births and deaths", Degree: k + 1, Why: fmt.Sprintf("column %d kills twice", j)}
	}
	return &evidence.Broken{Check: "births and deaths", Degree: k + 1, Why: fmt.Sprintf("row %d is a birth, and a death in the block below", i)}
}

// short says whether a pair has zero length and is not printed.
func (d *diagram) short(k int, i, j uint32) (bool, error) {
	if d.t.SameCentre(k, i, k+1, j) {
		return !d.keepZero, nil
	}
	birth, death := d.t.Value(k, i), d.t.Value(k+1, j)
	if death < birth {
		return false, &evidence.Broken{Check: "births and deaths", Degree: k + 1, Why: fmt.Sprintf("row %d is born at %v and dies at %v", i, birth, death)}
	}
	return birth == death && !d.keepZero, nil
}

// ascending checks what sort builds on: values and name ranks that never fall.
func (d *diagram) ascending(k int, list []pair) error {
	for i := 1; i < len(list); i++ {
		a, b := list[i-1].birth, list[i].birth
		if d.t.Value(k, a) > d.t.Value(k, b) || d.t.NameRank(k, a) > d.t.NameRank(k, b) {
			return &record.Damage{Path: chain.CellsPath(stage.Order(d.job), k), Why: fmt.Sprintf("cells %d and %d are out of order", a, b)}
		}
	}
	return nil
}

// sort orders pairs by the values of birth and death, then by the ranks of the named
// cells. They come by ascending birth, and values and name ranks never fall with the
// rank; so it is enough to sort runs of equal birth by death, in these the runs of equal
// death by birth, and in these the runs of one name of the birth by death.
func (d *diagram) sort(k int, list []pair) {
	runs(list, func(a, b pair) bool { return d.t.Value(k, a.birth) == d.t.Value(k, b.birth) }, func(list []pair) {
		slices.SortFunc(list, byDeath)
		runs(list, func(a, b pair) bool { return d.death(k, a) == d.death(k, b) }, func(list []pair) {
			slices.SortFunc(list, byBirth)
			runs(list, func(a, b pair) bool { return d.t.NameRank(k, a.birth) == d.t.NameRank(k, b.birth) }, func(list []pair) {
				slices.SortFunc(list, byDeath)
			})
		})
	})
}

func byBirth(a, b pair) int {
	return cmp.Compare(uint64(a.birth)<<32|uint64(a.death), uint64(b.birth)<<32|uint64(b.death))
}

func byDeath(a, b pair) int {
	return cmp.Compare(uint64(a.death)<<32|uint64(a.birth), uint64(b.death)<<32|uint64(b.birth))
}

// death is the value at which a class of degree k ends.
func (d *diagram) death(k int, p pair) float64 {
	if p.death == block.None {
		return math.Inf(1)
	}
	return d.t.Value(k+1, p.death)
}

// runs calls do on every longest run of at least two pairs that are the same.
func runs(list []pair, same func(a, b pair) bool, do func([]pair)) {
	for from := 0; from < len(list); {
		to := from + 1
		for to < len(list) && same(list[from], list[to]) {
			to++
		}
		if to-from > 1 {
			do(list[from:to])
		}
		from = to
	}
}

// longestKept is how many pairs a degree are told to people.
const longestKept = 3

// remember keeps the longest finite pairs of a degree, longest first.
func (d *diagram) remember(k int, list []pair) {
	var best []pair
	length := func(p pair) float64 { return d.t.Value(k+1, p.death) - d.t.Value(k, p.birth) }
	for _, p := range list {
		if p.death == block.None || len(best) == longestKept && length(p) <= length(best[longestKept-1]) {
			continue
		}
		at := len(best)
		for at > 0 && length(best[at-1]) < length(p) {
			at--
		}
		best = slices.Insert(best, at, p)
		best = best[:min(len(best), longestKept)]
	}
	for _, p := range best {
		if length(p) > 0 {
			d.longest = append(d.longest, Long{k, d.t.Value(k, p.birth), d.t.Value(k+1, p.death),
				string(d.t.AppendName(nil, k, p.birth)), string(d.t.AppendName(nil, k+1, p.death))})
		}
	}
}
