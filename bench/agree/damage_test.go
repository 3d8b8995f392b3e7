package agree

import (
	"context"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sync"
	"testing"

	"github.com/stretchr/testify/require"

	"pairloom/coordinator/cmd/inprocess"
	"pairloom/coordinator/plan"
	coordinator "pairloom/coordinator/server"
	"pairloom/sparse/column"
	"pairloom/sparse/exit"
	"pairloom/sparse/oracle"
	"pairloom/sparse/source"
	"pairloom/sparse/stage"
	"pairloom/worker/exchange"
)

// damage does one bad thing at a random moment of a job: a column is dropped,
// doubled or altered when it starts, when it is stored, while it rests, on its way
// between workers, or when it has become zero; or a byte of a block changes on disk.
type damage struct {
	mu     sync.Mutex
	r      *rand.Rand
	mode   int
	after  int // how many chances pass before it happens
	did    bool
	folder string
	inner  exchange.Carrier
}

const (
	dropInitial = iota
	doubleInitial
	dropZero
	doubleZero
	alterStored
	alterResting
	dropSent
	doubleSent
	alterSent
	alterBlock
	modes
)

// now says that the moment has come, once.
func (d *damage) now(modes ...int) bool {
	for _, m := range modes {
		if m == d.mode && !d.did {
			d.after--
			d.did = d.after < 0
			return d.did
		}
	}
	return false
}

func (d *damage) Initial(uint32) int {
	d.mu.Lock()
	defer d.mu.Unlock()
	switch {
	case d.now(dropInitial):
		return 0
	case d.now(doubleInitial):
		return 2
	}
	return 1
}

func (d *damage) Zero(uint32) int {
	d.mu.Lock()
	defer d.mu.Unlock()
	switch {
	case d.now(dropZero):
		return 0
	case d.now(doubleZero):
		return 2
	}
	return 1
}

// Column sees columns before they are stored (slices of a scratch space), after
// (slices of the arena), and as they arrive.
func (d *damage) Column(c *column.Column) {
	d.mu.Lock()
	defer d.mu.Unlock()
	switch {
	case d.now(alterStored):
		d.flip(c)
	case d.now(alterResting):
		d.flip(c)
	case d.now(alterBlock):
		d.flipFile()
	}
}

// flip changes one bit of a column.
func (d *damage) flip(c *column.Column) {
	switch {
	case len(c.Words) > 0:
		c.Words[d.r.IntN(len(c.Words))] ^= 1 << d.r.IntN(64)
	case len(c.Rows) > 0:
		c.Rows[d.r.IntN(len(c.Rows))] ^= 1
	default:
		d.did = false
	}
}

// flipFile changes one bit of a block's entries on disk, under the workers' maps.
func (d *damage) flipFile() {
	blocks, _ := filepath.Glob(filepath.Join(stage.Order(d.folder), "boundary-*"))
	f, err := os.OpenFile(blocks[d.r.IntN(len(blocks))], os.O_RDWR, 0)
	if err != nil {
		d.did = false
		return
	}
	defer f.Close()
	info, _ := f.Stat()
	at := 256 + d.r.Int64N(max(info.Size()-256, 1))
	var b [1]byte
	_, _ = f.ReadAt(b[:], at)
	b[0] ^= 1
	_, _ = f.WriteAt(b[:], at)
}

// Carry implements exchange.Carrier.
func (d *damage) Carry(ctx context.Context, to exchange.Peer, b exchange.Batch) (uint64, error) {
	d.mu.Lock()
	items := append([]exchange.Item(nil), b.Items...)
	i := d.r.IntN(len(items))
	switch {
	case d.now(dropSent):
		items = append(items[:i], items[i+1:]...)
	case d.now(doubleSent):
		items = append(items, items[i])
	case d.now(alterSent):
		c := items[i].Column
		c.Rows, c.Words = append([]uint32(nil), c.Rows...), append([]uint64(nil), c.Words...)
		if len(c.Words) == 0 {
			c.Words = nil
		}
		d.flip(&c)
		items[i].Column = c
	}
	b.Items = items
	d.mu.Unlock()
	return d.inner.Carry(ctx, to, b)
}

// rightAnyway says that the pairs of a job that ended well are the right ones.
func rightAnyway(folder string, cells []uint32, want oracle.Pairs) bool {
	for k := 1; k < len(cells); k++ {
		p, err := stage.OpenPairs(folder, k, cells[k-1], cells[k])
		if err != nil {
			return false
		}
		defer p.Close()
		for i, j := range p.Mate {
			if want.Mate[k-1][i] != j {
				return false
			}
		}
	}
	return true
}

// One column damaged at a random moment: whenever the pairs would be wrong, the job
// ends with exit code 70 and publishes nothing.
func TestDamageIsNeverPublished(t *testing.T) {
	dir := t.TempDir()
	did, refused, byMode := 0, 0, map[int]int{}
	target := 1000
	if raced {
		target = 60
	}
	for seed := uint64(0); did < target; seed++ {
		require.Less(t, seed, uint64(20*target), "the test must reach its damage")
		r := rand.New(rand.NewPCG(seed, 2))
		folder := filepath.Join(dir, fmt.Sprint(seed))
		require.NoError(t, os.MkdirAll(filepath.Join(folder, "clean"), 0o755))
		require.NoError(t, os.MkdirAll(filepath.Join(folder, "hurt"), 0o755))
		spec, _ := randomInput(t, r, folder)
		o, workers, threads := options(r)
		clean := run(t, filepath.Join(folder, "clean"), spec, o, workers, threads)
		want := oracle.Reduce(boundaries(t, filepath.Join(folder, "clean")))
		d := &damage{r: r, mode: int(seed % modes), after: r.IntN(12), folder: filepath.Join(folder, "hurt")}
		err := hurt(d, spec, o, workers, threads)
		if d.did {
			did++
			byMode[d.mode]++
			if err != nil {
				refused++
				require.Equal(t, exit.Internal, exit.Code(err), "seed %d mode %d: %v", seed, d.mode, err)
			} else {
				require.True(t, rightAnyway(d.folder, clean.Complex.Cells, want), "seed %d mode %d: wrong pairs passed", seed, d.mode)
			}
		}
		require.NoError(t, os.RemoveAll(folder))
	}
	t.Logf("%d damaged runs, %d refused, by mode %v", did, refused, byMode)
	require.Greater(t, refused*2, did, "most damage matters")
	if !raced { // with the race detector there are too few runs for every mode
		require.Len(t, byMode, modes, "every mode must have happened")
	}
}

func hurt(d *damage, spec source.Spec, o plan.Options, workers, threads int) error {
	cfg := inprocess.Config{Version: "test", Workers: workers, Threads: threads, Faults: d,
		Wrap: func(c exchange.Carrier) exchange.Carrier { d.inner = c; return d }}
	_, err := inprocess.Run(context.Background(), cfg, coordinator.Job{Name: "test", Folder: d.folder, Spec: spec, Options: o}, nil)
	return err
}
