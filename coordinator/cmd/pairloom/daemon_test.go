package main

import (
	"bytes"
	"context"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"io"
	"log/slog"
	"math/rand/v2"
	"net"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/spf13/cobra"
	"github.com/stretchr/testify/require"
	"go.uber.org/goleak"

	"pairloom/coordinator/server"
	"pairloom/coordinator/wire"
	"pairloom/sparse/exit"
)

// grid writes an n×n×n array of drawn values and returns its path.
func grid(t *testing.T, n int) string {
	r := rand.New(rand.NewPCG(uint64(n), 3))
	head := fmt.Sprintf("{'descr': '<f8', 'fortran_order': False, 'shape': (%d, %d, %d), }", n, n, n)
	head += strings.Repeat(" ", 127-10-len(head)) + "\n"
	b := append([]byte("\x93NUMPY\x01\x00"), byte(len(head)), 0)
	b = append(b, head...)
	for range n * n * n {
		b, _ = binary.Append(b, binary.LittleEndian, r.Float64())
	}
	path := filepath.Join(t.TempDir(), "volume.npy")
	require.NoError(t, os.WriteFile(path, b, 0o644))
	return path
}

// saying runs a command and returns what it printed and its exit code.
func saying(t *testing.T, c *cobra.Command, args ...string) (out string, code int) {
	var stdout, stderr bytes.Buffer
	c.SetArgs(args)
	c.SetOut(&stdout)
	c.SetErr(&stderr)
	c.SilenceErrors, c.SilenceUsage = true, true
	err := c.ExecuteContext(t.Context())
	if err != nil {
		t.Logf("%s %v: %v", c.Name(), args, err)
	}
	return stdout.String(), exit.Code(err)
}

// background runs f until stop, which returns what f did.
func background(t *testing.T, f func(ctx context.Context) error) (stop func() error) {
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- f(ctx) }()
	stop = sync.OnceValue(func() error { cancel(); return <-done })
	t.Cleanup(func() { _ = stop() })
	return stop
}

// startServe starts a coordinator and returns its address.
func startServe(t *testing.T, f serveFlags) (address string, stop func() error) {
	r, w := io.Pipe()
	stop = background(t, func(ctx context.Context) error {
		defer w.Close()
		return serve(ctx, f, w, io.Discard)
	})
	_, err := fmt.Fscanln(r, &address)
	require.NoError(t, err)
	return address, stop
}

var quiet = slog.New(slog.DiscardHandler)

func startWork(t *testing.T, address string) (stop func() error) {
	f := workFlags{coordinator: address, threads: 1, patience: 20 * time.Second}
	return background(t, func(ctx context.Context) error { return work(ctx, f, quiet) })
}

// Each command once on a coordinator with two workers, by output and exit code.
func TestAJobByCommands(t *testing.T) {
	defer goleak.VerifyNone(t, goleak.IgnoreCurrent())
	jobs := t.TempDir()
	address, stopServe := startServe(t, serveFlags{listen: "127.0.0.1:0", jobs: jobs})
	stopA, stopB := startWork(t, address), startWork(t, address)
	t.Setenv(coordinatorVar, address)

	out, code := saying(t, healthCommand())
	require.Equal(t, exit.Done, code)
	require.Equal(t, "serving\n", out)
	in := grid(t, 8)
	out, code = saying(t, submitCommand(), in, "--name", "first", "--wait")
	require.Equal(t, exit.Done, code)
	require.Equal(t, "first\n", out, "the name alone")
	_, code = saying(t, submitCommand(), in, "--name", "first")
	require.Equal(t, exit.CannotOut, code)

	broken := filepath.Join(t.TempDir(), "broken.npy")
	require.NoError(t, os.WriteFile(broken, []byte("\x93NUMPY\x01\x00"), 0o644))
	out, code = saying(t, submitCommand(), broken)
	require.Equal(t, exit.Done, code)
	require.Equal(t, "broken-1\n", out)
	out, code = saying(t, watchCommand(), "broken-1")
	require.Equal(t, exit.BadInput, code, "the job's own code")
	require.Contains(t, out, "broken-1 failed")
	_, code = saying(t, submitCommand(), broken, "--wait")
	require.Equal(t, exit.BadInput, code)

	out, code = saying(t, jobsCommand())
	require.Equal(t, exit.Done, code)
	lines := strings.Split(strings.TrimSpace(out), "\n")
	require.Len(t, lines, 4)
	require.Regexp(t, `^first +done `, lines[1])
	require.Regexp(t, `^broken-1 +failed .*exit code 65`, lines[2])
	out, code = saying(t, jobsCommand(), "--json")
	require.Equal(t, exit.Done, code)
	var l jobLine
	require.NoError(t, json.Unmarshal([]byte(strings.Split(out, "\n")[1]), &l))
	require.Equal(t, []any{"broken-1", "failed", int32(65)}, []any{l.Job, l.State, *l.ExitCode})

	_, code = saying(t, watchCommand(), "first", "--json")
	require.Equal(t, exit.Done, code)
	_, code = saying(t, watchCommand(), "nobody")
	require.Equal(t, exit.NoInput, code)
	result := filepath.Join(t.TempDir(), "deep", "out")
	for _, c := range []struct {
		code int
		args []string
	}{{exit.Usage, []string{"first"}}, {exit.NoInput, []string{"nobody", "--out", result}}, {exit.BadInput, []string{"broken-1", "--out", result}},
		{exit.Done, []string{"first", "--out", result}}, {exit.CannotOut, []string{"first", "--out", result}},
		{exit.Done, []string{"first", "--out", result, "--replace"}}} {
		_, code = saying(t, fetchCommand(), c.args...)
		require.Equal(t, c.code, code, c.args)
	}
	entries, err := os.ReadDir(filepath.Dir(result))
	require.NoError(t, err)
	require.Len(t, entries, 1, "nothing half-fetched is left")
	for _, name := range wire.ResultFiles {
		want, err := os.ReadFile(filepath.Join(jobs, "first", "result", name))
		require.NoError(t, err)
		got, err := os.ReadFile(filepath.Join(result, name))
		require.NoError(t, err)
		require.Equal(t, want, got)
	}
	require.NoError(t, stopA(), "SIGTERM ends a worker well")
	require.NoError(t, stopServe())
	require.NoError(t, stopB(), "told to stop by the coordinator")
}

func TestCommandsWithoutACoordinator(t *testing.T) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	require.NoError(t, err)
	nobody := l.Addr().String()
	l.Close()
	in := grid(t, 2)
	commands := map[string]func() (*cobra.Command, []string){
		"health": func() (*cobra.Command, []string) { return healthCommand(), nil },
		"jobs":   func() (*cobra.Command, []string) { return jobsCommand(), nil },
		"watch":  func() (*cobra.Command, []string) { return watchCommand(), []string{"a"} },
		"fetch": func() (*cobra.Command, []string) {
			return fetchCommand(), []string{"a", "--out", filepath.Join(t.TempDir(), "o")}
		},
		"submit": func() (*cobra.Command, []string) { return submitCommand(), []string{in} },
		"work":   func() (*cobra.Command, []string) { return workCommand(), []string{"--patience", "150ms"} },
	}
	for name, make := range commands {
		t.Run(name, func(t *testing.T) {
			t.Setenv(coordinatorVar, "")
			c, args := make()
			_, code := saying(t, c, args...)
			require.Equal(t, exit.Usage, code, "none was named")
			for address, want := range map[string]int{nobody: exit.NoPeer, "nonsense": exit.Usage} {
				c, args = make()
				_, code = saying(t, c, append(args, "--coordinator", address)...)
				require.Equal(t, want, code, address)
			}
		})
	}
	_, code := saying(t, serveCommand())
	require.Equal(t, exit.Usage, code, "--jobs is missing")
	_, code = saying(t, serveCommand(), "--jobs", t.TempDir(), "--listen", "nonsense")
	require.Equal(t, exit.Usage, code)
	_, code = saying(t, serveCommand(), "--jobs", filepath.Join(in, "below-a-file"))
	require.Equal(t, exit.CannotOut, code)
	_, code = saying(t, workCommand(), "--coordinator", nobody, "--threads", "0")
	require.Equal(t, exit.Usage, code)
	_, code = saying(t, workCommand(), "--coordinator", nobody, "--listen", "nonsense")
	require.Equal(t, exit.Usage, code)
}

// plain is a coordinator without jobs.
type plain struct {
	c       *server.Coordinator
	address string
	cut     func() // without a word of farewell
}

func bare(t *testing.T, cfg server.Config, listen string) plain {
	q, err := wire.OpenQueue(t.TempDir(), wire.Config{})
	require.NoError(t, err)
	c := server.New(cfg)
	s := wire.NewServer(c, q)
	l, err := net.Listen("tcp", listen)
	require.NoError(t, err)
	done := make(chan struct{})
	go func() { defer close(done); _ = s.Serve(l) }()
	cut := sync.OnceFunc(func() {
		now, cancel := context.WithCancel(context.Background())
		cancel()
		s.Stop(now)
		<-done
		q.Close()
	})
	t.Cleanup(cut)
	return plain{c, l.Addr().String(), cut}
}

// A refusal ends a worker at once, however patient it is.
func TestWorkersThatMayNotJoin(t *testing.T) {
	_, code := saying(t, workCommand(), "--coordinator", bare(t, server.Config{Version: "another"}, "127.0.0.1:0").address, "--patience", "1h")
	require.Equal(t, exit.Version, code)
	path := filepath.Join(t.TempDir(), "nonce")
	f := workFlags{coordinator: bare(t, server.Config{Version: version(), NoncePath: path, Nonce: "x"}, "127.0.0.1:0").address, threads: 1, patience: time.Hour}
	err := work(t.Context(), f, quiet)
	require.Equal(t, exit.NoPeer, exit.Code(err))
	require.ErrorContains(t, err, path, "the folder is not shared")
	require.NoError(t, os.WriteFile(path, []byte("y"), 0o644))
	require.ErrorContains(t, work(t.Context(), f, quiet), path, "another folder of that name")
}

// A worker outlives its coordinator's process and works for the next one.
func TestAWorkerJoinsAgain(t *testing.T) {
	defer goleak.VerifyNone(t, goleak.IgnoreCurrent())
	first := bare(t, server.Config{Version: version()}, "127.0.0.1:0")
	stop := startWork(t, first.address)
	require.NoError(t, first.c.Wait(t.Context(), 1))
	first.cut()
	second := bare(t, server.Config{Version: version()}, first.address)
	require.NoError(t, second.c.Wait(t.Context(), 1))
	require.NoError(t, stop())
	second.cut()
}
