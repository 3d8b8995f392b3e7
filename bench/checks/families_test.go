package checks

import (
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/coordinator/plan"
	"pairloom/sparse/gen"
	"pairloom/sparse/source"
)

// Matching and chessboard complexes as chains of Matrix Market files: Betti numbers over
// Z/2. Sources: over Q Bouc 1992 (matching), Friedman and Hanlon 1998 (chessboard); over
// Z/2 ranks by PARI and by an elimination apart from this project. The 7 × 8 board has
// 2-torsion: over Q its fourth Betti number is 0.
func TestFamiliesAsMatrices(t *testing.T) {
	for _, c := range []struct {
		name    string
		complex *gen.Filtered
		betti   []int
	}{
		{"matching 9", gen.Matching(9), []int{1, 0, 42, 70}},
		{"matching 11", gen.Matching(11), []int{1, 0, 0, 1188, 252}},
		{"matching 10", gen.Matching(10), []int{1, 0, 0, 1216, 0}},
		{"chessboard 5x5", gen.Chessboard(5, 5), []int{1, 0, 0, 56, 0}},
		{"chessboard 6x6", gen.Chessboard(6, 6), []int{1, 0, 0, 25, 210, 0}},
		{"chessboard 7x8", gen.Chessboard(7, 8), []int{1, 0, 0, 0, 8, 7850, 1}},
	} {
		files, err := gen.WriteMarket(t.TempDir(), "d", c.complex.Boundary)
		require.NoError(t, err)
		for _, o := range []plan.Options{{Spread: true}, {Form: "lists", Route: "auto"}} {
			_, betti := reduce(t, source.Spec{Kind: source.Matrix, Inputs: files, Degrees: -1}, o)
			require.Equal(t, c.betti, betti, c.name)
		}
	}
}
