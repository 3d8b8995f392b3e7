// Package tile keeps the columns that wait on one worker, by tile, and the counters
// from which the coordinator works out that a tile is done. A pure state machine:
// no goroutine, clock or socket; the shell guards it with one mutex.
//
// A column that waits belongs to the tile of its pivot. Work is dealt out in lots:
// from the highest tile that has any, smallest column index first. A lot counts
// as in work in the tile it was taken from until it is finished, also when its
// columns, or columns they evicted, have fallen to lower tiles meanwhile: so a tile
// is never called empty too early, and its counters never go back.
package tile

import (
	"container/heap"
	"fmt"

	"pairloom/sparse/column"
	"pairloom/sparse/reduce"
)

// Lot is a handful of columns of one tile, to be reduced by one goroutine.
type Lot struct {
	Tile    int
	Initial []uint32        // columns as the block has them
	Arrived []column.Column // copies that other workers sent
}

// Queue is one worker's tiles of one reduction.
type Queue struct {
	tiling   reduce.Tiling
	self     int
	waiting  []waiting // by tile
	top      int       // no tile above has anything waiting
	busy     []int     // lots in work, by tile
	received []uint64  // columns received from other workers, by tile
	sent     []uint64  // columns finished here that left for a tile elsewhere
	finished uint64    // columns that ended here
	waitingN uint64
	busyN    int
}

type waiting struct {
	initial []uint32 // ascending
	arrived arrivals
}

// arrivals is a heap by column index.
type arrivals []column.Column

func (a arrivals) Len() int           { return len(a) }
func (a arrivals) Less(i, j int) bool { return a[i].Index < a[j].Index }
func (a arrivals) Swap(i, j int)      { a[i], a[j] = a[j], a[i] }
func (a *arrivals) Push(x any)        { *a = append(*a, x.(column.Column)) }
func (a *arrivals) Pop() any {
	last := len(*a) - 1
	x := (*a)[last]
	(*a)[last] = column.Column{}
	*a = (*a)[:last]
	return x
}

// NewQueue makes the empty queue of worker self.
func NewQueue(t reduce.Tiling, self int) *Queue {
	return &Queue{tiling: t, self: self, waiting: make([]waiting, t.Tiles), busy: make([]int, t.Tiles),
		received: make([]uint64, t.Tiles), sent: make([]uint64, t.Tiles), top: -1}
}

// Start adds an initial column to an own tile; columns must come in ascending order.
func (q *Queue) Start(tile int, j uint32) {
	q.waiting[tile].initial = append(q.waiting[tile].initial, j)
	q.waitingN++
	q.top = max(q.top, tile)
}

// Arrive adds a column that another worker sent to a tile that lives here.
func (q *Queue) Arrive(tile int, c column.Column) error {
	if tile < 0 || tile >= q.tiling.Tiles || q.tiling.Owner(tile) != q.self {
		return fmt.Errorf("tile: column %d came for tile %d, which does not live here", c.Index, tile)
	}
	q.received[tile]++
	q.waitingN++
	heap.Push(&q.waiting[tile].arrived, c)
	q.top = max(q.top, tile)
	return nil
}

// Take deals a lot of at most most columns, from the highest tile, smallest index
// first; false if nothing waits.
func (q *Queue) Take(most int) (Lot, bool) {
	for q.top >= 0 && len(q.waiting[q.top].initial) == 0 && len(q.waiting[q.top].arrived) == 0 {
		q.top--
	}
	if q.top < 0 {
		return Lot{}, false
	}
	lot, w := Lot{Tile: q.top}, &q.waiting[q.top]
	for range most {
		if len(w.arrived) > 0 && (len(w.initial) == 0 || w.arrived[0].Index < w.initial[0]) {
			lot.Arrived = append(lot.Arrived, heap.Pop(&w.arrived).(column.Column))
		} else if len(w.initial) > 0 {
			lot.Initial = append(lot.Initial, w.initial[0])
			w.initial = w.initial[1:]
		} else {
			break
		}
	}
	q.waitingN -= uint64(len(lot.Initial) + len(lot.Arrived))
	q.busy[lot.Tile]++
	q.busyN++
	return lot, true
}

// Finish ends a lot: left are the columns that go to tiles elsewhere, which are
// counted as sent at the same instant as the lot stops being in work.
func (q *Queue) Finish(lot Lot, left []reduce.Left) {
	for _, l := range left {
		q.sent[l.Tile]++
	}
	q.finished += uint64(len(lot.Initial) + len(lot.Arrived) - len(left))
	q.busy[lot.Tile]--
	q.busyN--
}

// Waiting returns how many columns wait; Idle whether nothing waits or is in work.
func (q *Queue) Waiting() uint64 { return q.waitingN }

// Idle is described at Waiting.
func (q *Queue) Idle() bool { return q.waitingN == 0 && q.busyN == 0 }

// Counters is the state of a worker's tiles at one instant; slices by tile.
type Counters struct {
	Received, Sent []uint64
	Empty          []byte // 1: an own tile with nothing waiting or in work
	Finished       uint64
}

// Counters takes the counters.
func (q *Queue) Counters() Counters {
	c := Counters{Received: append([]uint64(nil), q.received...), Sent: append([]uint64(nil), q.sent...),
		Empty: make([]byte, q.tiling.Tiles), Finished: q.finished}
	for t := range c.Empty {
		w := &q.waiting[t]
		if q.tiling.Owner(t) == q.self && len(w.initial) == 0 && len(w.arrived) == 0 && q.busy[t] == 0 {
			c.Empty[t] = 1
		}
	}
	return c
}

// Check verifies the queue's bookkeeping; for tests.
func (q *Queue) Check() error {
	n, busy := uint64(0), 0
	for t := range q.waiting {
		w := &q.waiting[t]
		n += uint64(len(w.initial) + len(w.arrived))
		busy += q.busy[t]
		if q.busy[t] < 0 || (q.tiling.Owner(t) != q.self && (len(w.initial)+len(w.arrived)+q.busy[t] > 0 || q.received[t] > 0)) {
			return fmt.Errorf("tile: tile %d of another worker has columns here", t)
		}
		if t > q.top && len(w.initial)+len(w.arrived) > 0 {
			return fmt.Errorf("tile: tile %d waits above the top %d", t, q.top)
		}
	}
	if n != q.waitingN || busy != q.busyN {
		return fmt.Errorf("tile: %d columns wait but %d are counted; %d lots in work but %d are counted", n, q.waitingN, busy, q.busyN)
	}
	return nil
}
