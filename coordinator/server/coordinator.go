// Package server is the coordinator's shell: it keeps the crew of workers that
// joined over their Links, and runs one job at a time by feeding what they report
// to the schedule and sending out its orders. It computes no column.
package server

import (
	"context"
	"crypto/rand"
	"encoding/binary"
	"errors"
	"fmt"
	"sort"
	"sync"

	"pairloom/coordinator/plan"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

// Link is the coordinator's end of a worker's stream. Recv ends with an error when
// the stream or its context does.
type Link interface {
	Send(*pb.Order) error
	Recv() (*pb.Report, error)
}

// Config is what a coordinator is.
type Config struct {
	Version   string
	NoncePath string // a file in the jobs folder that workers must be able to read; empty in one process
	Nonce     string // what it holds
}

// Coordinator keeps a crew and runs jobs on it.
type Coordinator struct {
	cfg    Config
	mu     sync.Mutex
	crew   map[int]*member
	next   int
	change chan struct{} // closed and replaced when the crew changes
	events chan event    // of the job that runs; nil between jobs
	quit   chan struct{} // closed when that job has ended
	number uint64        // first unused task number
	job    sync.Mutex    // one job at a time
}

type member struct {
	id      int
	hello   *pb.Hello
	link    Link
	sending sync.Mutex
	spent   float64 // CPU seconds up to the end of the last job
}

func (m *member) send(o *pb.Order) error {
	m.sending.Lock()
	defer m.sending.Unlock()
	return m.link.Send(o)
}

// event is a worker's report, or its loss (report nil).
type event struct {
	worker int
	report *pb.Report
}

// Job is one job: its folder exists, its inputs can be read by the workers.
type Job struct {
	Name    string
	Folder  string
	Spec    source.Spec
	Options plan.Options
}

// State is how far a job is.
type State struct {
	Stage       string // read, order, block, compress, reduce, evidence
	Done, Total uint64 // of the stage, in its own unit; Total 0: not known
}

// New makes a coordinator without a crew.
func New(cfg Config) *Coordinator {
	return &Coordinator{cfg: cfg, crew: map[int]*member{}, change: make(chan struct{}), number: 1}
}

// Join serves one worker over its link until the link ends, or the worker's version
// is another (exit code 76). Workers are numbered 0, 1, 2 … as they join.
func (c *Coordinator) Join(ctx context.Context, link Link) error {
	first, err := link.Recv()
	if err != nil {
		return err
	}
	hello := first.GetHello()
	if hello == nil {
		return exit.With(exit.Internal, errors.New("a worker's first report must be its hello"))
	}
	m := &member{hello: hello, link: link}
	c.mu.Lock()
	m.id = c.next
	c.next++
	c.mu.Unlock()
	welcome := &pb.Welcome{Worker: uint32(m.id), Version: c.cfg.Version, NoncePath: c.cfg.NoncePath, Nonce: c.cfg.Nonce}
	if err := m.send(&pb.Order{Body: &pb.Order_Welcome{Welcome: welcome}}); err != nil {
		return err
	}
	if hello.Version != c.cfg.Version {
		return exit.With(exit.Version, fmt.Errorf("worker %s is version %s, the coordinator %s", hello.Name, hello.Version, c.cfg.Version))
	}
	c.enter(m)
	defer c.leave(m)
	for {
		r, err := link.Recv()
		if err != nil {
			return err
		}
		c.tell(ctx, event{m.id, r})
	}
}

func (c *Coordinator) enter(m *member) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.crew[m.id] = m
	close(c.change)
	c.change = make(chan struct{})
}

func (c *Coordinator) leave(m *member) {
	c.mu.Lock()
	delete(c.crew, m.id)
	close(c.change)
	c.change = make(chan struct{})
	c.mu.Unlock()
	c.tell(context.Background(), event{worker: m.id})
}

// tell hands an event to the job that runs; between jobs it is dropped.
func (c *Coordinator) tell(ctx context.Context, e event) {
	c.mu.Lock()
	events, quit := c.events, c.quit
	c.mu.Unlock()
	if events == nil {
		return
	}
	select {
	case events <- e:
	case <-quit:
	case <-ctx.Done():
	}
}

// Wait returns when at least n workers have joined.
func (c *Coordinator) Wait(ctx context.Context, n int) error {
	for {
		c.mu.Lock()
		have, change := len(c.crew), c.change
		c.mu.Unlock()
		if have >= n {
			return nil
		}
		select {
		case <-change:
		case <-ctx.Done():
			return context.Cause(ctx)
		}
	}
}

// Names returns the workers' names in order of joining.
func (c *Coordinator) Names() []string {
	var names []string
	for _, m := range c.members() {
		names = append(names, m.hello.Name)
	}
	return names
}

func (c *Coordinator) members() []*member {
	c.mu.Lock()
	defer c.mu.Unlock()
	var out []*member
	for _, m := range c.crew {
		out = append(out, m)
	}
	sort.Slice(out, func(i, j int) bool { return out[i].id < out[j].id })
	return out
}

// Dismiss tells all workers to stop; their links end by it.
func (c *Coordinator) Dismiss(why string) {
	for _, m := range c.members() {
		_ = m.send(&pb.Order{Body: &pb.Order_Stop{Stop: &pb.Stop{Why: why}}})
	}
}

// draw makes a secret seed.
func draw() (uint64, error) {
	var b [8]byte
	if _, err := rand.Read(b[:]); err != nil {
		return 0, err
	}
	return binary.LittleEndian.Uint64(b[:]), nil
}
