//go:build pari

package checks

import (
	"context"
	"fmt"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/coordinator/cmd/inprocess"
	"pairloom/coordinator/server"
	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
	"pairloom/sparse/stage"
)

// The number of pairs of a block is its rank over Z/2; PARI/GP finds the same, from the
// blocks that the job published. Run with -tags pari where gp is installed.
func TestRanksAgainstPARI(t *testing.T) {
	for _, name := range []string{"torus_7", "klein_8", "rp2_6", "moore_3", "rp3_11", "lens_3_1_12", "cp2_9", "rp4_16", "poincare_16", "dunce_hat_8"} {
		job := t.TempDir()
		run, err := inprocess.Run(context.Background(), inprocess.Config{Version: "test", Workers: 1, Threads: 2},
			server.Job{Name: "pari", Folder: job, Spec: source.Spec{Kind: source.Facets, Inputs: []string{filepath.Join("testdata/triangulations", name+".csv")}, Degrees: -1}}, nil)
		require.NoError(t, err)
		var script, want strings.Builder
		for _, b := range run.Blocks {
			m, err := chain.OpenBlock(stage.Order(job), b.Degree, false)
			require.NoError(t, err)
			script.WriteString(matrix(m))
			fmt.Fprintln(&want, b.Rank)
			require.NoError(t, m.Close())
		}
		gp := exec.Command("gp", "-q", "-f", "-s", "512M")
		gp.Stdin = strings.NewReader(script.String())
		out, err := gp.Output()
		require.NoError(t, err)
		require.Equal(t, want.String(), string(out), name)
	}
}

// matrix is a line of GP that prints the rank of a block mod 2.
func matrix(m *block.Matrix) string {
	var b strings.Builder
	fmt.Fprintf(&b, "m=matrix(%d,%d);\n", m.Rows, m.Cols)
	for j := range m.Cols {
		for _, r := range m.Column(j, nil) {
			fmt.Fprintf(&b, "m[%d,%d]=1;\n", r+1, j+1)
		}
	}
	return b.String() + "print(matrank(m*Mod(1,2)));\n"
}
