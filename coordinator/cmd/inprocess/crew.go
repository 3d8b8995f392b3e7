// Package inprocess runs a coordinator and its workers in one process: links are
// channels, and columns are handed to a peer by a call, so nothing is serialised.
// It is how `reduce` works, and how tests run whole jobs.
package inprocess

import (
	"context"
	"fmt"
	"io"
	"sync"

	"pairloom/coordinator/report"
	coordinator "pairloom/coordinator/server"
	pb "pairloom/proto/pairloomv1"
	"pairloom/worker/exchange"
	worker "pairloom/worker/server"
)

// Config says how many workers there are, and how many goroutines they share.
type Config struct {
	Version string
	Workers int           // at least 1
	Threads int           // over all workers; each gets at least 1
	Faults  worker.Faults // nil but in tests
	// Wrap replaces the carrier, for tests; nil: none.
	Wrap func(exchange.Carrier) exchange.Carrier
}

// Run runs one job on a crew of its own and returns when all its goroutines have.
func Run(ctx context.Context, cfg Config, job coordinator.Job, watch func(coordinator.State)) (*report.Run, error) {
	ctx, cancel := context.WithCancel(ctx)
	c := coordinator.New(coordinator.Config{Version: cfg.Version})
	var wg sync.WaitGroup
	defer wg.Wait()
	defer cancel()
	carrier := &byCall{peers: map[uint32]exchange.Receiver{}}
	wrapped := exchange.Carrier(carrier)
	if cfg.Wrap != nil {
		wrapped = cfg.Wrap(carrier)
	}
	n := max(cfg.Workers, 1)
	for i := range n {
		w := worker.New(worker.Config{Name: fmt.Sprintf("here-%d", i), Version: cfg.Version, Threads: share(cfg.Threads, n, i),
			Carrier: wrapped, Shared: n > 1, Faults: cfg.Faults})
		up, down := Pipe(ctx)
		wg.Go(func() { _ = c.Join(ctx, up) })
		wg.Go(func() { _ = w.Serve(ctx, down); down.Close() })
		select {
		case number := <-w.Number:
			carrier.add(number, w)
		case <-ctx.Done(): // stopped before it joined
			return nil, context.Cause(ctx)
		}
	}
	if err := c.Wait(ctx, n); err != nil {
		return nil, err
	}
	return c.Run(ctx, job, watch)
}

// share splits threads over n workers; the first get what is left over.
func share(threads, n, i int) int {
	each := threads / n
	if i < threads%n {
		each++
	}
	return max(each, 1)
}

// byCall carries batches by calling the peer.
type byCall struct {
	mu    sync.RWMutex
	peers map[uint32]exchange.Receiver
}

func (b *byCall) add(number uint32, r exchange.Receiver) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.peers[number] = r
}

// Carry implements exchange.Carrier.
func (b *byCall) Carry(_ context.Context, to exchange.Peer, batch exchange.Batch) (uint64, error) {
	b.mu.RLock()
	r := b.peers[to.Crew]
	b.mu.RUnlock()
	if r == nil {
		return 0, fmt.Errorf("inprocess: no worker %d", to.Crew)
	}
	return 0, r.Receive(batch)
}

// Pipe returns the two ends of a link in one process; it ends with ctx.
func Pipe(ctx context.Context) (*CoordinatorEnd, *WorkerEnd) {
	p := &pipe{ctx: ctx, orders: make(chan *pb.Order, 64), reports: make(chan *pb.Report, 64), closed: make(chan struct{})}
	return &CoordinatorEnd{p}, &WorkerEnd{p}
}

type pipe struct {
	ctx     context.Context
	orders  chan *pb.Order
	reports chan *pb.Report
	closed  chan struct{}
	once    sync.Once
}

func pass[T any](p *pipe, to chan<- T, x T) error {
	select {
	case to <- x:
		return nil
	case <-p.closed:
		return io.EOF
	case <-p.ctx.Done():
		return context.Cause(p.ctx)
	}
}

func fetch[T any](p *pipe, from <-chan T) (x T, err error) {
	select {
	case x = <-from:
		return x, nil
	default:
	}
	select {
	case x = <-from:
		return x, nil
	case <-p.closed:
		return x, io.EOF
	case <-p.ctx.Done():
		return x, context.Cause(p.ctx)
	}
}

// CoordinatorEnd is the coordinator's end of a pipe.
type CoordinatorEnd struct{ p *pipe }

// Send sends an order.
func (e *CoordinatorEnd) Send(o *pb.Order) error { return pass(e.p, e.p.orders, o) }

// Recv waits for a report.
func (e *CoordinatorEnd) Recv() (*pb.Report, error) { return fetch(e.p, e.p.reports) }

// WorkerEnd is the worker's end of a pipe.
type WorkerEnd struct{ p *pipe }

// Send sends a report.
func (e *WorkerEnd) Send(r *pb.Report) error { return pass(e.p, e.p.reports, r) }

// Recv waits for an order.
func (e *WorkerEnd) Recv() (*pb.Order, error) { return fetch(e.p, e.p.orders) }

// Close ends the pipe.
func (e *WorkerEnd) Close() { e.p.once.Do(func() { close(e.p.closed) }) }
