package wire

import (
	"context"
	"crypto/rand"
	"errors"
	"fmt"
	"log/slog"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"time"

	"golang.org/x/sys/unix"

	"pairloom/coordinator/journal"
	"pairloom/coordinator/report"
	"pairloom/coordinator/server"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/sparse/stage"
)

// Engine is what runs jobs on a crew of workers: a *server.Coordinator.
type Engine interface {
	Join(ctx context.Context, link server.Link) error
	Names() []string
	Run(ctx context.Context, job server.Job, watch func(server.State)) (*report.Run, error)
}

// Writer writes the result files of a finished job into the new folder dst.
type Writer func(ctx context.Context, job, dst string, run *report.Run, keepZero bool) error

// Config is what a Queue needs beside its folder.
type Config struct {
	Version string
	Inputs  string // in-place inputs must lie below; empty: there are none
	Write   Writer
	Log     *slog.Logger
}

// Queue is the jobs folder of one coordinator: it accepts jobs, runs them one after
// another in the order of submission, and tells how they stand. Every change is in
// the job's folder before anyone is told. Safe for concurrent use.
type Queue struct {
	cfg    Config
	folder string // absolute
	lock   *os.File
	root   *os.Root
	nonce  string
	engine Engine // of Run

	mu     sync.Mutex
	jobs   map[string]*job
	order  []*job
	taken  map[string]bool // names of jobs that are being uploaded
	change chan struct{}   // closed and replaced when a job is added
}

// job is one job; guarded by its queue's mutex.
type job struct {
	name    string
	folder  string
	request journal.Request
	state   journal.State
	at      server.State
	change  chan struct{} // closed and replaced at every change
}

const (
	lockFile  = ".lock"
	nonceFile = "nonce"
	partEnd   = ".part"
)

// OpenQueue opens a jobs folder, which is made if it is missing, and lists what is
// in it. Jobs that waited wait again; one that was running has failed (exit code 75);
// uploads that never ended are removed. A folder that another coordinator serves is
// refused (exit code 75). A new nonce is written into it, by which workers prove that
// they see the same folder. Close lets it go.
func OpenQueue(folder string, cfg Config) (*Queue, error) {
	folder, err := filepath.Abs(folder)
	if err != nil {
		return nil, err
	}
	if cfg.Log == nil {
		cfg.Log = slog.New(slog.DiscardHandler)
	}
	if err := os.MkdirAll(folder, 0o755); err != nil {
		return nil, exit.With(exit.CannotOut, err)
	}
	q := &Queue{cfg: cfg, folder: folder, jobs: map[string]*job{}, taken: map[string]bool{}, change: make(chan struct{})}
	if q.lock, err = lockFolder(folder); err != nil {
		return nil, err
	}
	if q.root, err = os.OpenRoot(folder); err == nil {
		err = errors.Join(q.load(), q.sign())
	}
	if err != nil {
		q.Close()
		return nil, err
	}
	return q, nil
}

func lockFolder(folder string) (*os.File, error) {
	f, err := os.OpenFile(filepath.Join(folder, lockFile), os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return nil, exit.With(exit.CannotOut, err)
	}
	if err := unix.Flock(int(f.Fd()), unix.LOCK_EX|unix.LOCK_NB); err != nil {
		f.Close()
		return nil, exit.With(exit.Stopped, fmt.Errorf("another coordinator serves %s", folder))
	}
	return f, nil
}

func (q *Queue) load() error {
	entries, err := os.ReadDir(q.folder)
	if err != nil {
		return err
	}
	for _, e := range entries {
		if strings.HasPrefix(e.Name(), ".") && strings.HasSuffix(e.Name(), partEnd) {
			if err := q.root.RemoveAll(e.Name()); err != nil {
				return err
			}
		}
	}
	found, err := journal.Find(q.folder)
	if err != nil {
		return err
	}
	for _, f := range found {
		j := q.add(f.Request, f.State)
		if f.State.State == journal.Running {
			err := exit.With(exit.Stopped, errors.New("the coordinator ended while the job ran; nothing was published, submit it again"))
			q.failed(j, err)
		}
	}
	return nil
}

// sign writes the nonce under a hidden name first, so that nobody reads half of it.
func (q *Queue) sign() error {
	q.nonce = rand.Text()
	part := "." + nonceFile + partEnd
	if err := q.root.WriteFile(part, []byte(q.nonce+"\n"), 0o644); err != nil {
		return exit.With(exit.CannotOut, err)
	}
	return q.root.Rename(part, nonceFile)
}

// Nonce returns the path of the nonce file and what it holds.
func (q *Queue) Nonce() (path, nonce string) { return filepath.Join(q.folder, nonceFile), q.nonce }

// Close lets the folder go; Run must have ended.
func (q *Queue) Close() {
	if q.root != nil {
		q.root.Close()
	}
	q.lock.Close()
}

func (q *Queue) add(r journal.Request, s journal.State) *job {
	q.mu.Lock()
	defer q.mu.Unlock()
	j := &job{name: r.Job, folder: filepath.Join(q.folder, r.Job), request: r, state: s, change: make(chan struct{})}
	q.jobs[j.name] = j
	q.order = append(q.order, j)
	close(q.change)
	q.change = make(chan struct{})
	return j
}

// Run runs waiting jobs on an engine until ctx ends, and returns the error of a job
// that was cut off by that, if there was one. It is called once.
func (q *Queue) Run(ctx context.Context, e Engine) error {
	q.engine = e
	for ctx.Err() == nil {
		j, change := q.next()
		if j != nil {
			if err := q.run(ctx, j); err != nil && ctx.Err() != nil {
				return err
			}
			continue
		}
		select {
		case <-change:
		case <-ctx.Done():
		}
	}
	return nil
}

func (q *Queue) next() (*job, <-chan struct{}) {
	q.mu.Lock()
	defer q.mu.Unlock()
	for _, j := range q.order {
		if j.state.State == journal.Waiting {
			return j, q.change
		}
	}
	return nil, q.change
}

// run runs one job to its end and records it.
func (q *Queue) run(ctx context.Context, j *job) error {
	q.record(j, journal.Event{Event: "started"}, func(s *journal.State) { s.State, s.Started = journal.Running, time.Now() })
	q.show(j, server.State{Stage: "waiting for workers"})
	q.cfg.Log.Info("job started", "job", j.name)
	err := q.work(ctx, j)
	if err != nil {
		q.failed(j, err)
		return err
	}
	q.record(j, journal.Event{Event: "done"}, func(s *journal.State) { s.State, s.Ended = journal.Done, time.Now() })
	q.cfg.Log.Info("job done", "job", j.name, "seconds", j.state.Elapsed(time.Now()).Seconds())
	return nil
}

func (q *Queue) work(ctx context.Context, j *job) error {
	r := &j.request
	task := server.Job{Name: j.name, Folder: j.folder, Spec: r.Spec, Options: r.Options}
	run, err := q.engine.Run(ctx, task, func(s server.State) { q.progress(j, s) })
	if err != nil {
		return err
	}
	q.progress(j, server.State{Stage: "write"})
	part := filepath.Join(j.folder, "result"+partEnd)
	defer os.RemoveAll(part)
	if err := q.cfg.Write(ctx, j.folder, part, run, r.Options.KeepZero || r.Spec.KeepZeroPairs); err != nil {
		return err
	}
	if err := os.Rename(part, stage.Result(j.folder)); err != nil {
		return err
	}
	return durable(j.folder)
}

// durable brings the names in a folder to the disk.
func durable(folder string) error {
	f, err := os.Open(folder)
	if err != nil {
		return err
	}
	return errors.Join(f.Sync(), f.Close())
}

// progress shows how far a job is; a new stage is an event.
func (q *Queue) progress(j *job, s server.State) {
	q.mu.Lock()
	same, known := j.at.Stage == s.Stage, j.state.Crew
	q.mu.Unlock()
	if crew := q.engine.Names(); !same && !slices.Equal(crew, known) {
		q.record(j, journal.Event{Event: "crew", Crew: crew}, func(s *journal.State) { s.Crew = crew })
	}
	if !same {
		q.note(j, journal.Event{Event: "stage", Stage: s.Stage})
	}
	q.show(j, s)
}

// note adds an event that changes nothing.
func (q *Queue) note(j *job, e journal.Event) {
	e.Time = time.Now()
	if err := journal.Append(j.folder, e); err != nil {
		q.cfg.Log.Error("the job folder cannot be written", "job", j.name, "error", err)
	}
}

func (q *Queue) show(j *job, s server.State) {
	q.mu.Lock()
	defer q.mu.Unlock()
	j.at = s
	j.changed()
}

func (j *job) changed() {
	close(j.change)
	j.change = make(chan struct{})
}

func (q *Queue) failed(j *job, err error) {
	code := exit.Code(err)
	message := strings.ReplaceAll(err.Error(), "\n", " ")
	q.record(j, journal.Event{Event: "failed", ExitCode: code, Message: message}, func(s *journal.State) {
		s.State, s.ExitCode, s.Message, s.Ended = journal.Failed, code, message, time.Now()
	})
	q.cfg.Log.Error("job failed", "job", j.name, "exit_code", code, "error", message)
}

// record writes a change into the job's folder and then tells who watches. A folder
// that cannot be written to is logged: the job itself shows it soon enough.
func (q *Queue) record(j *job, e journal.Event, change func(*journal.State)) {
	q.mu.Lock()
	state := j.state
	q.mu.Unlock()
	change(&state)
	if err := journal.WriteState(j.folder, state); err != nil {
		q.cfg.Log.Error("the job folder cannot be written", "job", j.name, "error", err)
	}
	q.note(j, e)
	q.mu.Lock()
	defer q.mu.Unlock()
	j.state = state
	j.changed()
}

// look returns how a job stands and a channel that is closed when that changes; nil
// if there is no such job.
func (q *Queue) look(name string) (*pb.JobState, <-chan struct{}) {
	q.mu.Lock()
	defer q.mu.Unlock()
	j := q.jobs[name]
	if j == nil {
		return nil, nil
	}
	return j.wire(), j.change
}

// list returns all jobs in the order of submission.
func (q *Queue) list() []*pb.JobState {
	q.mu.Lock()
	defer q.mu.Unlock()
	var all []*pb.JobState
	for _, j := range q.order {
		all = append(all, j.wire())
	}
	return all
}

func (j *job) wire() *pb.JobState {
	s := &pb.JobState{Job: j.name, State: j.state.State, ExitCode: int32(j.state.ExitCode), Message: j.state.Message,
		ElapsedSeconds: j.state.Elapsed(time.Now()).Seconds(), Crew: j.state.Crew}
	if !j.state.HasEnded() {
		s.Stage, s.Done, s.Total = j.at.Stage, j.at.Done, j.at.Total
	}
	return s
}

// reserve keeps a name for a job that is being uploaded; an empty one is chosen.
func (q *Queue) reserve(name, like string) (string, error) {
	if name != "" {
		if err := journal.CheckName(name); err != nil {
			return "", err
		}
	}
	q.mu.Lock()
	defer q.mu.Unlock()
	free := func(name string) bool {
		_, err := q.root.Lstat(name)
		return q.jobs[name] == nil && !q.taken[name] && errors.Is(err, os.ErrNotExist)
	}
	switch {
	case name == "":
		like = strings.SplitN(journal.Tidy(filepath.Base(like)), ".", 2)[0]
		for n := 1; name == "" || !free(name); n++ {
			name = fmt.Sprintf("%.40s-%d", like, n)
		}
	case !free(name):
		return "", exit.With(exit.CannotOut, fmt.Errorf("there is a job %s already", name))
	}
	q.taken[name] = true
	return name, nil
}

func (q *Queue) release(name string) {
	q.mu.Lock()
	defer q.mu.Unlock()
	delete(q.taken, name)
}
