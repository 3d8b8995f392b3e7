package journal

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/stretchr/testify/require"
	"pgregory.net/rapid"

	"pairloom/coordinator/plan"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

var noon = time.Date(2026, 12, 1, 12, 0, 0, 0, time.UTC)

func TestNames(t *testing.T) {
	for _, good := range []string{"a", "grid-64", "A.b_c-9", "-", strings.Repeat("x", 64), "a..b"} {
		require.NoError(t, CheckName(good), good)
	}
	for _, bad := range []string{"", ".", "..", ".a", "a/b", "/", "a\\b", "a b", "ä", "a\n", "a\x00", strings.Repeat("x", 65), "../x"} {
		require.Equal(t, exit.Usage, exit.Code(CheckName(bad)), "%q", bad)
	}
}

// Whatever a file is called, its tidy name is a name and keeps its ending.
func TestTidyNamesAreNames(t *testing.T) {
	require.Equal(t, "grid.npy", Tidy("grid.npy"))
	require.Equal(t, "m_n_grid.mtx.gz", Tidy("..m n/grid.mtx.gz"))
	require.Equal(t, "_", Tidy("..."))
	rapid.Check(t, func(t *rapid.T) {
		s := rapid.String().Draw(t, "s")
		require.NoError(t, CheckName(Tidy(s)))
		require.True(t, strings.HasSuffix(Tidy(s+"x.mtx.gz"), "x.mtx.gz"))
	})
}

func TestARequestIsWrittenOnceAndReadBack(t *testing.T) {
	folder, scale := t.TempDir(), 0.25
	_, err := ReadRequest(folder)
	require.Equal(t, exit.NoInput, exit.Code(err))
	r := Request{Job: "a", Version: "1", Submitted: noon, Spec: source.Spec{Kind: source.Points, Inputs: []string{"x.csv"}, Degrees: -1, MaxScale: &scale},
		Options: plan.Options{Route: "boundary", Without: []string{"graph"}, Memory: 7}}
	require.NoError(t, WriteRequest(folder, r))
	got, err := ReadRequest(folder)
	require.NoError(t, err)
	r.Schema = Schema
	require.Equal(t, r, got)
	require.ErrorIs(t, WriteRequest(folder, r), os.ErrExist)

	require.NoError(t, os.WriteFile(filepath.Join(folder, "job.json"), []byte(`{"schema":2}`), 0o644))
	_, err = ReadRequest(folder)
	require.Equal(t, exit.Version, exit.Code(err))
	require.NoError(t, os.WriteFile(filepath.Join(folder, "job.json"), []byte(`{"sch`), 0o644))
	_, err = ReadRequest(folder)
	require.Equal(t, exit.BadInput, exit.Code(err))
}

func TestStates(t *testing.T) {
	folder := t.TempDir()
	s, err := ReadState(folder)
	require.NoError(t, err)
	require.Equal(t, State{State: Waiting}, s)
	require.Zero(t, s.Elapsed(noon))
	want := State{State: Running, Started: noon, Crew: []string{"a", "b"}}
	require.NoError(t, WriteState(folder, want))
	s, err = ReadState(folder)
	require.NoError(t, err)
	require.Equal(t, want, s)
	require.Equal(t, time.Minute, s.Elapsed(noon.Add(time.Minute)))
	require.False(t, s.HasEnded())
	want.State, want.ExitCode, want.Message, want.Ended = Failed, 65, "why", noon.Add(time.Second)
	require.NoError(t, WriteState(folder, want))
	s, err = ReadState(folder)
	require.NoError(t, err)
	require.Equal(t, want, s)
	require.Equal(t, time.Second, s.Elapsed(noon.Add(time.Hour)))
	require.NoError(t, os.Mkdir(filepath.Join(folder, "result"), 0o755))
	s, err = ReadState(folder)
	require.NoError(t, err)
	require.Equal(t, Done, s.State, "the result was published, and then the coordinator died")
	left, err := filepath.Glob(filepath.Join(folder, ".*"))
	require.NoError(t, err)
	require.Empty(t, left)
}

func TestEventsAreOneObjectALine(t *testing.T) {
	folder := t.TempDir()
	require.NoError(t, Append(folder, Event{Time: noon, Event: "submitted"}))
	require.NoError(t, Append(folder, Event{Time: noon.Add(time.Second), Event: "failed", ExitCode: 65, Message: "two\nlines"}))
	b, err := os.ReadFile(filepath.Join(folder, "events.jsonl"))
	require.NoError(t, err)
	lines := strings.Split(strings.TrimSuffix(string(b), "\n"), "\n")
	require.Equal(t, `{"time":"2026-12-01T12:00:00Z","event":"submitted"}`, lines[0])
	require.Len(t, lines, 2)
	var e Event
	require.NoError(t, json.Unmarshal([]byte(lines[1]), &e))
	require.Equal(t, "two\nlines", e.Message)
}

func TestJobsAreFoundInOrder(t *testing.T) {
	jobs := t.TempDir()
	for i, name := range []string{"late", "early", "broken", ".half.part", "other"} {
		folder := filepath.Join(jobs, name)
		require.NoError(t, os.Mkdir(folder, 0o755))
		if name != "other" {
			require.NoError(t, WriteRequest(folder, Request{Job: name, Submitted: noon.Add(-time.Duration(i) * time.Hour)}))
		}
	}
	require.NoError(t, os.WriteFile(filepath.Join(jobs, "nonce"), nil, 0o644))
	require.NoError(t, WriteState(filepath.Join(jobs, "late"), State{State: Failed, ExitCode: 71, Message: "too big"}))
	require.NoError(t, os.WriteFile(filepath.Join(jobs, "broken", "job.json"), []byte("?"), 0o644))
	found, err := Find(jobs)
	require.NoError(t, err)
	var names []string
	for _, f := range found {
		names = append(names, f.Request.Job+" "+f.State.State)
	}
	require.Equal(t, []string{"broken failed", "early waiting", "late failed"}, names)
	require.Equal(t, 65, found[0].State.ExitCode)
	require.Equal(t, 71, found[2].State.ExitCode)
	_, err = Find(filepath.Join(jobs, "none"))
	require.Equal(t, exit.NoInput, exit.Code(err))
}

func TestPathsAreWhatTheReadersOpen(t *testing.T) {
	s := source.Spec{Inputs: []string{"a", "b"}, ValueFiles: []string{"v"}, Function: "f"}
	for _, p := range Paths(&s) {
		*p += "!"
	}
	require.Equal(t, source.Spec{Inputs: []string{"a!", "b!"}, ValueFiles: []string{"v!"}, Function: "f!"}, s)
}
