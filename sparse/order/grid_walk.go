package order

import (
	"context"
	"fmt"
	"sync"
	"sync/atomic"
)

// voxelWalk turns places in an array file into C-order indices.
type voxelWalk struct {
	shape  []int
	stride []int // of the C-order index
	coord  []int
	at     int
	c      bool // the file is in C order: places are indices
}

func newVoxelWalk(shape []int, fortran bool) *voxelWalk {
	w := &voxelWalk{shape: shape, stride: make([]int, len(shape)), coord: make([]int, len(shape)), c: !fortran}
	step := 1
	for a := len(shape) - 1; a >= 0; a-- {
		w.stride[a] = step
		step *= shape[a]
	}
	return w
}

// step returns the index of the next voxel of the file.
func (w *voxelWalk) step() int {
	at := w.at
	if w.c {
		w.at++
		return at
	}
	for a, n := range w.shape { // first axis fastest
		w.at += w.stride[a]
		if w.coord[a]++; w.coord[a] < n {
			break
		}
		w.at -= n * w.stride[a]
		w.coord[a] = 0
	}
	return at
}

// voxelText names a voxel by its coordinates in array order.
func voxelText(shape []int, at int) string {
	text := ""
	for a := len(shape) - 1; a >= 0; a-- {
		text = fmt.Sprint(at%shape[a]) + text
		if at /= shape[a]; a > 0 {
			text = ", " + text
		}
	}
	return text
}

// gridParallel runs task(0) … task(n−1) on up to threads goroutines and waits for
// all of them. The first error, or the end of ctx, keeps tasks from starting.
func gridParallel(ctx context.Context, threads, n int, task func(i int) error) error {
	var (
		next  atomic.Int64
		once  sync.Once
		first error
		wait  sync.WaitGroup
	)
	stop := func(err error) {
		once.Do(func() { first = err })
		next.Store(int64(n))
	}
	for range min(threads, n) {
		wait.Go(func() {
			for i := next.Add(1) - 1; i < int64(n); i = next.Add(1) - 1 {
				err := ctx.Err()
				if err == nil {
					err = task(int(i))
				}
				if err != nil {
					stop(err)
				}
			}
		})
	}
	wait.Wait()
	return first
}
