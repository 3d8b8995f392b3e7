package table

import (
	"bytes"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/source"
)

func write(t testing.TB, text string) string {
	path := filepath.Join(t.TempDir(), "in.csv")
	require.NoError(t, os.WriteFile(path, []byte(text), 0o644))
	return path
}

func readAll(t testing.TB, path string) (rows []string, header []string, err error) {
	r, err := Open(path)
	require.NoError(t, err)
	defer r.Close()
	for r.Next() {
		var f []string
		for _, b := range r.Fields() {
			f = append(f, string(b))
		}
		rows = append(rows, fmt.Sprintf("%d:%s", r.Line(), strings.Join(f, "|")))
	}
	return rows, r.Header(), r.Err()
}

func TestTables(t *testing.T) {
	for text, want := range map[string][]string{
		"1,2\n3,4\n":                      {"1:1|2", "2:3|4"},
		"1;2\r\n3;4":                      {"1:1|2", "2:3|4"},
		"1\t2\n":                          {"1:1|2"},
		"  1   2 \t3 \n":                  {"1:1|2|3"},
		"# note\n\nx,y\n# more\n1, 2 \n":  {"5:1|2"},
		"\xef\xbb\xbf1,2\n":               {"1:1|2"},
		"a,b\nc,d,1\n":                    {"2:c|d|1"},
		"1,\"x, \"\"y\"\"\"\n":            {"1:1|x, \"y\""},
		"1,,3\n":                          {"1:1||3"},
		"7\n1,2\n3\n4,5":                  {"1:7", "2:1|2", "3:3", "4:4|5"},
		"x\n1,2\n":                        {"2:1|2"},
		"":                                nil,
		"\n\n#\n":                         nil,
		"v w\n0.5 \"two words\"\n1 three": {"2:0.5|two words", "3:1|three"},
	} {
		rows, _, err := readAll(t, write(t, text))
		require.NoError(t, err, text)
		require.Equal(t, want, rows, text)
	}
	_, header, _ := readAll(t, write(t, "from,to\n1,2\n"))
	require.Equal(t, []string{"from", "to"}, header)
}

func TestBrokenTables(t *testing.T) {
	for text, want := range map[string]string{
		"1,2\n3,\x004\n":                       "line 2: a zero byte",
		"1,\"2\n":                              "line 1: a quote",
		strings.Repeat("1", lineMost+3) + "\n": "longer than 16 MiB",
	} {
		_, _, err := readAll(t, write(t, text))
		require.ErrorAs(t, err, new(*source.InputError))
		require.ErrorContains(t, err, want)
	}
	_, err := Open(t.TempDir())
	require.ErrorContains(t, err, "is a folder")
}

// Lines that straddle the buffer's end are whole.
func TestLinesAcrossBuffers(t *testing.T) {
	var b strings.Builder
	for i := range 200_000 {
		fmt.Fprintf(&b, "%d,%d\n", i, i*7)
	}
	rows, _, err := readAll(t, write(t, b.String()))
	require.NoError(t, err)
	require.Len(t, rows, 200_000)
	require.Equal(t, "199999:199998|1399986", rows[199_998])
}

// Parts give the lines of the whole, with their numbers; damage is named alike.
func TestParts(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 7))
	for round := range 12 {
		var b strings.Builder
		b.WriteString([]string{"", "\xef\xbb\xbf", "# note\n", "name\n7\n"}[round%4])
		for i := range 40_000 {
			switch r.IntN(9) {
			case 0:
				fmt.Fprintf(&b, "# line %d\r\n\n", i)
			case 1:
				fmt.Fprintln(&b, i)
			default:
				fmt.Fprintf(&b, "%d;%d ;%d\n", i, r.IntN(1000), r.Uint32())
			}
		}
		text := strings.TrimSuffix(b.String(), []string{"", "\n"}[round%2])
		if round > 7 {
			text = text[:len(text)-90000] + "\n1;\"x\n" + text[len(text)-90000:]
		}
		path := write(t, text)
		want, header, wantErr := readAll(t, path)
		parts, err := OpenParts(path, 1+round)
		require.NoError(t, err)
		require.Len(t, parts, min(1+round, len(text)/partLeast))
		var got []string
		read, size := uint64(0), uint64(0)
		for _, p := range parts {
			for err == nil && p.Next() {
				got = append(got, string(bytes.Join(p.Fields(), []byte("|"))))
			}
			read, size = read+p.BytesRead(), size+p.Size()
			if err == nil {
				err = p.Err()
			}
			if err == nil && p.Header() != nil {
				require.Equal(t, header, p.Header())
			}
			require.NoError(t, p.Close())
		}
		require.Equal(t, wantErr, err)
		require.EqualValues(t, len(text), size)
		if err == nil {
			require.Equal(t, size, read)
		}
		for i := range want {
			want[i] = want[i][strings.IndexByte(want[i], ':')+1:]
		}
		require.Equal(t, want, got)
	}
}

// ParseFloat gives what the standard library gives, to the bit.
func TestParseFloat(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for range 200_000 {
		v := math.Float64frombits(r.Uint64())
		for _, text := range []string{strconv.FormatFloat(v, 'g', 1+r.IntN(18), 64), strconv.FormatFloat(r.Float64()*100, 'f', r.IntN(19), 64), fmt.Sprint(r.Int64())} {
			want, err := strconv.ParseFloat(text, 64)
			got, ok := ParseFloat([]byte(text))
			require.Equal(t, err == nil, ok, text)
			if ok && !math.IsNaN(want) {
				require.Equal(t, math.Float64bits(want), math.Float64bits(got), text)
			}
		}
	}
	for _, text := range []string{"", "-", ".", "1e", "0x1p3", "1_000", "a", "1 2", "--1", "1e999"} {
		_, ok := ParseFloat([]byte(text))
		require.False(t, ok, text)
	}
}

func TestParseUint32(t *testing.T) {
	v, ok := ParseUint32([]byte("4294967294"))
	require.True(t, ok)
	require.Equal(t, uint32(4294967294), v)
	for _, text := range []string{"", "-1", "4294967295", "99999999999", "1.0", "+1"} {
		_, ok := ParseUint32([]byte(text))
		require.False(t, ok, text)
	}
}

func FuzzTable(f *testing.F) {
	f.Add([]byte("a,b\n1,2\n"))
	f.Add([]byte("\"x\"\"y\" 2\n\r\n;;\n"))
	f.Fuzz(func(t *testing.T, b []byte) {
		r, err := Open(write(t, string(b)))
		require.NoError(t, err)
		defer r.Close()
		n := 0
		for r.Next() {
			n++
		}
		require.LessOrEqual(t, n, len(b)+1)
	})
}

func BenchmarkTable(b *testing.B) {
	var text strings.Builder
	for i := range 100_000 {
		fmt.Fprintf(&text, "%.9g,%d,%d,%d\n", math.Sin(float64(i)), i, i+1, i+70)
	}
	path := write(b, text.String())
	b.SetBytes(int64(text.Len()))
	b.ReportAllocs()
	for b.Loop() {
		r, _ := Open(path)
		for r.Next() {
			for _, f := range r.Fields() {
				ParseFloat(f)
			}
		}
		r.Close()
	}
}
