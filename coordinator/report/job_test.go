package report

import (
	"os"
	"path/filepath"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/stage"
)

const none = block.None

// folder makes a job folder of a complex with the pairs of its blocks, mates[k-1] of ∂_k.
func folder(t testing.TB, c *chain.Complex, tables func(dir string), mates ...[]uint32) string {
	job := t.TempDir()
	require.NoError(t, stage.Make(job))
	tables(stage.Order(job))
	require.NoError(t, c.Write(stage.Order(job)))
	for k, mate := range mates {
		_, err := stage.WritePairs(job, k+1, mate)
		require.NoError(t, err)
	}
	return job
}

// stars writes centres (their indices and values) and per degree the centres' ranks.
func stars(t testing.TB, index []uint32, values []float64, cells ...[]uint32) func(string) {
	return func(dir string) {
		c, err := chain.CreateCentres(chain.CentresPath(dir), uint32(len(index)))
		require.NoError(t, err)
		copy(c.Index, index)
		copy(c.Values, values)
		require.NoError(t, c.Publish(false))
		require.NoError(t, c.Close())
		for k, centre := range cells {
			c, err := chain.CreateStar(chain.CellsPath(dir, k), uint32(len(centre)))
			require.NoError(t, err)
			copy(c.Centre, centre)
			require.NoError(t, c.Publish(false))
			require.NoError(t, c.Close())
		}
	}
}

// simplex is a row of a simplex table.
type simplex struct {
	value    float64
	vertices []uint32
}

func simplices(t testing.TB, cells ...[]simplex) func(string) {
	return func(dir string) {
		for k, list := range cells {
			c, err := chain.CreateSimplices(chain.CellsPath(dir, k), uint32(len(list)), k)
			require.NoError(t, err)
			for i, s := range list {
				c.Values[i] = s.value
				copy(c.Vertices[i*(k+1):], s.vertices)
			}
			require.NoError(t, c.Publish(false))
			require.NoError(t, c.Close())
		}
	}
}

func counts[T any](cells ...[]T) (n []uint32) {
	for _, list := range cells {
		n = append(n, uint32(len(list)))
	}
	return n
}

// files runs Write and returns the text of pairs.csv and betti.csv.
func files(t testing.TB, job string, run *Run, keepZero bool) (pairs, betti string, s *Summary) {
	dst := t.TempDir()
	s, err := Write(t.Context(), job, dst, run, keepZero)
	require.NoError(t, err)
	entries, err := os.ReadDir(dst)
	require.NoError(t, err)
	require.Len(t, entries, len(Files), "nothing but the files")
	return text(t, dst, Files[0]), text(t, dst, Files[1]), s
}

func text(t testing.TB, dir, name string) string {
	b, err := os.ReadFile(filepath.Join(dir, name))
	require.NoError(t, err)
	return string(b)
}

const header = "degree,birth,death,birth_cell,death_cell\n"
