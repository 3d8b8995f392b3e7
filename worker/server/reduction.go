package server

import (
	"context"
	"fmt"
	"slices"
	"sync"
	"time"

	"github.com/RoaringBitmap/roaring/v2"

	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/block"
	"pairloom/sparse/column"
	"pairloom/sparse/evidence"
	"pairloom/sparse/guard"
	"pairloom/sparse/reduce"
	"pairloom/sparse/stage"
	"pairloom/worker/exchange"
	"pairloom/worker/task"
	"pairloom/worker/tile"
)

// lotSize is how many columns a goroutine takes at once: more evict more often,
// fewer meet at the queue's mutex.
const lotSize = 16

// reduction is one block on this worker: its share of the pivots, the columns that
// wait, and the goroutines that work.
type reduction struct {
	w       *Worker
	order   *pb.Reduction
	problem reduce.Problem
	table   *reduce.Table
	matrix  *block.Matrix
	survey  *stage.Survey
	dropped uint64
	ctx     context.Context
	cancel  context.CancelCauseFunc
	begun   chan struct{}
	once    sync.Once

	mu       sync.Mutex // guards all below
	wake     *sync.Cond
	queue    *tile.Queue
	in       []place // by place: senders
	out      []*courier
	zeros    []uint32
	counts   reduce.Counts
	got      uint64 // columns received
	bytes    uint64 // sent over the wire
	probe    uint64
	closed   bool
	reportCh chan struct{}
}

// place is what is known of one sender: the last sequence number taken.
type place struct{ last uint64 }

// reduce opens a reduction, works until it is closed, and publishes its results.
func (w *Worker) reduce(ctx context.Context, o *pb.Reduction) error {
	r := &reduction{w: w, order: o, begun: make(chan struct{}), reportCh: make(chan struct{}, 1)}
	r.wake = sync.NewCond(&r.mu)
	r.ctx, r.cancel = context.WithCancelCause(ctx)
	defer r.cancel(nil)
	defer r.release()
	end := w.cpu.start(false)
	columns, err := r.open()
	end()
	if err != nil {
		return err
	}
	w.mu.Lock()
	w.reductions[o.Reduction] = r
	w.mu.Unlock()
	defer func() {
		w.mu.Lock()
		delete(w.reductions, o.Reduction)
		w.mu.Unlock()
	}()
	if err := w.send(&pb.Report{Body: &pb.Report_Ready{Ready: &pb.Ready{Reduction: o.Reduction, Columns: columns, RowsDropped: r.dropped}}}); err != nil {
		return err
	}
	select {
	case <-r.begun:
	case <-r.ctx.Done():
		return context.Cause(r.ctx)
	}
	if err := r.run(); err != nil {
		return err
	}
	return r.finish()
}

func (r *reduction) turned() bool { return r.order.Route == pb.Route_ROUTE_COBOUNDARY }

// open maps the block and its survey, fixes the masks, makes the table and queues
// the initial columns of the own tiles; it returns how many there are.
func (r *reduction) open() (columns uint64, err error) {
	o := r.order
	if r.matrix, err = block.Open(stage.MatrixPath(o.Folder, int(o.Degree), r.turned()), true); err != nil {
		return 0, err
	}
	if o.TileHeight == 0 || r.matrix.Rows != o.Rows {
		return 0, fmt.Errorf("worker: block %d has %d rows, the coordinator says %d", o.Degree, r.matrix.Rows, o.Rows)
	}
	rest, err := r.openSurvey()
	if err != nil {
		return 0, err
	}
	known, err := task.Masks(o.Folder, o.Degree, o.Masks)
	if err != nil {
		return 0, err
	}
	cleared := known.Births
	r.problem = reduce.Problem{Columns: r.matrix, Dropped: known.Deaths, Seed: o.Seed, Self: int(o.Self), Form: column.Form(o.Form),
		Tiling: reduce.Tiling{Rows: o.Rows, Height: o.TileHeight, Tiles: int(o.Tiles), Workers: len(o.Crew)}}
	if r.survey != nil {
		r.problem.Apparent = r.survey.PivotOf
	}
	r.dropped = known.Deaths.Count()
	if r.turned() { // turned blocks have no dropped entries any more
		cleared, r.problem.Dropped, r.dropped = task.Mirrored(known.Deaths, r.matrix.Cols), nil, known.Births.Count()
	}
	r.table = reduce.NewTable(&r.problem)
	r.queue = tile.NewQueue(r.problem.Tiling, int(o.Self))
	r.in = make([]place, len(o.Crew))
	for p := range o.Crew {
		r.out = append(r.out, newCourier(exchange.Peer{Place: p, Crew: o.Crew[p], Address: o.Peers[p]}))
	}
	return r.seed(rest, cleared), nil
}

// openSurvey returns the columns that no apparent pair settles.
func (r *reduction) openSurvey() (*roaring.Bitmap, error) {
	o := r.order
	if !o.UseApparent {
		all := roaring.New()
		all.AddRange(0, uint64(r.matrix.Cols))
		return all, nil
	}
	var err error
	r.survey, err = stage.OpenSurvey(stage.SurveyPath(o.Folder, int(o.Degree), r.turned()), r.matrix.Rows, r.matrix.Cols)
	if err != nil {
		return nil, err
	}
	return r.survey.Residual, nil
}

// seed queues the initial columns whose pivot is owned here; empty ones go to the
// owner of the lowest tile.
func (r *reduction) seed(rest *roaring.Bitmap, cleared column.Bits) (n uint64) {
	p := &r.problem
	it := rest.Iterator()
	var buf []uint32
	for it.HasNext() {
		j := it.Next()
		if cleared.Has(j) {
			continue
		}
		at := 0
		if row, ok := p.FirstPivot(j, buf); ok {
			at = p.Tiling.Tile(row)
		}
		if p.Tiling.Owner(at) != p.Self {
			continue
		}
		for range r.copies(j) {
			r.queue.Start(at, j)
			n++
		}
	}
	return n
}

func (r *reduction) copies(j uint32) int {
	if f := r.w.cfg.Faults; f != nil {
		return f.Initial(j)
	}
	return 1
}

func (r *reduction) release() {
	if r.survey != nil {
		r.survey.Close()
	}
	if r.matrix != nil {
		r.matrix.Close()
	}
}

func (r *reduction) begin() { r.once.Do(func() { close(r.begun) }) }

// run starts hands, couriers and the reporter, and waits for all of them.
func (r *reduction) run() error {
	var wg sync.WaitGroup
	start := func(f func() error) {
		wg.Go(func() {
			if err := guard.Run(f); err != nil {
				r.fail(err)
			}
		})
	}
	stop := context.AfterFunc(r.ctx, func() { r.mu.Lock(); r.wake.Broadcast(); r.mu.Unlock() })
	defer stop()
	for range max(r.order.Threads, 1) {
		start(r.hand)
	}
	for p, c := range r.out {
		if p != int(r.order.Self) {
			start(func() error { return r.courier(c) })
		}
	}
	start(r.reporter)
	wg.Wait()
	if r.ctx.Err() != nil {
		return context.Cause(r.ctx)
	}
	return nil
}

func (r *reduction) fail(err error) { r.cancel(err) }

// hand takes lots and reduces them until the reduction is closed.
func (r *reduction) hand() error {
	defer r.w.cpu.start(false)()
	h := r.table.NewHand()
	if f := r.w.cfg.Faults; f != nil {
		h.Tamper(f.Column)
	}
	defer func() {
		r.mu.Lock()
		r.counts.Add(h.Counts())
		r.mu.Unlock()
	}()
	for {
		lot, ok := r.take()
		if !ok {
			return nil
		}
		for _, j := range lot.Initial {
			if err := h.OfferInitial(j); err != nil {
				return err
			}
		}
		for _, c := range lot.Arrived {
			if err := h.Offer(c); err != nil {
				return err
			}
		}
		if err := r.end(lot, h); err != nil {
			return err
		}
	}
}

// take waits for a lot; false when the reduction is closed or cancelled.
func (r *reduction) take() (tile.Lot, bool) {
	r.mu.Lock()
	defer r.mu.Unlock()
	for {
		if r.closed || r.ctx.Err() != nil {
			return tile.Lot{}, false
		}
		if lot, ok := r.queue.Take(lotSize); ok {
			return lot, true
		}
		r.wake.Wait()
	}
}

// end gives back a lot: its zeros are recorded and its leaving columns posted in the
// same instant in which it stops being in work. It waits while a peer's post is full.
func (r *reduction) end(lot tile.Lot, h *reduce.Hand) error {
	left, zeros := h.TakeLeft(), h.TakeZeros()
	if f := r.w.cfg.Faults; f != nil {
		var kept []uint32
		for _, j := range zeros {
			kept = append(kept, slices.Repeat([]uint32{j}, f.Zero(j))...)
		}
		zeros = kept
	}
	r.mu.Lock()
	defer r.mu.Unlock()
	for _, l := range left {
		r.out[r.problem.Tiling.Owner(l.Tile)].post(l)
	}
	r.queue.Finish(lot, left)
	r.zeros = append(r.zeros, zeros...)
	if r.queue.Idle() {
		r.flush()
		r.ask()
	}
	for r.full() && r.ctx.Err() == nil {
		r.wake.Wait()
	}
	return nil
}

func (r *reduction) full() bool {
	for _, c := range r.out {
		if c.bytes > postMax {
			return true
		}
	}
	return false
}

// flush lets couriers leave with what they have, as nothing more will come soon.
func (r *reduction) flush() {
	for _, c := range r.out {
		if len(c.pending) > 0 {
			c.hurry = true
			c.ring()
		}
	}
}

// ask has the reporter send the counters; it needs the mutex.
func (r *reduction) ask() {
	select {
	case r.reportCh <- struct{}{}:
	default:
	}
}

// outstanding is the number of columns sent that no peer has taken yet.
func (r *reduction) outstanding() (n uint64) {
	for _, c := range r.out {
		n += uint64(len(c.pending) + c.flying)
	}
	return n
}

// receive takes a batch: it always accepts, so that peers never wait for work here.
func (r *reduction) receive(b exchange.Batch) error {
	r.mu.Lock()
	defer r.mu.Unlock()
	if b.Attempt != r.order.Attempt || b.MapVersion != r.order.MapVersion || b.From < 0 || b.From >= len(r.in) {
		return fmt.Errorf("worker: a batch of attempt %d, map %d, from place %d does not belong to reduction %d", b.Attempt, b.MapVersion, b.From, b.Reduction)
	}
	from := &r.in[b.From]
	switch {
	case b.Sequence <= from.last:
		return nil // sent again after a broken stream
	case b.Sequence != from.last+1:
		return fmt.Errorf("worker: batch %d from place %d came after batch %d", b.Sequence, b.From, from.last)
	}
	from.last = b.Sequence
	for _, it := range b.Items {
		if err := r.queue.Arrive(it.Tile, it.Column); err != nil {
			return err
		}
	}
	r.got += uint64(len(b.Items))
	r.wake.Broadcast()
	return nil
}

func (r *reduction) probed(n uint64) {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.probe = n
	r.ask()
}

func (r *reduction) close() {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.closed = true
	r.wake.Broadcast()
	for _, c := range r.out {
		c.ring()
	}
	r.ask()
}

// Counters are sent when asked for, at most every reportGap, and now and then for progress.
const (
	reportGap   = time.Millisecond
	reportEvery = 250 * time.Millisecond
)

// reporter sends the counters to the coordinator.
func (r *reduction) reporter() error {
	tick := time.NewTicker(reportEvery)
	defer tick.Stop()
	r.mu.Lock()
	r.ask()
	r.mu.Unlock()
	for {
		select {
		case <-r.reportCh:
		case <-tick.C:
		case <-r.ctx.Done():
			return nil
		}
		report, closed := r.counters()
		if closed {
			return nil
		}
		if err := r.w.send(&pb.Report{Body: &pb.Report_Counters{Counters: report}}); err != nil {
			return err
		}
		if len(r.order.Crew) > 1 {
			pause(r.ctx, reportGap)
		}
	}
}

func pause(ctx context.Context, d time.Duration) {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
	case <-ctx.Done():
	}
}

func (r *reduction) counters() (report *pb.Counters, closed bool) {
	r.mu.Lock()
	defer r.mu.Unlock()
	c := r.queue.Counters()
	return &pb.Counters{Reduction: r.order.Reduction, Probe: r.probe, Received: c.Received, Sent: c.Sent, Empty: c.Empty,
		Outstanding: r.outstanding(), Settled: c.Finished}, r.closed
}

// finish publishes what the own tiles came to and reports it.
func (r *reduction) finish() error {
	defer r.w.cpu.start(false)()
	if !r.queue.Idle() || r.outstanding() > 0 {
		return &evidence.Broken{Check: "columns received", Degree: int(r.order.Degree), Why: "columns were at work when every tile was said to be done"}
	}
	rows := make([]uint32, 0, r.counts.Settled)
	cols := make([]uint32, 0, r.counts.Settled)
	r.table.Pivots(func(row, col uint32) { rows, cols = append(rows, row), append(cols, col) })
	o := r.order
	path := stage.TilesPath(o.Folder, int(o.Degree), o.Attempt, o.Self)
	if err := stage.WriteTiles(path, rows, cols, r.zeros); err != nil {
		return err
	}
	if r.ctx.Err() != nil {
		return context.Cause(r.ctx)
	}
	tiles := 0
	for t := range r.problem.Tiling.Tiles {
		if r.problem.Tiling.Owner(t) == r.problem.Self {
			tiles++
		}
	}
	return r.w.send(&pb.Report{Body: &pb.Report_Finished{Finished: &pb.Finished{Reduction: o.Reduction, File: path,
		Settled: uint64(len(rows)), Zero: uint64(len(r.zeros)), Additions: r.counts.Additions, Evictions: r.counts.Evictions,
		SentColumns: r.counts.Left, ReceivedColumns: r.got, SentBytes: r.bytes, CpuSeconds: r.w.cpu.seconds(), PeakBytes: peak(), Tiles: uint32(tiles)}}})
}
