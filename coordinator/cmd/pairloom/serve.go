package main

import (
	"context"
	"fmt"
	"io"
	"log/slog"
	"net"
	"os"
	"os/signal"
	"sync"
	"syscall"
	"time"

	"github.com/spf13/cobra"

	"pairloom/coordinator/report"
	"pairloom/coordinator/server"
	"pairloom/coordinator/wire"
	"pairloom/sparse/exit"
)

// farewell is how long calls under way have when a server stops.
const farewell = 2 * time.Second

type serveFlags struct {
	listen, jobs, inputs string
	json                 bool
}

func serveCommand() *cobra.Command {
	var f serveFlags
	c := &cobra.Command{
		Use:   "serve --jobs FOLDER",
		Short: "Coordinate workers and run the jobs that are submitted",
		Long: `Serve lets workers join and runs submitted jobs on them, one after another, in the
order of submission. Its address is printed alone on stdout; the log goes to stderr.
The jobs folder holds everything: a coordinator that is started again on it knows its
jobs. Workers must see that folder under the same path. SIGINT and SIGTERM stop it:
exit code 0, or 75 if a job was cut off.`,
		Example: `  pairloom serve --listen :7440 --jobs /shared/jobs`,
		Args:    cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			ctx, stop := untilSignal(c.Context())
			defer stop()
			return serve(ctx, f, c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	c.Flags().StringVar(&f.listen, "listen", "127.0.0.1:7440", "HOST:PORT to listen on; port 0 picks a free one")
	c.Flags().StringVar(&f.jobs, "jobs", "", "folder of the jobs, shared with the workers (required)")
	c.Flags().StringVar(&f.inputs, "inputs", "", "folder below which submit --in-place may name inputs")
	c.Flags().BoolVar(&f.json, "json", false, "log in JSON")
	return c
}

// untilSignal ends with SIGINT or SIGTERM.
func untilSignal(ctx context.Context) (context.Context, context.CancelFunc) {
	return signal.NotifyContext(ctx, os.Interrupt, syscall.SIGTERM)
}

func logger(to io.Writer, json bool) *slog.Logger {
	if json {
		return slog.New(slog.NewJSONHandler(to, nil))
	}
	return slog.New(slog.NewTextHandler(to, nil))
}

// serve runs a coordinator until ctx ends.
func serve(ctx context.Context, f serveFlags, out, errs io.Writer) error {
	if f.jobs == "" {
		return exit.With(exit.Usage, fmt.Errorf("serve needs --jobs FOLDER"))
	}
	log := logger(errs, f.json)
	q, err := wire.OpenQueue(f.jobs, wire.Config{Version: version(), Inputs: f.inputs, Write: writeResult, Log: log})
	if err != nil {
		return err
	}
	defer q.Close()
	l, err := net.Listen("tcp", f.listen)
	if err != nil {
		return exit.With(exit.Usage, err)
	}
	path, nonce := q.Nonce()
	c := server.New(server.Config{Version: version(), NoncePath: path, Nonce: nonce})
	s := wire.NewServer(c, q)
	fmt.Fprintln(out, l.Addr())
	log.Info("coordinator serves", "version", version(), "address", l.Addr().String(), "jobs", f.jobs)

	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	var wg sync.WaitGroup
	var accepted error
	wg.Go(func() { accepted = s.Serve(l); cancel() })
	ran := q.Run(ctx, c)
	c.Dismiss("the coordinator stops")
	end, done := context.WithTimeout(context.Background(), farewell)
	defer done()
	s.Stop(end)
	wg.Wait()
	log.Info("coordinator stopped")
	if ran == nil {
		return accepted
	}
	return ran
}

// writeResult writes the result files of a finished job.
func writeResult(ctx context.Context, job, dst string, run *report.Run, keepZero bool) error {
	_, err := report.Write(ctx, job, dst, run, keepZero)
	return err
}
