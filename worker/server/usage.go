package server

import (
	"os"
	"runtime"
	"strconv"
	"strings"
	"sync"

	"golang.org/x/sys/unix"
)

// meter adds up a worker's CPU seconds. A worker that has its process to itself
// reads the process's; one that shares it adds those of the threads that its
// goroutines are locked to, and, for work that starts goroutines of its own while
// nothing else runs (prepare), those of the process meanwhile.
type meter struct {
	shared bool
	mu     sync.Mutex
	sum    float64
}

// start begins to measure the calling goroutine; the result ends it.
func (m *meter) start(whole bool) (end func()) {
	if !m.shared {
		return func() {}
	}
	who := unix.RUSAGE_THREAD
	if whole {
		who = unix.RUSAGE_SELF
	}
	runtime.LockOSThread()
	before := used(who)
	return func() {
		d := used(who) - before
		runtime.UnlockOSThread()
		m.mu.Lock()
		m.sum += d
		m.mu.Unlock()
	}
}

// seconds is what was used so far.
func (m *meter) seconds() float64 {
	if !m.shared {
		return used(unix.RUSAGE_SELF)
	}
	m.mu.Lock()
	defer m.mu.Unlock()
	return m.sum
}

func used(who int) float64 {
	var u unix.Rusage
	if unix.Getrusage(who, &u) != nil {
		return 0
	}
	return float64(u.Utime.Nano()+u.Stime.Nano()) / 1e9
}

// peak is the highest resident set of the process in bytes, file pages included.
func peak() uint64 {
	b, err := os.ReadFile("/proc/self/status")
	if err != nil {
		return 0
	}
	_, rest, _ := strings.Cut(string(b), "VmHWM:")
	fields := strings.Fields(rest)
	if len(fields) == 0 {
		return 0
	}
	kib, _ := strconv.ParseUint(fields[0], 10, 64)
	return kib << 10
}
