package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"pairloom/coordinator/report"
)

// place is where a job of `reduce` leaves things: its job folder, and its result, which
// is written aside and published after success only.
type place struct {
	out    string // "": nothing is kept
	made   bool   // out was missing
	job    string
	result string // of the same file system as out
}

// take makes the output folder, or refuses one that is in use.
func (p *place) take(replace bool) error {
	if p.out == "" {
		return nil
	}
	entries, err := os.ReadDir(p.out)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		if err := os.MkdirAll(p.out, 0o755); err != nil {
			return err
		}
		p.made = true
	case err != nil:
		return err
	case len(entries) > 0 && !replace:
		return fmt.Errorf("%s is not empty; name another folder or use --replace", p.out)
	}
	p.result, err = os.MkdirTemp(p.out, ".result-")
	return errors.Join(err, p.forget(err))
}

// forget takes back a folder that was made for nothing.
func (p *place) forget(why error) error {
	if why == nil || !p.made {
		return nil
	}
	return os.Remove(p.out)
}

// makeJob makes the job folder: in jobs, in out, or a temporary one.
func (p *place) makeJob(jobs string) (err error) {
	switch {
	case jobs != "":
		if err = os.MkdirAll(jobs, 0o755); err == nil {
			p.job, err = os.MkdirTemp(jobs, "reduce-")
		}
	case p.out != "":
		p.job = filepath.Join(p.out, "job")
		if err = os.RemoveAll(p.job); err == nil {
			err = os.Mkdir(p.job, 0o755)
		}
	default:
		p.job, err = os.MkdirTemp("", "pairloom-")
	}
	if err == nil && p.result == "" {
		p.result = filepath.Join(p.job, "result")
	}
	return err
}

// publish gives the result files their names in out; with replace each takes the place
// of the old one.
func (p *place) publish(replace bool) error {
	if p.out == "" {
		return nil
	}
	give := os.Link
	if replace {
		give = os.Rename
	}
	for _, name := range report.Files {
		if err := give(filepath.Join(p.result, name), filepath.Join(p.out, name)); err != nil {
			return err
		}
	}
	return nil
}

// leave removes what is not to stay: the job folder unless it is kept after success,
// and after a failure an output folder that was made for nothing.
func (p *place) leave(success, keepJob bool) error {
	var errs []error
	if p.job != "" && !(success && keepJob) {
		errs = append(errs, os.RemoveAll(p.job))
	}
	if p.out != "" && p.result != "" {
		errs = append(errs, os.RemoveAll(p.result))
	}
	if p.made && !success {
		errs = append(errs, os.Remove(p.out))
	}
	return errors.Join(errs...)
}
