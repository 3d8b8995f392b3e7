package server

import (
	"time"

	"pairloom/sparse/reduce"
	"pairloom/worker/exchange"
)

// Batches leave at batchBytes, after batchHold, or when their worker is idle.
const (
	batchBytes = 4 << 10
	batchHold  = time.Millisecond
	batchMost  = 1 << 20 // a batch grows to this while one is on its way
	postMax    = 64 << 20
)

// courier takes columns to one peer: one batch at a time, in order. What comes up
// while a batch is on its way goes with the next, so batches grow with the latency.
type courier struct {
	to       exchange.Peer
	bell     chan struct{} // rung when there may be something to do
	pending  []exchange.Item
	bytes    int // of pending, roughly as encoded
	flying   int // columns in the batch on its way
	hurry    bool
	sequence uint64
}

func newCourier(to exchange.Peer) *courier { return &courier{to: to, bell: make(chan struct{}, 1)} }

// post adds a column; the reduction's mutex is held.
func (c *courier) post(l reduce.Left) {
	c.pending = append(c.pending, exchange.Item{Tile: l.Tile, Column: l.Column})
	first := len(c.pending) == 1
	before := c.bytes
	c.bytes += l.Column.Bytes() + 16
	if first || before < batchBytes && c.bytes >= batchBytes {
		c.ring()
	}
}

func (c *courier) ring() {
	select {
	case c.bell <- struct{}{}:
	default:
	}
}

// load takes the next batch if one should leave: large enough, in a hurry, or overdue.
func (r *reduction) load(c *courier, overdue bool) (items []exchange.Item, wait, closed bool) {
	r.mu.Lock()
	defer r.mu.Unlock()
	switch {
	case r.closed:
		return nil, false, true
	case len(c.pending) == 0:
		return nil, false, false
	case c.bytes < batchBytes && !c.hurry && !overdue:
		return nil, true, false
	}
	n, size := 0, 0
	for n < len(c.pending) && size < batchMost {
		size += c.pending[n].Column.Bytes() + 16
		n++
	}
	items, c.pending = c.pending[:n:n], c.pending[n:]
	c.bytes -= size
	c.flying, c.sequence = n, c.sequence+1
	c.hurry = c.hurry && len(c.pending) > 0
	return items, false, false
}

// courier carries batches to one peer until the reduction is closed.
func (r *reduction) courier(c *courier) error {
	defer r.w.cpu.start(false)()
	hold := time.NewTimer(time.Hour)
	defer hold.Stop()
	overdue := false
	for {
		items, wait, closed := r.load(c, overdue)
		overdue = false
		switch {
		case closed:
			return nil
		case len(items) > 0:
			if err := r.carry(c, items); err != nil {
				return err
			}
			continue
		case wait:
			hold.Reset(batchHold)
		default:
			hold.Stop()
		}
		select {
		case <-c.bell:
		case <-hold.C:
			overdue = true
		case <-r.ctx.Done():
			return nil
		}
	}
}

func (r *reduction) carry(c *courier, items []exchange.Item) error {
	n, err := r.w.cfg.Carrier.Carry(r.ctx, c.to, exchange.Batch{Reduction: r.order.Reduction, From: int(r.order.Self),
		Attempt: r.order.Attempt, MapVersion: r.order.MapVersion, Sequence: c.sequence, Items: items})
	if err != nil {
		return err
	}
	r.mu.Lock()
	defer r.mu.Unlock()
	c.flying = 0
	r.bytes += n
	r.wake.Broadcast() // a full post may have room again
	if r.queue.Idle() && r.outstanding() == 0 {
		r.ask()
	}
	return nil
}
