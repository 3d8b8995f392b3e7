// Package journal is what a job folder says of the job itself, beside the stages'
// output (package stage): what was asked, how it stands, and what happened when.
//
//	job.json      the request, written before the first input byte is read; never changed
//	state.json    how the job stands; replaced by rename, only by the coordinator that runs it
//	events.jsonl  what happened, one JSON object a line
//
// No clock: times come from the caller. A folder has one writer; its files may be
// read at any time.
package journal

import (
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"regexp"
	"sort"
	"strings"
	"time"

	"pairloom/coordinator/plan"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
	"pairloom/sparse/stage"
)

// Schema is the version of the files that this build writes and reads.
const Schema = 1

// Request is job.json: what was asked.
type Request struct {
	Schema    int          `json:"schema"`
	Job       string       `json:"job"`
	Version   string       `json:"version"` // of the coordinator that accepted it
	Submitted time.Time    `json:"submitted"`
	InPlace   bool         `json:"in_place"` // inputs are not below the job folder
	Spec      source.Spec  `json:"spec"`
	Options   plan.Options `json:"options"`
}

// The states of a job.
const (
	Waiting = "waiting"
	Running = "running"
	Done    = "done"
	Failed  = "failed"
)

// State is state.json: how a job stands.
type State struct {
	State    string    `json:"state"`
	ExitCode int       `json:"exit_code"` // of a failed job
	Message  string    `json:"message"`   // why it failed, one line
	Started  time.Time `json:"started,omitzero"`
	Ended    time.Time `json:"ended,omitzero"`
	Crew     []string  `json:"crew"` // names of the workers
}

// HasEnded says that nothing will change any more.
func (s *State) HasEnded() bool { return s.State == Done || s.State == Failed }

// Elapsed is the time the job has run, at the instant now.
func (s *State) Elapsed(now time.Time) time.Duration {
	switch {
	case s.Started.IsZero():
		return 0
	case s.Ended.IsZero():
		return max(now.Sub(s.Started), 0)
	}
	return s.Ended.Sub(s.Started)
}

// Event is one line of events.jsonl.
type Event struct {
	Time     time.Time `json:"time"`
	Event    string    `json:"event"` // submitted, started, crew, stage, done, failed
	Stage    string    `json:"stage,omitempty"`
	Crew     []string  `json:"crew,omitempty"`
	ExitCode int       `json:"exit_code,omitempty"`
	Message  string    `json:"message,omitempty"`
}

const (
	requestFile = "job.json"
	stateFile   = "state.json"
	eventsFile  = "events.jsonl"
)

var nameRule = regexp.MustCompile(`^[A-Za-z0-9_-][A-Za-z0-9._-]{0,63}$`)

// CheckName refuses what cannot be the name of a job, or of a file in its folder:
// 1 to 64 letters, digits, dots, dashes and underscores, no dot first. Exit code 64.
func CheckName(name string) error {
	if nameRule.MatchString(name) {
		return nil
	}
	return exit.With(exit.Usage, fmt.Errorf("%q cannot be a name: 1 to 64 of A–Z a–z 0–9 . _ - are expected, no dot first", name))
}

// Tidy makes a name out of any text, keeping a file's endings.
func Tidy(text string) string {
	name := strings.TrimLeft(strings.Map(func(r rune) rune {
		if r < 128 && nameRule.MatchString("x"+string(r)) {
			return r
		}
		return '_'
	}, text), ".")
	if n := len(name) - 64; n > 0 {
		name = name[n:] // the end says what the file is
	}
	if name = strings.TrimLeft(name, "."); name == "" {
		return "_"
	}
	return name
}

// WriteRequest writes job.json, which must not be there yet.
func WriteRequest(folder string, r Request) error {
	r.Schema = Schema
	b, err := json.MarshalIndent(r, "", "  ")
	if err != nil {
		return err
	}
	f, err := os.OpenFile(filepath.Join(folder, requestFile), os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if err != nil {
		return err
	}
	return finish(f, append(b, '\n'))
}

// finish writes a file's bytes, brings them to the disk and closes it.
func finish(f *os.File, b []byte) error {
	_, err := f.Write(b)
	if err == nil {
		err = f.Sync()
	}
	return errors.Join(err, f.Close())
}

// ReadRequest reads job.json. A folder without one is no job folder: exit code 66.
func ReadRequest(folder string) (Request, error) {
	var r Request
	if err := read(folder, requestFile, &r); err != nil {
		return r, err
	}
	if r.Schema != Schema {
		return r, exit.With(exit.Version, fmt.Errorf("%s: schema %d, this build reads %d", filepath.Join(folder, requestFile), r.Schema, Schema))
	}
	return r, nil
}

func read(folder, name string, into any) error {
	path := filepath.Join(folder, name)
	b, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		return exit.With(exit.NoInput, fmt.Errorf("%s is no job folder: it has no %s", folder, name))
	}
	if err != nil {
		return err
	}
	if err := json.Unmarshal(b, into); err != nil {
		return exit.With(exit.BadInput, fmt.Errorf("%s: %w", path, err))
	}
	return nil
}

// WriteState replaces state.json.
func WriteState(folder string, s State) error {
	b, err := json.MarshalIndent(s, "", "  ")
	if err != nil {
		return err
	}
	f, err := os.CreateTemp(folder, "."+stateFile+".*.part")
	if err != nil {
		return err
	}
	if err := finish(f, append(b, '\n')); err != nil {
		os.Remove(f.Name())
		return err
	}
	return os.Rename(f.Name(), filepath.Join(folder, stateFile))
}

// ReadState reads how a job stands; a result that is there has the last word.
func ReadState(folder string) (State, error) {
	s := State{State: Waiting}
	err := read(folder, stateFile, &s)
	if exit.Code(err) == exit.NoInput {
		err = nil // accepted, and no more
	}
	if _, no := os.Stat(stage.Result(folder)); no == nil {
		s.State, s.ExitCode, s.Message = Done, exit.Done, ""
	}
	return s, err
}

// Append adds one line to events.jsonl. Lines are whole: a line is one write.
func Append(folder string, e Event) error {
	b, err := json.Marshal(e)
	if err != nil {
		return err
	}
	f, err := os.OpenFile(filepath.Join(folder, eventsFile), os.O_WRONLY|os.O_CREATE|os.O_APPEND, 0o644)
	if err != nil {
		return err
	}
	_, err = f.Write(append(b, '\n'))
	return errors.Join(err, f.Close())
}

// Found is a job folder below the jobs folder.
type Found struct {
	Folder  string
	Request Request
	State   State
}

// Find lists the jobs below a jobs folder in the order in which they were submitted.
// Folders without a job.json are none; a job.json that cannot be read is a job that
// has failed, with the reason.
func Find(jobs string) ([]Found, error) {
	entries, err := os.ReadDir(jobs)
	if err != nil {
		return nil, err
	}
	var found []Found
	for _, e := range entries {
		if !e.IsDir() || CheckName(e.Name()) != nil {
			continue
		}
		f := Found{Folder: filepath.Join(jobs, e.Name())}
		f.Request, err = ReadRequest(f.Folder)
		if exit.Code(err) == exit.NoInput {
			continue
		}
		if err == nil {
			f.State, err = ReadState(f.Folder)
		}
		if err != nil {
			f.State = State{State: Failed, ExitCode: exit.Code(err), Message: err.Error()}
		}
		f.Request.Job = e.Name()
		found = append(found, f)
	}
	sort.SliceStable(found, func(i, j int) bool { return found[i].Request.Submitted.Before(found[j].Request.Submitted) })
	return found, nil
}

// Paths returns the places in a specification where it names files: the inputs, the
// arrays of values, the function.
func Paths(s *source.Spec) []*string {
	var at []*string
	for i := range s.Inputs {
		at = append(at, &s.Inputs[i])
	}
	for i := range s.ValueFiles {
		at = append(at, &s.ValueFiles[i])
	}
	if s.Function != "" {
		at = append(at, &s.Function)
	}
	return at
}
