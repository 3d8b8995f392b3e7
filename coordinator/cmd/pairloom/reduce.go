package main

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
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
		Use:   "reduce INPUT…",
		Short: "Read, order and reduce an input here, and publish its pairs",
		Long: `Reduce does the whole job in this process: it reads the input, orders it into a
filtered complex, reduces its boundary matrices, gathers the evidence, and writes
pairs.csv, betti.csv and summary.json into --out. Without --out it prints what came
out and keeps nothing. A .npy is a grid and a .mtx a matrix; for a .csv, say with --as
what it is.`,
		Example: `  pairloom reduce volume.npy --out result
  pairloom reduce cities.csv --as distances --degrees 2 --out result`,
		Args: cobra.MinimumNArgs(1),
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
	p.IntVar(&f.threads, "threads", defaultThreads(), "threads over all workers")
	p.BoolVar(&f.json, "json", false, "print the summary as JSON")
	p.BoolVar(&f.quiet, "quiet", false, "no progress")
	return c
}

// results are the files of a result folder.
var results = []string{"pairs.csv", "betti.csv", "summary.json"}

func (f *reduceFlags) run(ctx context.Context, c *cobra.Command, args []string) error {
	began := time.Now()
	spec, options, err := f.input.read(args)
	if err != nil {
		return err
	}
	if f.workers < 1 || f.threads < 1 {
		return usage("--workers %d, --threads %d; at least 1 was expected", f.workers, f.threads)
	}
	made, err := f.checkOut()
	if err != nil {
		return err
	}
	job, err := f.jobFolder()
	if err != nil {
		return exit.With(exit.CannotOut, err)
	}
	summary, err := f.reduce(ctx, c, job, spec, options, began)
	if !f.keepJob || err != nil {
		err = errors.Join(err, os.RemoveAll(job))
	}
	if err != nil {
		if made {
			os.Remove(f.out)
		}
		return err
	}
	return f.tell(c, summary)
}

// checkOut makes the output folder, or refuses one that is in use.
func (f *reduceFlags) checkOut() (made bool, err error) {
	if f.out == "" {
		return false, nil
	}
	entries, err := os.ReadDir(f.out)
	switch {
	case errors.Is(err, os.ErrNotExist):
		return true, exit.With(exit.CannotOut, os.MkdirAll(f.out, 0o755))
	case err != nil:
		return false, exit.With(exit.CannotOut, err)
	case len(entries) > 0 && !f.replace:
		return false, exit.With(exit.CannotOut, fmt.Errorf("%s is not empty; name another folder or use --replace", f.out))
	}
	return false, nil
}

func (f *reduceFlags) jobFolder() (string, error) {
	switch {
	case f.jobs != "":
		if err := os.MkdirAll(f.jobs, 0o755); err != nil {
			return "", err
		}
		return os.MkdirTemp(f.jobs, "reduce-")
	case f.out != "":
		job := filepath.Join(f.out, "job")
		return job, cmpErr(os.RemoveAll(job), func() error { return os.Mkdir(job, 0o755) })
	}
	return os.MkdirTemp("", "pairloom-")
}

func cmpErr(err error, next func() error) error {
	if err != nil {
		return err
	}
	return next()
}

// reduce runs the job and moves its result to --out.
func (f *reduceFlags) reduce(ctx context.Context, c *cobra.Command, job string, spec source.Spec, options plan.Options, began time.Time) (*report.Summary, error) {
	show, end := f.progress(c.ErrOrStderr())
	defer end()
	run, err := inprocess.Run(ctx, inprocess.Config{Version: version(), Workers: f.workers, Threads: f.threads},
		server.Job{Name: "reduce", Folder: job, Spec: spec, Options: options}, show)
	if err != nil {
		return nil, err
	}
	dst := filepath.Join(job, "result")
	if err := os.Mkdir(dst, 0o755); err != nil {
		return nil, err
	}
	run.Seconds["total"] = time.Since(began).Seconds()
	run.CPU = cpuSeconds()
	summary, err := report.Write(ctx, job, dst, run, options.KeepZero)
	if err != nil || f.out == "" {
		return summary, err
	}
	return summary, f.place(dst)
}

// place moves the finished files into --out.
func (f *reduceFlags) place(from string) error {
	for _, name := range results {
		if f.replace {
			if err := os.Remove(filepath.Join(f.out, name)); err != nil && !errors.Is(err, os.ErrNotExist) {
				return exit.With(exit.CannotOut, err)
			}
		}
		if err := os.Link(filepath.Join(from, name), filepath.Join(f.out, name)); err != nil {
			return exit.With(exit.CannotOut, err)
		}
	}
	return nil
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
		out := bufio.NewWriter(c.OutOrStdout())
		if err := s.WriteJSON(out); err != nil {
			return err
		}
		return out.Flush()
	}
	s.Words(c.OutOrStdout())
	if f.out != "" {
		fmt.Fprintf(c.OutOrStdout(), "  written: %s\n", f.out)
	}
	return nil
}

// sayEvery is how often progress is said where there is no terminal.
const sayEvery = 3 * time.Second

// progress says where the job is: in place on a terminal, a line now and then otherwise.
func (f *reduceFlags) progress(w io.Writer) (show func(server.State), end func()) {
	if f.quiet {
		return nil, func() {}
	}
	file, _ := w.(*os.File)
	terminal := false
	if file != nil {
		_, err := unix.IoctlGetTermios(int(file.Fd()), unix.TCGETS)
		terminal = err == nil
	}
	last, stageBegan, stage := time.Now(), time.Now(), ""
	return func(s server.State) {
			now := time.Now()
			if s.Stage != stage {
				stage, stageBegan = s.Stage, now
			}
			if every := sayEvery; terminal && now.Sub(last) < every/20 || !terminal && now.Sub(last) < every {
				return
			}
			last = now
			line := describe(s, now.Sub(stageBegan))
			if terminal {
				fmt.Fprintf(w, "\r\033[K%s", line)
				return
			}
			fmt.Fprintln(w, line)
		}, func() {
			if terminal {
				fmt.Fprint(w, "\r\033[K")
			}
		}
}

// describe tells a stage with its rate and the time left, where they are known.
func describe(s server.State, took time.Duration) string {
	if s.Total == 0 || s.Done == 0 || took <= 0 {
		return s.Stage
	}
	rate := float64(s.Done) / took.Seconds()
	left := time.Duration(float64(s.Total-min(s.Done, s.Total)) / rate * float64(time.Second)).Round(time.Second)
	return fmt.Sprintf("%s: %d of %d (%.0f %%), %.3g a second, %v left", s.Stage, s.Done, s.Total, 100*float64(s.Done)/float64(s.Total), rate, left)
}
