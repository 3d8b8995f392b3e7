package main

import (
	"bufio"
	"bytes"
	"encoding/json"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/coordinator/plan"
	"pairloom/coordinator/wire"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

const asItself = "PAIRLOOM_TEST_AS_ITSELF"

// TestMain lets the test binary be pairloom, so that tests can start real processes.
func TestMain(m *testing.M) {
	if os.Getenv(asItself) != "" {
		main()
		os.Exit(0)
	}
	os.Exit(m.Run())
}

// process starts pairloom with arguments; it is killed at the end of the test at the latest.
func process(t *testing.T, args ...string) (p *exec.Cmd, log *bytes.Buffer) {
	self, err := os.Executable()
	require.NoError(t, err)
	p, log = exec.Command(self, args...), &bytes.Buffer{}
	p.Env = append(os.Environ(), asItself+"=1")
	p.Stderr = log
	t.Cleanup(func() {
		if p.Process != nil && p.ProcessState == nil {
			_ = p.Process.Kill()
			_ = p.Wait()
		}
		if t.Failed() {
			t.Logf("%v:\n%s", args, log)
		}
	})
	return p, log
}

func exited(t *testing.T, p *exec.Cmd) int {
	err := p.Wait()
	if err != nil {
		require.ErrorAs(t, err, new(*exec.ExitError))
	}
	return p.ProcessState.ExitCode()
}

// cluster is a coordinator and workers, each a process of its own.
type cluster struct {
	*wire.Client
	serve   *exec.Cmd
	workers []*exec.Cmd
	address string
	jobs    string
}

func startCluster(t *testing.T, workers int) *cluster {
	c := &cluster{jobs: t.TempDir()}
	c.serve, _ = process(t, "serve", "--listen", "127.0.0.1:0", "--jobs", c.jobs)
	out, err := c.serve.StdoutPipe()
	require.NoError(t, err)
	require.NoError(t, c.serve.Start())
	line, err := bufio.NewReader(out).ReadString('\n')
	require.NoError(t, err)
	c.address = strings.TrimSpace(line)
	c.Client, err = wire.NewClient(c.address)
	require.NoError(t, err)
	t.Cleanup(func() { c.Close() })
	for range workers {
		w, _ := process(t, "work", "--coordinator", c.address, "--threads", "1")
		require.NoError(t, w.Start())
		c.workers = append(c.workers, w)
	}
	return c
}

// run submits a job on all workers and returns how it ended; see is told of every state.
func (c *cluster) run(t *testing.T, in string, see func(*pb.JobState)) *pb.JobState {
	job, err := c.Submit(t.Context(), wire.Submission{Spec: source.Spec{Kind: source.Grid, Inputs: []string{in}, Degrees: -1}, Options: plan.Options{Spread: true}})
	require.NoError(t, err)
	last, err := c.Watch(t.Context(), job, see)
	require.NoError(t, err)
	return last
}

// crew waits until so many workers take part in jobs: it runs jobs until they do.
func (c *cluster) crew(t *testing.T, n int) {
	in := grid(t, 2)
	for {
		if s := c.run(t, in, func(*pb.JobState) {}); len(s.Crew) == n {
			return
		}
	}
}

func read(t *testing.T, folder, name string) []byte {
	b, err := os.ReadFile(filepath.Join(folder, name))
	require.NoError(t, err)
	return b
}

// Four worker processes that hand columns to each other publish the bytes that one
// process publishes; a worker that is killed fails the job, and no other.
func TestAClusterAgreesWithOneProcess(t *testing.T) {
	in, alone := grid(t, 32), filepath.Join(t.TempDir(), "alone")
	p, _ := process(t, "reduce", in, "--out", alone, "--quiet")
	require.NoError(t, p.Run())

	c := startCluster(t, 4)
	c.crew(t, 4)
	s := c.run(t, in, func(*pb.JobState) {})
	require.Equal(t, "done", s.State, s.Message)
	require.Len(t, s.Crew, 4)
	together := filepath.Join(t.TempDir(), "together")
	require.NoError(t, os.Mkdir(together, 0o755))
	require.NoError(t, c.Fetch(t.Context(), s.Job, together))
	for _, name := range []string{"pairs.csv", "betti.csv"} {
		require.Equal(t, string(read(t, alone, name)), string(read(t, together, name)), name)
	}
	var summary struct {
		Exchange struct{ Columns, Bytes uint64 }
		Crew     []struct{ Sent, Received uint64 }
	}
	require.NoError(t, json.Unmarshal(read(t, together, "summary.json"), &summary))
	require.Positive(t, summary.Exchange.Columns)
	require.Greater(t, summary.Exchange.Bytes, 12*summary.Exchange.Columns, "what a column takes at least")
	var sent, received uint64
	for _, m := range summary.Crew {
		sent, received = sent+m.Sent, received+m.Received
	}
	require.Equal(t, []uint64{summary.Exchange.Columns, summary.Exchange.Columns}, []uint64{sent, received})

	// A worker stands still, so the job cannot end, and dies when work is under way.
	victim := c.workers[2].Process
	require.NoError(t, victim.Signal(syscall.SIGSTOP))
	killed := false
	s = c.run(t, in, func(s *pb.JobState) {
		if !killed && s.State == "running" && s.Stage != "waiting for workers" {
			killed = true
			require.NoError(t, victim.Kill())
		}
	})
	require.Equal(t, []any{"failed", int32(exit.NoPeer)}, []any{s.State, s.ExitCode}, s.Message)
	require.NoDirExists(t, filepath.Join(c.jobs, s.Job, "result"))
	w, _ := process(t, "watch", s.Job, "--coordinator", c.address)
	require.NoError(t, w.Start())
	require.Equal(t, exit.NoPeer, exited(t, w))
	s = c.run(t, in, func(*pb.JobState) {})
	require.Equal(t, "done", s.State, s.Message)
	require.Len(t, s.Crew, 3)
	require.Equal(t, read(t, alone, "pairs.csv"), read(t, filepath.Join(c.jobs, s.Job, "result"), "pairs.csv"))

	require.NoError(t, c.serve.Process.Signal(syscall.SIGTERM))
	require.Equal(t, exit.Done, exited(t, c.serve))
	for i, w := range c.workers {
		if i != 2 {
			require.Equal(t, exit.Done, exited(t, w), "told to stop")
		}
	}
}
