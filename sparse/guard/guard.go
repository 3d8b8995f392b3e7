// Package guard turns a panic into an error at the edge of a goroutine that works
// on mapped files: a block that changes, or is cut short, under the map of a process
// shows as an index out of range or a memory fault. The job then ends with an
// internal error, and the process lives on.
package guard

import (
	"fmt"
	"runtime/debug"
	"strings"
)

// Panic is a recovered panic.
type Panic struct {
	What  any
	Stack string
}

func (p *Panic) Error() string {
	return fmt.Sprintf("internal error: %v (was a block changed while it was read?)", p.What)
}

// Run calls f and returns its error, or a *Panic. Memory faults are panics meanwhile.
func Run(f func() error) (err error) {
	defer debug.SetPanicOnFault(debug.SetPanicOnFault(true))
	defer func() {
		if what := recover(); what != nil {
			err = &Panic{what, strings.TrimSpace(string(debug.Stack()))}
		}
	}()
	return f()
}
