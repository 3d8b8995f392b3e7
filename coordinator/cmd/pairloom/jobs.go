package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"pairloom/coordinator/journal"
	"pairloom/coordinator/wire"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
)

const coordinatorVar = "PAIRLOOM_COORDINATOR"

// coordinatorFlag adds --coordinator, for which an environment variable may stand in.
func coordinatorFlag(c *cobra.Command, address *string) {
	c.Flags().StringVar(address, "coordinator", os.Getenv(coordinatorVar), "HOST:PORT of the coordinator (or "+coordinatorVar+")")
}

func needCoordinator(address string) error {
	if address == "" {
		return exit.With(exit.Usage, errors.New("which coordinator? Say --coordinator HOST:PORT or set "+coordinatorVar))
	}
	return nil
}

// withClient calls f with a client of the coordinator, until a signal comes.
func withClient(c *cobra.Command, address string, f func(ctx context.Context, client *wire.Client) error) error {
	if err := needCoordinator(address); err != nil {
		return err
	}
	client, err := wire.NewClient(address)
	if err != nil {
		return err
	}
	defer client.Close()
	ctx, stop := untilSignal(c.Context())
	defer stop()
	return f(ctx, client)
}

func jobsCommand() *cobra.Command {
	var address string
	var asJSON bool
	c := &cobra.Command{
		Use:     "jobs",
		Short:   "List a coordinator's jobs in the order of submission",
		Example: `  pairloom jobs --coordinator head:7440`,
		Args:    cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			return withClient(c, address, func(ctx context.Context, client *wire.Client) error {
				list, err := client.List(ctx)
				if err != nil {
					return err
				}
				return printJobs(c.OutOrStdout(), list, asJSON)
			})
		},
	}
	coordinatorFlag(c, &address)
	c.Flags().BoolVar(&asJSON, "json", false, "one JSON object a job and line")
	return c
}

func printJobs(out io.Writer, list []*pb.JobState, asJSON bool) error {
	if asJSON {
		for _, s := range list {
			if err := printState(out, s, true); err != nil {
				return err
			}
		}
		return nil
	}
	t := tabwriter.NewWriter(out, 0, 0, 2, ' ', 0)
	fmt.Fprintln(t, "JOB\tSTATE\tSECONDS\tWHAT")
	for _, s := range list {
		fmt.Fprintf(t, "%s\t%s\t%.1f\t%s\n", s.Job, s.State, s.ElapsedSeconds, what(s))
	}
	return t.Flush()
}

// what says in a few words what a job does or why it failed.
func what(s *pb.JobState) string {
	switch {
	case s.State == journal.Failed:
		return fmt.Sprintf("exit code %d: %s", s.ExitCode, s.Message)
	case s.Total > 0:
		return fmt.Sprintf("%s %.0f %%", s.Stage, 100*float64(s.Done)/float64(s.Total))
	}
	return s.Stage
}

// jobLine is a job's state as JSON; null where it does not apply.
type jobLine struct {
	Job      string   `json:"job"`
	State    string   `json:"state"`
	Stage    *string  `json:"stage"`
	Done     uint64   `json:"done"`
	Total    *uint64  `json:"total"`
	ExitCode *int32   `json:"exit_code"`
	Message  *string  `json:"message"`
	Seconds  float64  `json:"elapsed_seconds"`
	Crew     []string `json:"crew"`
}

func printState(out io.Writer, s *pb.JobState, asJSON bool) error {
	if !asJSON {
		_, err := fmt.Fprintln(out, strings.TrimSpace(fmt.Sprintf("%s %s %.1f s %s", s.Job, s.State, s.ElapsedSeconds, what(s))))
		return err
	}
	l := jobLine{Job: s.Job, State: s.State, Done: s.Done, Seconds: s.ElapsedSeconds, Crew: append([]string{}, s.Crew...)}
	if s.Stage != "" {
		l.Stage = &s.Stage
	}
	if s.Total > 0 {
		l.Total = &s.Total
	}
	if hasEnded(s) {
		l.ExitCode = &s.ExitCode
	}
	if s.Message != "" {
		l.Message = &s.Message
	}
	b, err := json.Marshal(l)
	if err == nil {
		_, err = out.Write(append(b, '\n'))
	}
	return err
}

func hasEnded(s *pb.JobState) bool { return s.State == journal.Done || s.State == journal.Failed }

// seer prints a job's states as they come: every new stage, and otherwise one a second.
func seer(out io.Writer, asJSON bool) func(*pb.JobState) {
	var last time.Time
	var before *pb.JobState
	return func(s *pb.JobState) {
		same := before != nil && before.State == s.State && before.Stage == s.Stage
		if same && time.Since(last) < time.Second {
			return
		}
		before, last = s, time.Now()
		_ = printState(out, s, asJSON)
	}
}

// ended is the error of a job that failed, with its own exit code.
func ended(s *pb.JobState) error {
	if s.State != journal.Failed {
		return nil
	}
	return exit.With(int(s.ExitCode), fmt.Errorf("job %s failed: %s", s.Job, s.Message))
}
