// Package exchange is how tiles hand columns to each other: batches with sequence
// numbers, their compact encoding, and the bookkeeping that makes a column arrive
// exactly once. Pure: no sockets, no clock, no goroutines.
package exchange

import (
	"context"

	"pairloom/sparse/column"
)

// Item is a column on its way to a tile.
type Item struct {
	Tile   int
	Column column.Column
}

// Batch is what one worker hands to another at once. Items are read-only slices
// that the sender never writes again.
type Batch struct {
	Reduction  uint64
	From       int // place of the sender among the workers of the reduction
	Attempt    uint32
	MapVersion uint32
	Sequence   uint64 // 1, 2, 3 … for each sender, receiver and reduction
	Items      []Item
}

// Peer is where a batch goes.
type Peer struct {
	Place   int
	Crew    uint32 // number in the coordinator's crew: finds the peer in one process
	Address string // HOST:PORT: finds it over a network
}

// Carrier takes batches to peers. Carry returns when the receiver has taken the
// batch, with the bytes that went over the wire (0 in one process), or fails for
// good; it may be called from several goroutines for different peers, and from one
// at a time for one peer of one reduction.
type Carrier interface {
	Carry(ctx context.Context, to Peer, b Batch) (bytes uint64, err error)
}

// Receiver takes a batch that arrived. It always accepts what belongs to a running
// reduction: it never waits for work to be done, so peers cannot block each other.
// A duplicate (sequence number already taken) is accepted and dropped; a gap,
// another attempt or map version is an error.
type Receiver interface {
	Receive(b Batch) error
}
