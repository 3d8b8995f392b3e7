package reduce

import (
	"context"
	"sync"
	"sync/atomic"

	"pairloom/sparse/block"
	"pairloom/sparse/column"
	"pairloom/sparse/guard"
)

// chunk is how many columns a goroutine takes at once: small enough that few
// evictions happen, large enough that taking costs nothing.
const chunk = 16

// Solve reduces the given columns of a block on this worker alone, with threads
// goroutines on one table, and returns mate: row → column that has it as pivot, or
// block.None. It is the whole of a recheck. Problem.Tiling is replaced by one tile.
func Solve(ctx context.Context, p Problem, columns func(yield func(j uint32) bool), threads int) (mate []uint32, counts Counts, err error) {
	rows, _ := p.Columns.Shape()
	p.Tiling, p.Self = Cut(rows, 1, 1), 0
	t := NewTable(&p)
	todo := make([]uint32, 0, 1024)
	columns(func(j uint32) bool { todo = append(todo, j); return true })
	ctx, cancel := context.WithCancelCause(ctx)
	defer cancel(nil)
	var next atomic.Int64
	var mu sync.Mutex
	var wg sync.WaitGroup
	for range max(threads, 1) {
		wg.Go(func() {
			h := t.NewHand()
			if err := guard.Run(func() error { return h.drain(ctx, todo, &next) }); err != nil {
				cancel(err)
			}
			mu.Lock()
			counts.Add(h.Counts())
			mu.Unlock()
		})
	}
	wg.Wait()
	if ctx.Err() != nil {
		return nil, counts, context.Cause(ctx)
	}
	mate = make([]uint32, rows)
	for r := range mate {
		mate[r] = block.None
	}
	t.Pivots(func(r, j uint32) { mate[r] = j })
	return mate, counts, nil
}

// drain takes chunks of columns until none is left.
func (h *Hand) drain(ctx context.Context, todo []uint32, next *atomic.Int64) error {
	for ctx.Err() == nil {
		from := next.Add(chunk) - chunk
		if from >= int64(len(todo)) {
			return nil
		}
		for _, j := range todo[from:min(from+chunk, int64(len(todo)))] {
			if err := h.OfferInitial(j); err != nil {
				return err
			}
		}
	}
	return context.Cause(ctx)
}

// Tamper makes every column that a hand stores or receives pass through f, which
// may damage it. Only tests call it.
func (h *Hand) Tamper(f func(*column.Column)) { h.tamper = f }
