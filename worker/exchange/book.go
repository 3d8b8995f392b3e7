package exchange

import "fmt"

// Outbox is what one worker has for one peer in one reduction: columns that wait,
// in order, and the one batch that is under way. A batch stays as it is, with its
// sequence number, until it is acknowledged, so it may be sent any number of times.
// Not safe for concurrent use.
type Outbox struct {
	from       int
	reduction  uint64
	attempt    uint32
	mapVersion uint32

	pending  []Item
	bytes    int // of pending, by Size
	underway []Item
	sequence uint64 // of the batch under way, or of the last acknowledged
}

// NewOutbox makes the empty outbox of the worker at place from.
func NewOutbox(reduction uint64, from int, attempt, mapVersion uint32) *Outbox {
	return &Outbox{from: from, reduction: reduction, attempt: attempt, mapVersion: mapVersion}
}

// Size is what a column counts in bytes when batches are cut: its slices and what
// goes before them. On the wire it is mostly smaller, and never more than twice that.
func Size(it *Item) int { return 24 + it.Column.Bytes() }

// Add puts columns behind those that wait. The slices are kept, not copied.
func (o *Outbox) Add(items ...Item) {
	for i := range items {
		o.bytes += Size(&items[i])
	}
	o.pending = append(o.pending, items...)
}

// Pending is how many columns wait to be cut into a batch, and their bytes by Size.
func (o *Outbox) Pending() (columns, bytes int) { return len(o.pending), o.bytes }

// Unacknowledged is how many columns the peer is not known to have: waiting or under way.
func (o *Outbox) Unacknowledged() int { return len(o.pending) + len(o.underway) }

// Next returns the batch to send: the one under way, again, or else as many waiting
// columns as have bytesMost bytes by Size together, at least one. False: nothing to send.
func (o *Outbox) Next(bytesMost int) (Batch, bool) {
	if o.underway == nil {
		o.cut(bytesMost)
	}
	return Batch{Reduction: o.reduction, From: o.from, Attempt: o.attempt, MapVersion: o.mapVersion,
		Sequence: o.sequence, Items: o.underway}, o.underway != nil
}

func (o *Outbox) cut(bytesMost int) {
	if len(o.pending) == 0 {
		return
	}
	n, bytes := 0, 0
	for ; n < len(o.pending); n++ {
		size := Size(&o.pending[n])
		if n > 0 && bytes+size > bytesMost {
			break
		}
		bytes += size
	}
	o.underway, o.pending = o.pending[:n:n], o.pending[n:]
	o.bytes -= bytes
	o.sequence++
	if len(o.pending) == 0 {
		o.pending = nil
	}
}

// Acknowledge takes the peer's word that it has the batch of that number. An older
// number is the echo of a batch sent twice, and changes nothing.
func (o *Outbox) Acknowledge(sequence uint64) error {
	if sequence > o.sequence || sequence == 0 {
		return fmt.Errorf("exchange: batch %d was acknowledged, but the last one sent is %d", sequence, o.sequence)
	}
	if sequence == o.sequence {
		o.underway = nil
	}
	return nil
}

// Inbox is what one worker has seen of one sender in one reduction: it tells what is
// new from what came twice. The zero sequence number is that of nothing. Not safe for
// concurrent use.
type Inbox struct {
	attempt    uint32
	mapVersion uint32
	last       uint64 // sequence number taken last
}

// NewInbox makes the inbox for batches of one attempt and tile map.
func NewInbox(attempt, mapVersion uint32) *Inbox {
	return &Inbox{attempt: attempt, mapVersion: mapVersion}
}

// Take says whether a batch is new and must be taken in now; false with no error
// means that it was taken before. Errors: a batch of another attempt or map, and a
// gap, which no re-sending can give.
func (i *Inbox) Take(b *Batch) (bool, error) {
	switch {
	case b.Attempt != i.attempt || b.MapVersion != i.mapVersion:
		return false, fmt.Errorf("exchange: a batch of attempt %d, map %d came to attempt %d, map %d", b.Attempt, b.MapVersion, i.attempt, i.mapVersion)
	case b.Sequence == 0 || b.Sequence > i.last+1:
		return false, fmt.Errorf("exchange: batch %d came from place %d after batch %d", b.Sequence, b.From, i.last)
	case b.Sequence <= i.last:
		return false, nil
	}
	i.last = b.Sequence
	return true, nil
}
