package server

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"time"

	"pairloom/coordinator/plan"
	"pairloom/coordinator/report"
	"pairloom/coordinator/schedule"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/chain"
	"pairloom/sparse/exit"
	"pairloom/sparse/stage"
)

// run is the job under way.
type run struct {
	c       *Coordinator
	job     Job
	crew    map[int]*member
	m       *schedule.Machine
	watch   func(State)
	seconds map[string]float64
	last    time.Time
	shown   State
}

// Run runs one job to its end on the crew of this moment (at least one worker), and
// returns what happened; the pairs are in the job folder then. Jobs wait for each
// other. Errors have codes (exit.Code); nothing may be published after one.
func (c *Coordinator) Run(ctx context.Context, job Job, watch func(State)) (*report.Run, error) {
	c.job.Lock()
	defer c.job.Unlock()
	if err := c.Wait(ctx, 1); err != nil {
		return nil, err
	}
	r := &run{c: c, job: job, crew: map[int]*member{}, watch: watch, seconds: map[string]float64{}, last: time.Now()}
	events := c.begin()
	defer c.end(r)
	first, err := r.start()
	if err != nil {
		return nil, err
	}
	if err := r.loop(ctx, events, first); err != nil {
		r.stop(err)
		return nil, err
	}
	return r.report()
}

func (c *Coordinator) begin() chan event {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.events, c.quit = make(chan event, 1024), make(chan struct{})
	return c.events
}

func (c *Coordinator) end(r *run) {
	c.mu.Lock()
	defer c.mu.Unlock()
	close(c.quit)
	c.events = nil
	if r.m != nil {
		c.number = r.m.Next()
		for id, m := range r.crew { // workers count since they joined, jobs from here on
			m.spent = max(m.spent, r.m.Crew[id].CPU)
		}
	}
}

func (r *run) start() ([]schedule.Effect, error) {
	spec, err := json.Marshal(r.job.Spec)
	if err != nil {
		return nil, err
	}
	seed := r.job.Options.Seed
	if seed == 0 {
		if seed, err = draw(); err != nil {
			return nil, err
		}
	}
	var crew []schedule.Member
	for _, m := range r.c.members() {
		r.crew[m.id] = m
		crew = append(crew, schedule.Member{ID: m.id, Threads: int(m.hello.Threads), Address: m.hello.Address})
	}
	if len(crew) == 0 {
		return nil, exit.With(exit.NoPeer, errors.New("no worker has joined"))
	}
	var first []schedule.Effect
	r.m, first = schedule.New(schedule.Job{Folder: r.job.Folder, Seed: seed, Spec: string(spec), Options: r.job.Options, First: r.c.number}, crew)
	return first, nil
}

// loop feeds events to the machine and sends its orders until the job has ended.
func (r *run) loop(ctx context.Context, events <-chan event, effects []schedule.Effect) error {
	for {
		for _, e := range effects {
			if err := r.crew[e.Worker].send(e.Order); err != nil {
				return exit.With(exit.NoPeer, fmt.Errorf("worker %s is gone: %w", r.crew[e.Worker].hello.Name, err))
			}
		}
		if r.m.Ended() {
			return nil
		}
		select {
		case e := <-events:
			var err error
			if effects, err = r.step(e); err != nil {
				return err
			}
		case <-ctx.Done():
			return context.Cause(ctx)
		}
	}
}

// step keeps the account of time and gives one event to the machine.
func (r *run) step(e event) ([]schedule.Effect, error) {
	now := time.Now()
	r.seconds[r.m.Stage()] += now.Sub(r.last).Seconds()
	r.last = now
	member := r.crew[e.worker]
	if member == nil {
		return nil, nil // joined after the job began
	}
	if e.report == nil {
		if err := r.m.Gone(e.worker); err != nil {
			return nil, exit.With(exit.NoPeer, fmt.Errorf("worker %s left while it was needed; nothing was published, submit the job again", member.hello.Name))
		}
		return nil, nil
	}
	effects, err := r.take(e)
	r.show(r.m.Stage(), 0, 0)
	return effects, err
}

func (r *run) take(e event) ([]schedule.Effect, error) {
	switch b := e.report.Body.(type) {
	case *pb.Report_Done:
		return r.done(e.worker, b.Done)
	case *pb.Report_Failed:
		return nil, exit.With(int(b.Failed.ExitCode), errors.New(b.Failed.Message))
	case *pb.Report_Progress:
		r.show(b.Progress.Stage, b.Progress.Done, b.Progress.Total)
	case *pb.Report_Ready:
		return r.m.Ready(e.worker, b.Ready)
	case *pb.Report_Counters:
		return r.m.Counters(e.worker, b.Counters)
	case *pb.Report_Finished:
		return r.m.Finished(e.worker, b.Finished)
	}
	return nil, nil
}

func (r *run) done(worker int, d *pb.TaskDone) ([]schedule.Effect, error) {
	prepared := r.m.Complex() == nil
	effects, err := r.m.Done(worker, d)
	if err != nil || !prepared {
		return effects, err
	}
	for _, s := range d.Stages {
		r.seconds[s.Stage] += s.Seconds
	}
	c, err := chain.Read(stage.Order(r.job.Folder))
	if err != nil {
		return nil, err
	}
	return append(effects, r.m.Prepared(c)...), nil
}

// show tells the watcher where the job is, when that has changed.
func (r *run) show(name string, done, total uint64) {
	if name == "prepare" {
		return // its own progress says more
	}
	s := State{name, done, total}
	if name == "reduce" {
		s.Done, s.Total = r.m.Progress()
	}
	if r.watch != nil && s != r.shown {
		r.shown = s
		r.watch(s)
	}
}

// stop ends what the crew still does for the job.
func (r *run) stop(why error) {
	for _, m := range r.crew {
		_ = m.send(&pb.Order{Body: &pb.Order_Stop{Stop: &pb.Stop{Folder: r.job.Folder, Why: why.Error()}}})
	}
}

// report puts together what is known of the finished job.
func (r *run) report() (*report.Run, error) {
	inputs, err := stage.ReadInputs(r.job.Folder)
	if err != nil {
		return nil, err
	}
	out := &report.Run{Version: r.c.cfg.Version, Inputs: inputs, Complex: r.m.Complex(), Seconds: r.seconds,
		Exchanged: r.m.Exchanged, ExchangeBytes: r.m.Bytes}
	out.Options = struct {
		Input any          `json:"input"`
		Work  plan.Options `json:"work"`
	}{r.job.Spec, r.job.Options}
	delete(out.Seconds, "prepare")
	for _, b := range r.m.Blocks() {
		out.Blocks = append(out.Blocks, blockRun(b, r.job.Folder))
	}
	for _, m := range r.members() {
		w := r.m.Crew[m.id]
		cpu := max(w.CPU-m.spent, 0)
		out.Crew = append(out.Crew, report.Member{Name: m.hello.Name, Tiles: w.Tiles, Settled: w.Settled, Sent: w.Sent, Received: w.Received, CPU: cpu})
		out.CPU += cpu
		out.Peak = max(out.Peak, w.Peak)
	}
	out.Checks = checks(r.m.Blocks(), r.job.Options)
	return out, nil
}

func (r *run) members() []*member {
	var out []*member
	for _, m := range r.crew {
		out = append(out, m)
	}
	slices.SortFunc(out, func(a, b *member) int { return a.id - b.id })
	return out
}

func blockRun(b schedule.BlockState, folder string) report.BlockRun {
	d := b.Done
	run := report.BlockRun{Degree: b.Degree, Route: string(b.Route), Reason: b.Reason, Apparent: d.Apparent, Graph: d.Graph, Cleared: d.Cleared,
		Settled: d.Settled, Zero: d.Zero, RowsDropped: b.Dropped, Additions: b.Additions, Evictions: b.Evictions, Rank: d.Rank}
	if m, err := chain.OpenBlock(stage.Order(folder), b.Degree, true); err == nil {
		run.Nonzeros = m.Nonzeros()
		m.Close()
	}
	return run
}

// checks lists the evidence of a job that ended well: a failed check ends a job.
func checks(blocks []schedule.BlockState, o plan.Options) []report.Check {
	second := "passed"
	for _, b := range blocks {
		if b.Residual > plan.RecheckLimit && !o.Recheck {
			second = fmt.Sprintf("skipped for blocks of more than %d residual columns; --recheck has it for all", plan.RecheckLimit)
		}
	}
	return []report.Check{
		{Name: "boundary of boundary is zero", Verdict: "passed"},
		{Name: "every column has one recorded fate", Verdict: "passed"},
		{Name: "carried checksums", Verdict: "passed"},
		{Name: "additions from smaller columns only", Verdict: "passed"},
		{Name: "columns sent are received", Verdict: "passed"},
		{Name: "second answer by the other route", Verdict: second},
		{Name: "blocks unchanged", Verdict: "passed"},
	}
}
