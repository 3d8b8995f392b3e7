// Package server is a worker's shell: it joins a coordinator over a Link, runs the
// tasks it is given (package task), keeps the tables, tiles and goroutines of a
// reduction, and hands columns to peers through a Carrier. Everything it starts it
// waits for. The protocol's state is in packages tile and exchange.
package server

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/column"
	"pairloom/sparse/exit"
	"pairloom/sparse/guard"
	"pairloom/worker/exchange"
	"pairloom/worker/task"
)

// Link is the worker's end of its stream to the coordinator. Recv ends with an
// error when the stream or its context does.
type Link interface {
	Send(*pb.Report) error
	Recv() (*pb.Order, error)
}

// Config is what a worker is.
type Config struct {
	Name    string
	Version string
	Address string // where peers reach it; empty in one process
	Threads int    // goroutines of a reduction, and tasks at once
	Carrier exchange.Carrier
	Shared  bool   // other workers live in this process: its CPU is not this worker's
	Faults  Faults // nil but in tests
}

// Faults damages a reduction, for tests of the evidence.
type Faults interface {
	Initial(j uint32) (copies int) // how often initial column j is offered: 1
	Column(c *column.Column)       // a column that is about to be stored or was received
	Zero(j uint32) (copies int)    // how often zero column j is recorded: 1
}

// Worker serves one coordinator.
type Worker struct {
	cfg        Config
	link       Link
	sending    sync.Mutex
	mu         sync.Mutex
	reductions map[uint64]*reduction
	cancels    map[uint64]folderCancel // tasks under way
	wg         sync.WaitGroup
	cpu        meter
	Number     chan uint32 // gets the worker's number in the crew when it has joined
}

type folderCancel struct {
	folder string
	cancel context.CancelCauseFunc
}

// New makes a worker.
func New(cfg Config) *Worker {
	cfg.Threads = max(cfg.Threads, 1)
	return &Worker{cfg: cfg, reductions: map[uint64]*reduction{}, cancels: map[uint64]folderCancel{}, Number: make(chan uint32, 1), cpu: meter{shared: cfg.Shared}}
}

// errStopped ends the work of a job that was stopped.
var errStopped = errors.New("stopped by the coordinator")

// Serve joins over link and works until the coordinator says stop (nil), the link
// breaks, or ctx ends. All goroutines have ended when it returns.
func (w *Worker) Serve(ctx context.Context, link Link) error {
	ctx, cancel := context.WithCancelCause(ctx)
	defer w.wg.Wait()
	defer cancel(errStopped)
	w.link = link
	hello := &pb.Hello{Name: w.cfg.Name, Version: w.cfg.Version, Address: w.cfg.Address, Threads: uint32(w.cfg.Threads)}
	if err := w.send(&pb.Report{Body: &pb.Report_Hello{Hello: hello}}); err != nil {
		return err
	}
	for {
		o, err := link.Recv()
		if err != nil {
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
			return exit.With(exit.NoPeer, fmt.Errorf("the coordinator is gone: %w", err))
		}
		stop, err := w.obey(ctx, o)
		if stop || err != nil {
			return err
		}
	}
}

// obey carries out one order; long ones go on in goroutines of the worker.
func (w *Worker) obey(ctx context.Context, o *pb.Order) (stop bool, err error) {
	switch b := o.Body.(type) {
	case *pb.Order_Welcome:
		return false, w.welcome(b.Welcome)
	case *pb.Order_Task:
		w.spawn(ctx, b.Task.Task, b.Task.Folder, func(ctx context.Context) error { return w.task(ctx, b.Task) })
	case *pb.Order_Reduction:
		w.spawn(ctx, b.Reduction.Reduction, b.Reduction.Folder, func(ctx context.Context) error { return w.reduce(ctx, b.Reduction) })
	case *pb.Order_Begin:
		w.tell(b.Begin.Reduction, func(r *reduction) { r.begin() })
	case *pb.Order_Probe:
		w.tell(b.Probe.Reduction, func(r *reduction) { r.probed(b.Probe.Number) })
	case *pb.Order_Close:
		w.tell(b.Close.Reduction, func(r *reduction) { r.close() })
	case *pb.Order_Stop:
		if b.Stop.Folder == "" {
			return true, nil
		}
		w.stop(b.Stop.Folder)
	}
	return false, nil
}

// welcome checks that the worker sees the coordinator's job folder.
func (w *Worker) welcome(o *pb.Welcome) error {
	if o.Version != w.cfg.Version {
		return exit.With(exit.Version, fmt.Errorf("this worker is version %s, the coordinator %s", w.cfg.Version, o.Version))
	}
	if o.NoncePath != "" {
		got, err := os.ReadFile(o.NoncePath)
		if err != nil || strings.TrimSpace(string(got)) != o.Nonce {
			here, _ := filepath.Abs(o.NoncePath)
			return exit.With(exit.NoPeer, fmt.Errorf("the coordinator's job folder is not this machine's: it wrote %s, and %s does not hold it here; share the folder under one path", o.NoncePath, here))
		}
	}
	w.Number <- o.Worker
	return nil
}

// spawn runs a task or reduction in a goroutine and reports its failure.
func (w *Worker) spawn(ctx context.Context, id uint64, folder string, f func(context.Context) error) {
	ctx, cancel := context.WithCancelCause(ctx)
	w.mu.Lock()
	w.cancels[id] = folderCancel{folder, cancel}
	w.mu.Unlock()
	w.wg.Go(func() {
		err := guard.Run(func() error { return f(ctx) })
		w.mu.Lock()
		delete(w.cancels, id)
		w.mu.Unlock()
		cancel(nil)
		if err != nil && !errors.Is(err, errStopped) {
			_ = w.send(&pb.Report{Body: &pb.Report_Failed{Failed: &pb.TaskFailed{Task: id, ExitCode: int32(exit.Code(err)), Message: err.Error()}}})
		}
	})
}

// stop cancels everything of a job.
func (w *Worker) stop(folder string) {
	w.mu.Lock()
	defer w.mu.Unlock()
	for _, c := range w.cancels {
		if c.folder == folder {
			c.cancel(errStopped)
		}
	}
}

func (w *Worker) send(r *pb.Report) error {
	w.sending.Lock()
	defer w.sending.Unlock()
	return w.link.Send(r)
}

func (w *Worker) task(ctx context.Context, t *pb.Task) error {
	defer w.cpu.start(t.Work == pb.Work_WORK_PREPARE)()
	p := &progress{w: w, task: t.Task}
	done, err := task.Run(ctx, t, p)
	if err != nil {
		return err
	}
	p.end()
	done.Stages, done.CpuSeconds, done.PeakBytes = p.seconds, w.cpu.seconds(), peak()
	return w.send(&pb.Report{Body: &pb.Report_Done{Done: done}})
}

// tell finds an open reduction; an order for one that has ended is stale.
func (w *Worker) tell(id uint64, f func(*reduction)) {
	if r := w.find(id); r != nil {
		f(r)
	}
}

func (w *Worker) find(id uint64) *reduction {
	w.mu.Lock()
	defer w.mu.Unlock()
	return w.reductions[id]
}

// Receive implements exchange.Receiver.
func (w *Worker) Receive(b exchange.Batch) error {
	r := w.find(b.Reduction)
	if r == nil {
		return fmt.Errorf("worker: a batch for reduction %d, which is not open here", b.Reduction)
	}
	return r.receive(b)
}

// Shape returns the rows, columns and tiles of an open reduction, for decoding.
func (w *Worker) Shape(id uint64) (rows, cols uint32, tiles int, ok bool) {
	r := w.find(id)
	if r == nil {
		return 0, 0, 0, false
	}
	rows, cols = r.problem.Columns.Shape()
	return rows, cols, r.problem.Tiling.Tiles, true
}

// progress reports how far a task is, at most ten times a second, and keeps the
// time of its stages.
type progress struct {
	w       *Worker
	task    uint64
	mu      sync.Mutex
	stage   string
	since   time.Time
	last    time.Time
	seconds []*pb.StageSeconds
}

// Stage implements source.Progress.
func (p *progress) Stage(name string) {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.lap()
	p.stage = name
}

func (p *progress) lap() {
	now := time.Now()
	if p.stage != "" {
		p.seconds = append(p.seconds, &pb.StageSeconds{Stage: p.stage, Seconds: now.Sub(p.since).Seconds()})
	}
	p.since = now
}

func (p *progress) end() {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.lap()
	p.stage = ""
}

const progressEvery = 100 * time.Millisecond

// Advance implements source.Progress.
func (p *progress) Advance(done, total uint64) {
	p.mu.Lock()
	defer p.mu.Unlock()
	if now := time.Now(); now.Sub(p.last) >= progressEvery {
		p.last = now
		_ = p.w.send(&pb.Report{Body: &pb.Report_Progress{Progress: &pb.Progress{Task: p.task, Stage: p.stage, Done: done, Total: total}}})
	}
}
