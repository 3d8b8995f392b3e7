package report

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"
	"pgregory.net/rapid"

	"pairloom/sparse/chain"
)

// line is a row of pairs.csv with the name ranks that order it.
type line struct {
	birth, death float64
	born, dies   uint32
	text         string
}

// drawn makes a lower star of one block with many ties, and pairs that obey the order.
func drawn(r *rand.Rand, centres, rows, cols int, distinct int) (values []float64, births, deaths []uint32, mate []uint32) {
	values = make([]float64, centres)
	for i := range values {
		values[i] = float64(r.IntN(distinct)) / 8
	}
	slices.Sort(values)
	births, deaths = make([]uint32, rows), make([]uint32, cols)
	for _, list := range [][]uint32{births, deaths} {
		for i := range list {
			list[i] = uint32(r.IntN(centres))
		}
		slices.Sort(list)
	}
	mate = make([]uint32, rows)
	free := r.Perm(cols)
	for i := range mate {
		mate[i] = none
		if len(free) > 0 && r.IntN(8) > 0 && values[births[i]] <= values[deaths[free[0]]] {
			mate[i], free = uint32(free[0]), free[1:]
		}
	}
	return values, births, deaths, mate
}

// plainly prints the same pairs by one sort with the whole comparison.
func plainly(index []uint32, values []float64, births, deaths, mate []uint32, keepZero bool) string {
	var list []line
	for i, j := range mate {
		l := line{birth: values[births[i]], death: math.Inf(1), born: births[i]}
		l.text = fmt.Sprintf("0,%v,inf,%d,\n", l.birth, index[l.born])
		if j != none {
			l.death, l.dies = values[deaths[j]], deaths[j]
			l.text = fmt.Sprintf("0,%v,%v,%d,%d\n", l.birth, l.death, index[l.born], index[l.dies])
		}
		if l.birth != l.death || keepZero {
			list = append(list, l)
		}
	}
	slices.SortStableFunc(list, func(a, b line) int {
		return cmp.Or(cmp.Compare(a.birth, b.birth), cmp.Compare(a.death, b.death), cmp.Compare(a.born, b.born), cmp.Compare(a.dies, b.dies))
	})
	var out strings.Builder
	for _, l := range list {
		out.WriteString(l.text)
	}
	return out.String()
}

// The runs of sort agree with one plain comparison, whatever ties there are.
func TestOrderOfRows(t *testing.T) {
	rapid.Check(t, func(rt *rapid.T) {
		r := rand.New(rand.NewPCG(rapid.Uint64().Draw(rt, "seed"), 1))
		centres := rapid.IntRange(1, 40).Draw(rt, "centres")
		values, births, deaths, mate := drawn(r, centres, rapid.IntRange(1, 60).Draw(rt, "rows"), rapid.IntRange(1, 60).Draw(rt, "cols"), rapid.IntRange(1, 40).Draw(rt, "values"))
		index := make([]uint32, centres)
		for i, v := range r.Perm(centres) {
			index[i] = uint32(v)
		}
		c := &chain.Complex{Kind: "facets", Naming: chain.ByVertex, Cells: counts(births, deaths), Degrees: 0, Truncated: true}
		job := folder(t, c, stars(t, index, values, births, deaths), mate)
		keep := rapid.Bool().Draw(rt, "keep")
		got, _, _ := files(t, job, &Run{}, keep)
		require.Equal(rt, header+plainly(index, values, births, deaths, mate, keep), got)
	})
}

// Numbers read back, with the fewest digits, and whole ones look whole.
func TestNumbers(t *testing.T) {
	for v, want := range map[float64]string{3: "3", -7: "-7", 0: "0", 1000000: "1000000", 0.1: "0.1", 1e-5: "1e-05", 1e21: "1e+21",
		float64(float32(0.1)): "0.10000000149011612", 1 << 53: "9007199254740992", 2.5e20: "250000000000000000000"} {
		require.Equal(t, want, string(number(nil, v)))
	}
	rapid.Check(t, func(t *rapid.T) {
		v := rapid.OneOf(rapid.Float64(), rapid.Map(rapid.Int32(), func(i int32) float64 { return float64(i) / 4 })).Draw(t, "v") + 0
		text := string(number(nil, v))
		require.Equal(t, digits(strconv.FormatFloat(v, 'e', -1, 64)), digits(text))
		back, err := strconv.ParseFloat(text, 64)
		require.NoError(t, err)
		require.Equal(t, v, back)
	})
}

// digits are the significant digits of a number's text.
func digits(text string) string {
	mantissa, _, _ := strings.Cut(text, "e")
	return strings.Trim(strings.NewReplacer("-", "", ".", "").Replace(mantissa), "0")
}

// BenchmarkWrite prints a million rows, half of them essential: with values that all
// differ, and with 64 values.
func BenchmarkWrite(b *testing.B) {
	const n = 1 << 20
	for name, distinct := range map[string]int{"distinct": 1 << 52, "ties": 64} {
		b.Run(name, func(b *testing.B) {
			values, births, deaths, mate := drawn(rand.New(rand.NewPCG(1, 1)), n/2, n, n, distinct)
			for i := 0; i < n; i += 2 {
				mate[i] = none
			}
			index := make([]uint32, n/2)
			for i := range index {
				index[i] = uint32(i)
			}
			c := &chain.Complex{Kind: "grid", Naming: chain.ByGridIndex, Shape: []int{128, 64, 64}, Cells: counts(births, deaths), Truncated: true}
			job := folder(b, c, stars(b, index, values, births, deaths), mate)
			b.ReportAllocs()
			for b.Loop() {
				if _, err := Write(context.Background(), job, b.TempDir(), &Run{}, false); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
