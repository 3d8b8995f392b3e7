package exchange

import (
	"testing"

	"github.com/stretchr/testify/require"
	"pgregory.net/rapid"

	"pairloom/sparse/column"
)

func item(index uint32, entries int) Item {
	return Item{Tile: 1, Column: column.Column{Index: index, Rows: make([]uint32, entries)}}
}

func TestOutboxCutsBySize(t *testing.T) {
	o := NewOutbox(9, 2, 1, 3)
	_, ok := o.Next(1000)
	require.False(t, ok)
	o.Add(item(1, 10), item(2, 10), item(3, 5000), item(4, 1))
	n, bytes := o.Pending()
	require.Equal(t, 4, n)
	require.Equal(t, 4*24+4*5021, bytes)

	b, ok := o.Next(128)
	require.True(t, ok)
	require.Equal(t, Batch{Reduction: 9, From: 2, Attempt: 1, MapVersion: 3, Sequence: 1, Items: b.Items}, b)
	require.Len(t, b.Items, 2)
	o.Add(item(5, 1))
	again, _ := o.Next(1 << 20)
	require.Equal(t, b, again, "the batch under way stays as it is")
	require.Equal(t, 5, o.Unacknowledged())

	require.NoError(t, o.Acknowledge(1))
	b, _ = o.Next(128)
	require.Len(t, b.Items, 1, "a column larger than the limit goes alone")
	require.Equal(t, uint64(2), b.Sequence)
	require.NoError(t, o.Acknowledge(1), "an echo")
	require.Equal(t, 3, o.Unacknowledged())
	require.NoError(t, o.Acknowledge(2))
	b, _ = o.Next(128)
	require.Len(t, b.Items, 2)
	require.NoError(t, o.Acknowledge(3))
	require.Error(t, o.Acknowledge(4))
	require.Error(t, o.Acknowledge(0))
	require.Zero(t, o.Unacknowledged())
	n, bytes = o.Pending()
	require.Zero(t, n)
	require.Zero(t, bytes)
}

func TestInboxRefusesGapsAndOtherAttempts(t *testing.T) {
	in := NewInbox(2, 5)
	take := func(attempt, mapVersion uint32, sequence uint64) (bool, error) {
		return in.Take(&Batch{Attempt: attempt, MapVersion: mapVersion, Sequence: sequence})
	}
	fresh, err := take(2, 5, 1)
	require.True(t, fresh)
	require.NoError(t, err)
	fresh, err = take(2, 5, 1)
	require.False(t, fresh, "a duplicate")
	require.NoError(t, err)
	for _, bad := range [][3]uint64{{2, 5, 3}, {2, 5, 0}, {1, 5, 2}, {3, 5, 2}, {2, 4, 2}} {
		fresh, err = take(uint32(bad[0]), uint32(bad[1]), bad[2])
		require.False(t, fresh)
		require.Error(t, err)
	}
	fresh, err = take(2, 5, 2)
	require.True(t, fresh, "refused batches change nothing")
	require.NoError(t, err)
}

// A line that loses batches, loses acknowledgements, repeats batches and breaks: every
// column arrives exactly once, in order.
func TestEveryColumnArrivesOnce(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		out, in := NewOutbox(1, 0, 1, 1), NewInbox(1, 1)
		var line []Batch // on their way, in order
		var acks []uint64
		var arrived []uint32
		added := uint32(0)
		receive := func() {
			b := line[0]
			line = line[1:]
			fresh, err := in.Take(&b)
			require.NoError(t, err)
			for _, it := range b.Items {
				if fresh {
					arrived = append(arrived, it.Column.Index)
				}
			}
			acks = append(acks, b.Sequence)
		}
		send := func() {
			if b, ok := out.Next(200); ok {
				line = append(line, b)
			}
		}
		t.Repeat(map[string]func(*rapid.T){
			"add": func(t *rapid.T) {
				for range rapid.IntRange(1, 5).Draw(t, "n") {
					out.Add(item(added, rapid.IntRange(1, 60).Draw(t, "entries")))
					added++
				}
			},
			"send": func(*rapid.T) { send() },
			"receive": func(t *rapid.T) {
				if len(line) > 0 {
					receive()
				}
			},
			"acknowledge": func(t *rapid.T) {
				if len(acks) > 0 {
					require.NoError(t, out.Acknowledge(acks[0]))
					acks = acks[1:]
				}
			},
			"break": func(*rapid.T) { line, acks = nil, nil },
			"repeat": func(*rapid.T) {
				if len(line) > 0 {
					line = append(line, line[len(line)-1])
				}
			},
			"": func(t *rapid.T) {
				require.LessOrEqual(t, len(arrived), int(added))
				require.GreaterOrEqual(t, len(arrived)+out.Unacknowledged(), int(added), "no column is nowhere")
			},
		})
		for out.Unacknowledged() > 0 {
			send()
			for len(line) > 0 {
				receive()
			}
			for _, a := range acks {
				require.NoError(t, out.Acknowledge(a))
			}
			acks = nil
		}
		require.Len(t, arrived, int(added))
		for i, a := range arrived {
			require.Equal(t, uint32(i), a)
		}
	})
}
