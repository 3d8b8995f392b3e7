package report

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"pairloom/sparse/chain"
	"pairloom/sparse/guard"
	"pairloom/sparse/record"
	"pairloom/sparse/stage"
)

// Files are the files of a result folder, in the order in which they appear: a folder
// that has the last one is whole.
var Files = []string{"pairs.csv", "betti.csv", "summary.json"}

const bufferBytes = 1 << 20

// Write reads the pairs of all blocks of a finished job and writes pairs.csv, betti.csv
// and summary.json into dst, which is made if it is missing. Zero-length pairs are
// written with keepZero, or where the complex asks for them. It adds its own time to
// run.Seconds, as "write" and in "total"; where nobody measured the total it is the sum
// of the stages.
//
// Errors: *evidence.Broken if a cell is both a birth and a death or dies before it is
// born, *record.Damage for pairs or tables that do not fit, record.ErrExists if a file
// is already there, the context's cause, and what the operating system says. After an
// error none of the three files is there.
//
// Cost: one pass over the pairs of each block, and a sort of those that are printed
// within groups of equal birth. Memory: 8 bytes a printed pair of one degree, one bit a
// cell, and the buffers (1 MiB, and as much a formatting goroutine).
func Write(ctx context.Context, job, dst string, run *Run, keepZero bool) (*Summary, error) {
	var s *Summary
	err := guard.Run(func() (err error) {
		s, err = write(ctx, job, dst, run, keepZero)
		return err
	})
	if err != nil {
		return nil, err
	}
	return s, nil
}

func write(ctx context.Context, job, dst string, run *Run, keepZero bool) (*Summary, error) {
	began := time.Now()
	if err := os.MkdirAll(dst, 0o755); err != nil {
		return nil, err
	}
	t, err := chain.OpenTable(stage.Order(job))
	if err != nil {
		return nil, err
	}
	defer t.Close()
	d := &diagram{job: job, t: t, keepZero: keepZero || t.KeepZero, betti: make([]*uint64, t.Degrees+1)}
	p := &publication{folder: dst}
	defer p.discard()
	if err := p.add(Files[0], func(out io.Writer) error { return d.write(ctx, out) }); err != nil {
		return nil, err
	}
	if err := p.add(Files[1], d.writeBetti); err != nil {
		return nil, err
	}
	s := summarise(run, t.Complex, d, time.Since(began))
	if err := p.add(Files[2], s.WriteJSON); err != nil {
		return nil, err
	}
	return s, p.publish()
}

// publication is a set of files that appear together or not at all: they are written
// aside, synced, and get their names by link(2), which fails where a name is taken.
type publication struct {
	folder string
	parts  []string // temporary paths
	names  []string // final paths
	linked int      // how many names were given
}

// add writes one more file aside.
func (p *publication) add(name string, fill func(io.Writer) error) error {
	f, err := os.CreateTemp(p.folder, "."+name+".*.part")
	if err != nil {
		return err
	}
	p.parts, p.names = append(p.parts, f.Name()), append(p.names, filepath.Join(p.folder, name))
	out := bufio.NewWriterSize(f, bufferBytes)
	err = fill(out)
	for _, next := range []func() error{out.Flush, func() error { return f.Chmod(0o644) }, f.Sync} {
		if err == nil {
			err = next()
		}
	}
	return errors.Join(err, f.Close())
}

// publish gives all files their names.
func (p *publication) publish() error {
	for i, part := range p.parts {
		err := os.Link(part, p.names[i])
		if errors.Is(err, fs.ErrExist) {
			err = fmt.Errorf("%s: %w", p.names[i], record.ErrExists)
		}
		if err != nil {
			p.withdraw()
			return err
		}
		p.linked++
	}
	return syncFolder(p.folder)
}

// withdraw takes back the names that were given before one was refused.
func (p *publication) withdraw() {
	for _, name := range p.names[:p.linked] {
		os.Remove(name)
	}
	p.linked = 0
}

// discard removes the temporary names.
func (p *publication) discard() {
	for _, part := range p.parts {
		os.Remove(part)
	}
}

func syncFolder(path string) error {
	d, err := os.Open(path)
	if err != nil {
		return err
	}
	return errors.Join(d.Sync(), d.Close())
}
