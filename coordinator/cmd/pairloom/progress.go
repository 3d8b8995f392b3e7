package main

import (
	"fmt"
	"io"
	"os"
	"strings"
	"sync"
	"time"

	"golang.org/x/sys/unix"

	"pairloom/coordinator/server"
)

const (
	sayEvery  = 3 * time.Second        // a line, where there is no terminal
	drawEvery = 100 * time.Millisecond // the bar, on a terminal
	barCells  = 24
	widthMin  = 20 // columns of a terminal that is taken seriously
)

// meter shows how far a job is: a bar that is redrawn on a terminal, a line now and then
// otherwise. It implements source.Progress. Safe for concurrent use; nil shows nothing.
type meter struct {
	w     io.Writer
	width int // columns of the terminal; 0: none
	now   func() time.Time

	mu    sync.Mutex
	stage string
	began time.Time // the stage
	last  time.Time // shown
	drawn bool
}

// newMeter shows progress on w, nothing at all if quiet.
func newMeter(w io.Writer, quiet bool) *meter {
	if quiet {
		return nil
	}
	m := &meter{w: w, now: time.Now}
	if file, ok := w.(*os.File); ok {
		if _, err := unix.IoctlGetTermios(int(file.Fd()), unix.TCGETS); err == nil {
			m.width = 80
			if size, err := unix.IoctlGetWinsize(int(file.Fd()), unix.TIOCGWINSZ); err == nil && size.Col >= widthMin {
				m.width = int(size.Col)
			}
		}
	}
	m.last = m.now()
	return m
}

// Show tells where the job is.
func (m *meter) Show(s server.State) {
	if m == nil {
		return
	}
	m.mu.Lock()
	defer m.mu.Unlock()
	now, every := m.now(), sayEvery
	if m.width > 0 {
		every = drawEvery
	}
	if s.Stage != m.stage {
		m.stage, m.began = s.Stage, now
	}
	if now.Sub(m.last) < every {
		return
	}
	m.last = now
	text := describe(s, now.Sub(m.began))
	if m.width == 0 {
		fmt.Fprintln(m.w, text)
		return
	}
	m.drawn = true
	fmt.Fprint(m.w, "\r\033[K"+cut(bar(s)+text, m.width-1))
}

// Stage implements source.Progress.
func (m *meter) Stage(name string) { m.Show(server.State{Stage: name}) }

// Advance implements source.Progress.
func (m *meter) Advance(done, total uint64) {
	if m == nil {
		return
	}
	m.mu.Lock()
	stage := m.stage
	m.mu.Unlock()
	m.Show(server.State{Stage: stage, Done: done, Total: total})
}

// End takes the bar away.
func (m *meter) End() {
	if m == nil {
		return
	}
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.drawn {
		fmt.Fprint(m.w, "\r\033[K")
		m.drawn = false
	}
}

// share is how much of a stage is done, from 0 to 1.
func share(s server.State) float64 { return float64(min(s.Done, s.Total)) / float64(s.Total) }

// bar draws a state; nothing where it is not known how much there is to do.
func bar(s server.State) string {
	if s.Total == 0 {
		return ""
	}
	full := int(share(s) * barCells)
	return "[" + strings.Repeat("#", full) + strings.Repeat("·", barCells-full) + "] "
}

// describe tells a stage with its rate and the time left, where they are known.
func describe(s server.State, took time.Duration) string {
	if s.Total == 0 || s.Done == 0 || took <= 0 {
		return s.Stage
	}
	rate := float64(s.Done) / took.Seconds()
	left := time.Duration(float64(s.Total-min(s.Done, s.Total)) / rate * float64(time.Second)).Round(time.Second)
	return fmt.Sprintf("%s %.0f %%, %.3g a second, %v left", s.Stage, 100*share(s), rate, left)
}

// cut keeps the first characters of a line.
func cut(line string, width int) string {
	if r := []rune(line); len(r) > width {
		return string(r[:width])
	}
	return line
}
