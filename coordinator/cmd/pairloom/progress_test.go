package main

import (
	"bytes"
	"testing"
	"time"
	"unicode/utf8"

	"github.com/stretchr/testify/require"

	"pairloom/coordinator/server"
)

// metered is a meter with a clock that the test keeps.
func metered(width int) (m *meter, out *bytes.Buffer, pass func(time.Duration)) {
	out, now := &bytes.Buffer{}, time.Unix(0, 0)
	m = &meter{w: out, width: width, now: func() time.Time { return now }, last: now}
	return m, out, func(d time.Duration) { now = now.Add(d) }
}

func TestALineNowAndThen(t *testing.T) {
	m, out, pass := metered(0)
	m.Stage("reduce")
	for done := range uint64(9) {
		pass(time.Second)
		m.Show(server.State{Stage: "reduce", Done: done, Total: 16})
	}
	m.End()
	require.Equal(t, "reduce 12 %, 0.667 a second, 21s left\nreduce 31 %, 0.833 a second, 13s left\nreduce 50 %, 0.889 a second, 9s left\n", out.String())
}

func TestABarOnATerminal(t *testing.T) {
	m, out, pass := metered(60)
	m.Stage("read")
	pass(time.Second)
	m.Advance(50, 100)
	m.Advance(51, 100)
	m.End()
	m.End()
	require.Equal(t, "\r\033[K[############············] read 50 %, 50 a second, 1s left\r\033[K", out.String())
	m, out, pass = metered(20)
	pass(time.Second)
	m.Advance(200, 100)
	require.Equal(t, len("\r\033[K")+19, utf8.RuneCount(out.Bytes()), "never wider than the terminal")
}

func TestQuiet(t *testing.T) {
	m := newMeter(&bytes.Buffer{}, true)
	m.Stage("read")
	m.Advance(1, 2)
	m.Show(server.State{})
	m.End()
	require.Zero(t, newMeter(&bytes.Buffer{}, false).width, "no terminal")
}
