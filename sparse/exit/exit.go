// Package exit maps errors to exit codes (sysexits where they fit), in one place,
// and carries them over the wire.
package exit

import (
	"context"
	"errors"
	"io/fs"
	"syscall"

	"pairloom/sparse/column"
	"pairloom/sparse/evidence"
	"pairloom/sparse/record"
	"pairloom/sparse/reduce"
	"pairloom/sparse/source"
)

// The exit codes of pairloom.
const (
	Done       = 0
	Different  = 1  // compare found a difference
	Usage      = 64 // flags or their values
	BadInput   = 65 // or verify found damage
	NoInput    = 66 // input or job missing
	NoPeer     = 69 // no coordinator or worker
	Internal   = 70 // internal error or failed evidence
	TooBig     = 71 // does not fit --memory
	CannotOut  = 73 // cannot create output
	IO         = 74
	Stopped    = 75 // stopped; SIGINT, SIGTERM
	Version    = 76 // versions do not match
	NotAllowed = 77
)

// Error is an error with its code: how one crosses the wire, and how a caller
// that knows better names it.
type Error struct {
	Code int
	Err  error
}

func (e *Error) Error() string { return e.Err.Error() }

// Unwrap returns the error inside.
func (e *Error) Unwrap() error { return e.Err }

// With gives err a code; nil stays nil.
func With(code int, err error) error {
	if err == nil {
		return nil
	}
	return &Error{code, err}
}

// Code returns the exit code of an error: the outermost *Error's, or what its type says.
func Code(err error) int {
	var coded *Error
	switch {
	case err == nil:
		return Done
	case errors.As(err, &coded):
		return coded.Code
	case is[*source.InputError](err):
		return BadInput
	case is[*source.UsageError](err):
		return Usage
	case is[*source.TooBig](err):
		return TooBig
	case is[*evidence.Broken](err), is[*reduce.Failure](err), is[*record.Damage](err):
		return Internal
	case errors.Is(err, column.ErrFull):
		return TooBig
	case errors.Is(err, context.Canceled), errors.Is(err, context.DeadlineExceeded), errors.Is(err, record.ErrExists):
		return Stopped
	case errors.Is(err, fs.ErrNotExist):
		return NoInput
	case errors.Is(err, fs.ErrPermission):
		return NotAllowed
	case is[syscall.Errno](err), is[*fs.PathError](err):
		return IO
	}
	return Internal
}

func is[T error](err error) bool {
	var t T
	return errors.As(err, &t)
}
