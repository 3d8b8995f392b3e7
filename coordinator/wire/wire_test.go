package wire

import (
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"sync"
	"testing"
	"time"

	"github.com/stretchr/testify/require"
	"go.uber.org/goleak"

	"pairloom/coordinator/journal"
	"pairloom/coordinator/plan"
	"pairloom/coordinator/report"
	"pairloom/coordinator/server"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// engine stands in for a coordinator with its crew.
type engine struct {
	mu   sync.Mutex
	ran  []string
	work func(ctx context.Context, job server.Job, watch func(server.State)) error
}

func (e *engine) Join(_ context.Context, link server.Link) error {
	r, err := link.Recv()
	if err != nil {
		return err
	}
	if r.GetHello().Version != "7" {
		return exit.With(exit.Version, errors.New("another version"))
	}
	return link.Send(&pb.Order{Body: &pb.Order_Welcome{Welcome: &pb.Welcome{Version: "7"}}})
}

func (e *engine) Names() []string { return []string{"anna", "berta"} }

func (e *engine) Run(ctx context.Context, job server.Job, watch func(server.State)) (*report.Run, error) {
	e.mu.Lock()
	e.ran = append(e.ran, job.Name)
	e.mu.Unlock()
	if e.work != nil {
		if err := e.work(ctx, job, watch); err != nil {
			return nil, err
		}
	}
	return &report.Run{Version: "7"}, nil
}

// write makes result files, one of them of several chunks.
func write(_ context.Context, job, dst string, _ *report.Run, keepZero bool) error {
	if err := os.Mkdir(dst, 0o755); err != nil {
		return err
	}
	for i, name := range ResultFiles {
		if err := os.WriteFile(filepath.Join(dst, name), content(name, i*1_300_000), 0o644); err != nil {
			return err
		}
	}
	return nil
}

func content(what string, n int) []byte {
	b := []byte(what)
	for len(b) < n {
		d := sha256.Sum256(b[max(0, len(b)-32):])
		b = append(b, d[:]...)
	}
	return b
}

// coordinator is a served jobs folder.
type coordinator struct {
	*Client
	q    *Queue
	dir  string       // the jobs folder
	stop func() error // returns what Run returned; may be called once
}

func start(t *testing.T, jobs, inputs string, e *engine) *coordinator {
	q, err := OpenQueue(jobs, Config{Version: "7", Inputs: inputs, Write: write})
	require.NoError(t, err)
	l, err := net.Listen("tcp", "127.0.0.1:0")
	require.NoError(t, err)
	s := NewServer(e, q)
	ctx, cancel := context.WithCancel(context.Background())
	var wg sync.WaitGroup
	var ran error
	wg.Go(func() { _ = s.Serve(l) })
	wg.Go(func() { ran = q.Run(ctx, e) })
	client, err := NewClient(l.Addr().String())
	require.NoError(t, err)
	c := &coordinator{Client: client, q: q, dir: jobs}
	c.stop = sync.OnceValue(func() error {
		client.Close()
		cancel()
		now, end := context.WithCancel(context.Background())
		end()
		s.Stop(now)
		wg.Wait()
		q.Close()
		return ran
	})
	t.Cleanup(func() { _ = c.stop() })
	return c
}

func put(t *testing.T, path string, b []byte) string {
	require.NoError(t, os.MkdirAll(filepath.Dir(path), 0o755))
	require.NoError(t, os.WriteFile(path, b, 0o644))
	return path
}

func spec(paths ...string) source.Spec {
	return source.Spec{Kind: source.Matrix, Inputs: paths, Degrees: -1}
}

func (c *coordinator) end(t *testing.T, job string) *pb.JobState {
	s, err := c.Watch(t.Context(), job, func(*pb.JobState) {})
	require.NoError(t, err)
	return s
}

// A job from its files to its fetched result; every byte is the one that was sent.
func TestAJobGoesThrough(t *testing.T) {
	dir := t.TempDir()
	a, b := content("a", 2_500_000), content("b", 0)
	first, second := put(t, filepath.Join(dir, "x", "my matrix.mtx"), a), put(t, filepath.Join(dir, "y", "my matrix.mtx"), b)
	e := &engine{}
	e.work = func(_ context.Context, job server.Job, watch func(server.State)) error {
		require.Equal(t, []string{filepath.Join(job.Folder, "input", "my_matrix.mtx"), filepath.Join(job.Folder, "input", "2-my_matrix.mtx")}, job.Spec.Inputs)
		for i, want := range [][]byte{a, b} {
			got, err := os.ReadFile(job.Spec.Inputs[i])
			require.NoError(t, err)
			require.Equal(t, want, got)
		}
		r, err := journal.ReadRequest(job.Folder)
		require.NoError(t, err)
		require.Equal(t, job.Spec, r.Spec)
		require.Equal(t, "coboundary", job.Options.Route)
		watch(server.State{Stage: "read", Done: 1, Total: 2})
		watch(server.State{Stage: "reduce"})
		return nil
	}
	c := start(t, filepath.Join(dir, "jobs"), "", e)
	require.NoError(t, c.Health(t.Context()))
	job, err := c.Submit(t.Context(), Submission{Spec: spec(first, second), Options: plan.Options{Route: "coboundary"}})
	require.NoError(t, err)
	require.Equal(t, "my_matrix-1", job)
	var last *pb.JobState
	got, err := c.Watch(t.Context(), job, func(s *pb.JobState) { last = s })
	require.NoError(t, err)
	require.Equal(t, last, got)
	require.Equal(t, []any{"done", int32(0), ""}, []any{got.State, got.ExitCode, got.Stage})
	require.Equal(t, []string{"anna", "berta"}, got.Crew)

	out := t.TempDir()
	require.NoError(t, c.Fetch(t.Context(), job, out))
	for i, name := range ResultFiles {
		b, err := os.ReadFile(filepath.Join(out, name))
		require.NoError(t, err)
		require.Equal(t, content(name, i*1_300_000), b)
	}
	require.Equal(t, exit.CannotOut, exit.Code(c.Fetch(t.Context(), job, out)), "nothing is overwritten")
	events, err := os.ReadFile(filepath.Join(c.dir, job, "events.jsonl"))
	require.NoError(t, err)
	for _, e := range []string{`"submitted"`, `"started"`, `"stage":"read"`, `"stage":"reduce"`, `"stage":"write"`, `"done"`} {
		require.Contains(t, string(events), e)
	}
}

func TestJobsRunInTheOrderOfSubmission(t *testing.T) {
	in := put(t, filepath.Join(t.TempDir(), "a.mtx"), []byte("a"))
	e, hold := &engine{}, make(chan struct{})
	e.work = func(ctx context.Context, job server.Job, _ func(server.State)) error {
		if job.Name == "j0" {
			<-hold
		}
		return nil
	}
	c := start(t, t.TempDir(), "", e)
	for i := range 5 {
		name, err := c.Submit(t.Context(), Submission{Name: fmt.Sprint("j", i), Spec: spec(in)})
		require.NoError(t, err)
		require.Equal(t, fmt.Sprint("j", i), name)
	}
	_, err := c.Submit(t.Context(), Submission{Name: "j3", Spec: spec(in)})
	require.Equal(t, exit.CannotOut, exit.Code(err), "the name is taken")
	list, err := c.List(t.Context())
	require.NoError(t, err)
	require.Len(t, list, 5)
	require.Equal(t, "waiting", list[4].State)
	require.Equal(t, exit.NoInput, exit.Code(c.Fetch(t.Context(), "j4", t.TempDir())), "no result yet")
	close(hold)
	c.end(t, "j4")
	require.Equal(t, []string{"j0", "j1", "j2", "j3", "j4"}, e.ran)
}

// The exit code of a job and its reason are told by every call, also after a restart.
func TestAFailedJobKeepsItsCode(t *testing.T) {
	in, e := put(t, filepath.Join(t.TempDir(), "a.mtx"), []byte("a")), &engine{}
	e.work = func(_ context.Context, job server.Job, _ func(server.State)) error {
		if job.Name == "bad" {
			return source.Broken("a.mtx", 3, "no number")
		}
		return exit.With(exit.NoPeer, errors.New("worker anna left"))
	}
	c := start(t, t.TempDir(), "", e)
	check := func(c *coordinator) {
		s := c.end(t, "bad")
		require.Equal(t, []any{"failed", int32(65), "a.mtx: line 3: no number"}, []any{s.State, s.ExitCode, s.Message})
		require.Equal(t, exit.BadInput, exit.Code(c.Fetch(t.Context(), "bad", t.TempDir())))
		err := c.Fetch(t.Context(), "lost", t.TempDir())
		require.EqualError(t, err, "job lost failed: worker anna left", "the coordinator itself was reached")
		require.Equal(t, exit.NoPeer, exit.Code(err))
	}
	for _, name := range []string{"bad", "lost"} {
		_, err := c.Submit(t.Context(), Submission{Name: name, Spec: spec(in)})
		require.NoError(t, err)
		c.end(t, name)
	}
	check(c)
	require.NoError(t, c.stop())
	check(start(t, c.dir, "", &engine{}))
}

func TestARestartedCoordinatorKnowsItsJobs(t *testing.T) {
	in, e, started := put(t, filepath.Join(t.TempDir(), "a.mtx"), []byte("a")), &engine{}, make(chan struct{})
	e.work = func(ctx context.Context, job server.Job, _ func(server.State)) error {
		if job.Name == "good" {
			return nil
		}
		close(started)
		<-ctx.Done()
		return context.Cause(ctx)
	}
	c := start(t, t.TempDir(), "", e)
	for _, name := range []string{"good", "cut", "next"} {
		_, err := c.Submit(t.Context(), Submission{Name: name, Spec: spec(in)})
		require.NoError(t, err)
	}
	<-started
	_, err := OpenQueue(c.dir, Config{})
	require.Equal(t, exit.Stopped, exit.Code(err), "one coordinator a folder")
	require.Equal(t, exit.Stopped, exit.Code(c.stop()), "a job was cut off")

	require.NoError(t, os.Mkdir(filepath.Join(c.dir, ".x.Y.part"), 0o755))
	killed := filepath.Join(c.dir, "killed")
	require.NoError(t, os.Mkdir(killed, 0o755))
	require.NoError(t, journal.WriteRequest(killed, journal.Request{Job: "killed", Submitted: time.Now()}))
	require.NoError(t, journal.WriteState(killed, journal.State{State: journal.Running}))
	_, before := c.q.Nonce()
	c = start(t, c.dir, "", &engine{})
	path, nonce := c.q.Nonce()
	held, err := os.ReadFile(path)
	require.NoError(t, err)
	require.Equal(t, nonce+"\n", string(held))
	require.NotEqual(t, before, nonce)
	require.Equal(t, "done", c.end(t, "next").State, "it had not started")
	var states []string
	list, err := c.List(t.Context())
	require.NoError(t, err)
	for _, s := range list {
		states = append(states, fmt.Sprint(s.Job, " ", s.State, " ", s.ExitCode))
	}
	require.Equal(t, []string{"good done 0", "cut failed 75", "next done 0", "killed failed 75"}, states)
	require.NoError(t, c.Fetch(t.Context(), "good", t.TempDir()))
	require.NoDirExists(t, filepath.Join(c.dir, ".x.Y.part"))
}

func chunk(s string) *pb.Upload { return &pb.Upload{Body: &pb.Upload_Chunk{Chunk: []byte(s)}} }

func ended(s string) *pb.Upload {
	return &pb.Upload{Body: &pb.Upload_EndSha256{EndSha256: fmt.Sprintf("%x", sha256.Sum256([]byte(s)))}}
}

func asked(name, spec string, files ...string) *pb.Upload {
	return &pb.Upload{Body: &pb.Upload_Spec{Spec: &pb.JobSpec{Name: name, Spec: spec, Options: "{}", Files: files}}}
}

// What a client of ours never sends is refused and leaves nothing behind.
func TestBrokenSubmissionsLeaveNothing(t *testing.T) {
	c := start(t, t.TempDir(), "", &engine{})
	one, two := `{"kind":"matrix","inputs":["x"]}`, `{"kind":"matrix","inputs":["x","y"]}`
	for name, s := range map[string]struct {
		code int
		sent []*pb.Upload
	}{
		"nothing":              {exit.Usage, nil},
		"no question":          {exit.Usage, []*pb.Upload{chunk("a")}},
		"not JSON":             {exit.Usage, []*pb.Upload{asked("", "{", "a")}},
		"unknown field":        {exit.Usage, []*pb.Upload{asked("", `{"kind":"matrix","inputs":["x"],"shell":"rm"}`, "a")}},
		"two values":           {exit.Usage, []*pb.Upload{asked("", one+one, "a")}},
		"no input":             {exit.Usage, []*pb.Upload{asked("", `{"kind":"matrix","inputs":[]}`)}},
		"name with a path":     {exit.Usage, []*pb.Upload{asked("../evil", one, "a"), chunk("a"), ended("a")}},
		"hidden name":          {exit.Usage, []*pb.Upload{asked(".evil", one, "a"), chunk("a"), ended("a")}},
		"file with a path":     {exit.Usage, []*pb.Upload{asked("", one, "../../a"), chunk("a"), ended("a")}},
		"absolute file":        {exit.Usage, []*pb.Upload{asked("", one, "/etc/passwd"), chunk("a"), ended("a")}},
		"one name twice":       {exit.Usage, []*pb.Upload{asked("", two, "a", "a"), chunk("a"), ended("a"), ended("")}},
		"files missing":        {exit.Usage, []*pb.Upload{asked("", two, "a"), chunk("a"), ended("a")}},
		"wrong digest":         {exit.IO, []*pb.Upload{asked("", one, "a"), chunk("a"), ended("b")}},
		"no digest":            {exit.IO, []*pb.Upload{asked("", one, "a"), chunk("a"), {Body: &pb.Upload_EndSha256{EndSha256: "?"}}}},
		"cut short":            {exit.Usage, []*pb.Upload{asked("", one, "a"), chunk("a")}},
		"second file missing":  {exit.Usage, []*pb.Upload{asked("", two, "a", "b"), chunk("a"), ended("a")}},
		"asked twice":          {exit.Usage, []*pb.Upload{asked("", one, "a"), asked("", one, "a")}},
		"more than announced":  {exit.Usage, []*pb.Upload{asked("", one, "a"), ended(""), chunk("b")}},
		"in place without any": {exit.NotAllowed, []*pb.Upload{{Body: &pb.Upload_Spec{Spec: &pb.JobSpec{Spec: one, Options: "{}", InPlace: true}}}}},
	} {
		t.Run(name, func(t *testing.T) {
			stream, err := c.jobs.Submit(t.Context())
			require.NoError(t, err)
			for _, m := range s.sent {
				if stream.Send(m) != nil {
					break
				}
			}
			_, err = stream.CloseAndRecv()
			require.Equal(t, s.code, exit.Code(c.wrap(err)), "%v", err)
			left, err := os.ReadDir(c.dir)
			require.NoError(t, err)
			require.Len(t, left, 2)
			require.Equal(t, lockFile, left[0].Name())
			require.Equal(t, nonceFile, left[1].Name())
		})
	}
	require.Empty(t, c.q.taken, "names are free again")
	list, err := c.List(t.Context())
	require.NoError(t, err)
	require.Empty(t, list)
}

// job.json is there before the first byte of an input; a client that goes away half
// way leaves nothing.
func TestAnUploadThatStops(t *testing.T) {
	c := start(t, t.TempDir(), "", &engine{})
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	stream, err := c.jobs.Submit(ctx)
	require.NoError(t, err)
	require.NoError(t, stream.Send(asked("half", `{"kind":"matrix","inputs":["x"]}`, "a")))
	found := func(pattern string) func() bool {
		return func() bool {
			m, err := filepath.Glob(filepath.Join(c.dir, pattern))
			return err == nil && len(m) == 1
		}
	}
	require.Eventually(t, found(".half.*.part/job.json"), 10*time.Second, time.Millisecond)
	require.NoError(t, stream.Send(chunk("abc")))
	require.Eventually(t, found(".half.*.part/input/a"), 10*time.Second, time.Millisecond)
	require.NoDirExists(t, filepath.Join(c.dir, "half"))
	cancel()
	require.Eventually(t, func() bool { return !found(".half.*.part")() }, 10*time.Second, time.Millisecond)
}

func TestInputsInPlaceStayBelowTheirFolder(t *testing.T) {
	dir, e := t.TempDir(), &engine{}
	inputs := filepath.Join(dir, "inputs")
	good := put(t, filepath.Join(inputs, "deep", "a.mtx"), []byte("a"))
	secret := put(t, filepath.Join(dir, "secret"), []byte("s"))
	require.NoError(t, os.Symlink(secret, filepath.Join(inputs, "link")))
	require.NoError(t, os.Symlink(dir, filepath.Join(inputs, "up")))
	require.NoError(t, os.Symlink(good, filepath.Join(inputs, "inside")))
	c := start(t, filepath.Join(dir, "jobs"), inputs, e)
	var seen string
	e.work = func(_ context.Context, job server.Job, _ func(server.State)) error {
		seen = job.Spec.Inputs[0]
		return nil
	}
	for path, code := range map[string]int{
		good: 0, filepath.Join(inputs, "inside"): 0, secret: exit.NotAllowed, filepath.Join(inputs, "link"): exit.NotAllowed,
		filepath.Join(inputs, "up", "secret"): exit.NotAllowed, inputs + "/../secret": exit.NotAllowed, inputs: exit.NotAllowed,
		filepath.Join(inputs, "none"): exit.NoInput, filepath.Join(inputs, "deep"): exit.NoInput, filepath.Join(dir, "none"): exit.NotAllowed,
		inputs + "-2/a": exit.NotAllowed,
	} {
		job, err := c.Submit(t.Context(), Submission{Spec: spec(path), InPlace: true})
		require.Equal(t, code, exit.Code(err), "%s: %v", path, err)
		if err == nil {
			require.Equal(t, "done", c.end(t, job).State)
			require.Equal(t, good, seen, "the link was followed once, when the job came in")
		}
	}
}

func TestUnknownJobsAndMissingFiles(t *testing.T) {
	c := start(t, t.TempDir(), "", &engine{})
	_, err := c.Watch(t.Context(), "no", func(*pb.JobState) {})
	require.Equal(t, exit.NoInput, exit.Code(err))
	require.EqualError(t, err, `there is no job "no"`)
	require.Equal(t, exit.NoInput, exit.Code(c.Fetch(t.Context(), "../no", t.TempDir())))
	_, err = c.Submit(t.Context(), Submission{Spec: spec(filepath.Join(t.TempDir(), "no.mtx"))})
	require.Equal(t, exit.NoInput, exit.Code(err))
	_, err = c.Submit(t.Context(), Submission{Spec: spec(t.TempDir())})
	require.Equal(t, exit.NoInput, exit.Code(err))
	require.NoError(t, c.stop())
	gone, err := NewClient(c.address)
	require.NoError(t, err)
	defer gone.Close()
	_, err = gone.List(t.Context())
	require.Equal(t, exit.NoPeer, exit.Code(err))
	require.ErrorContains(t, err, c.address)
	require.Equal(t, exit.NoPeer, exit.Code(gone.Health(t.Context())))
}

func TestWorkersJoin(t *testing.T) {
	c := start(t, t.TempDir(), "", &engine{})
	for version, code := range map[string]int{"7": exit.Done, "8": exit.Version} {
		stream, err := pb.NewCrewClient(c.conn).Join(t.Context())
		require.NoError(t, err)
		require.NoError(t, stream.Send(&pb.Report{Body: &pb.Report_Hello{Hello: &pb.Hello{Version: version}}}))
		o, err := stream.Recv()
		if code == exit.Done {
			require.NoError(t, err)
			require.Equal(t, "7", o.GetWelcome().Version)
		}
		require.Equal(t, code, exit.Code(c.wrap(err)))
		require.NoError(t, stream.CloseSend())
	}
}
