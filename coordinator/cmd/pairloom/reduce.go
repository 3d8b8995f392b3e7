package main

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"time"

	"github.com/spf13/cobra"
	"golang.org/x/sys/unix"

	"pairloom/coordinator/cmd/inprocess"
	"pairloom/coordinator/plan"
	"pairloom/coordinator/report"
	"pairloom/coordinator/server"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

type reduceFlags struct {
	input            inputFlags
	out, jobs        string
	replace, keepJob bool
	json, quiet      bool
	workers, threads int
}

func reduceCommand() *cobra.Command {
	var f reduceFlags
	c := &cobra.Command{
		Use:         "reduce INPUT…",
		Annotations: map[string]string{oneJSON: "yes"},
		Short:       "Read, order and reduce an input here, and publish its pairs",
		Long: `Reduce does the whole job in this process: it reads the input, orders it into a
filtered complex, reduces its boundary matrices, gathers the evidence, and writes
pairs.csv, betti.csv and summary.json into --out. Without --out it prints what came
out and keeps nothing. A .npy is a grid and a .mtx a matrix; for a .csv, say with --as
what it is.`,
		Example: `  pairloom reduce volume.npy --out result
  pairloom reduce cities.csv --as distances --degrees 2 --out result`,
		Args: needsInput,
		RunE: func(c *cobra.Command, args []string) error {
			ctx, stop := untilSignal(c.Context())
			defer stop()
			return f.run(ctx, c, args)
		},
	}
	f.input.add(c)
	p := c.Flags()
	p.StringVar(&f.out, "out", "", "folder of the result: missing or empty, else --replace")
	p.BoolVar(&f.replace, "replace", false, "replace the result that is in --out, after success")
	p.StringVar(&f.jobs, "jobs", "", "folder for the job folder while it runs (default: inside --out)")
	p.BoolVar(&f.keepJob, "keep-job", false, "keep the job folder after success")
	p.IntVar(&f.workers, "workers", 1, "workers in this process")
	p.IntVar(&f.threads, "threads", system.defaultThreads(), "threads over all workers")
	p.BoolVar(&f.json, "json", false, "print the summary as JSON")
	p.BoolVar(&f.quiet, "quiet", false, "no progress")
	return c
}

func (f *reduceFlags) run(ctx context.Context, c *cobra.Command, args []string) (err error) {
	began := time.Now()
	spec, options, err := f.input.read(args)
	if err != nil {
		return err
	}
	if f.workers < 1 || f.threads < 1 {
		return usage("--workers %d, --threads %d; at least 1 was expected", f.workers, f.threads)
	}
	p, err := f.place()
	if err != nil {
		return exit.With(exit.CannotOut, err)
	}
	defer func() { err = errors.Join(err, p.leave(err == nil, f.keepJob)) }()
	summary, err := f.reduce(ctx, c, p, spec, options, began)
	if err != nil {
		return err
	}
	if err := p.publish(f.replace); err != nil {
		return exit.With(exit.CannotOut, err)
	}
	return f.tell(c, summary)
}

// place makes the folders of the job and its result.
func (f *reduceFlags) place() (*place, error) {
	p := &place{out: f.out}
	if err := p.take(f.replace); err != nil {
		return nil, err
	}
	if err := p.makeJob(f.jobs); err != nil {
		return nil, errors.Join(err, p.leave(false, false))
	}
	return p, nil
}

// reduce runs the job and writes its result aside.
func (f *reduceFlags) reduce(ctx context.Context, c *cobra.Command, p *place, spec source.Spec, options plan.Options, began time.Time) (*report.Summary, error) {
	if ctx.Err() != nil {
		return nil, context.Cause(ctx)
	}
	show := newMeter(c.ErrOrStderr(), f.quiet)
	defer show.End()
	run, err := inprocess.Run(ctx, inprocess.Config{Version: version(), Workers: f.workers, Threads: f.threads},
		server.Job{Name: "reduce", Folder: p.job, Spec: spec, Options: options}, show.Show)
	if err != nil {
		return nil, err
	}
	show.Stage("write")
	run.Seconds["total"] = time.Since(began).Seconds()
	run.CPU = cpuSeconds()
	return report.Write(ctx, p.job, p.result, run, options.KeepZero)
}

func cpuSeconds() float64 {
	var u unix.Rusage
	if unix.Getrusage(unix.RUSAGE_SELF, &u) != nil {
		return 0
	}
	return float64(u.Utime.Nano()+u.Stime.Nano()) / 1e9
}

func (f *reduceFlags) tell(c *cobra.Command, s *report.Summary) error {
	if f.json {
		return s.WriteJSON(c.OutOrStdout())
	}
	s.Words(c.OutOrStdout())
	if f.out != "" {
		fmt.Fprintf(c.OutOrStdout(), "Written: %s in %s.\n", strings.Join(report.Files, ", "), f.out)
	}
	return nil
}
