package line

import (
	"errors"
	"fmt"
	"io/fs"
	"testing"

	"github.com/stretchr/testify/require"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"

	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

// Every exit code of the contract crosses the wire and comes back as it was.
func TestExitCodesCrossTheWire(t *testing.T) {
	for _, n := range []int{1, 64, 65, 66, 69, 70, 71, 73, 74, 75, 76, 77} {
		err := Error(Status(exit.With(n, errors.New("why"))))
		require.Equal(t, n, exit.Code(err))
		require.EqualError(t, err, "why")
	}
	require.NoError(t, Status(nil))
	require.NoError(t, Error(nil))
	require.Equal(t, exit.BadInput, exit.Code(Error(Status(source.Broken("a.csv", 7, "no number")))))
	require.Equal(t, exit.NoInput, exit.Code(Error(Status(fmt.Errorf("a: %w", fs.ErrNotExist)))))
}

func TestWhatGRPCRaisesHasACode(t *testing.T) {
	for code, n := range map[codes.Code]int{codes.Unavailable: 69, codes.Canceled: 75, codes.Unimplemented: 76, codes.DataLoss: 70, codes.ResourceExhausted: 70} {
		require.Equal(t, n, exit.Code(Error(status.Error(code, "x"))), code.String())
	}
	require.Equal(t, exit.Internal, exit.Code(Error(errors.New("not a status"))))
}

func TestAnAddressNeedsAPort(t *testing.T) {
	_, err := Dial("somewhere")
	require.Equal(t, exit.Usage, exit.Code(err))
	c, err := Dial("localhost:1")
	require.NoError(t, err)
	require.NoError(t, c.Close())
}
