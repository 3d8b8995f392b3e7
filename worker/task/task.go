// Package task does a worker's tasks: the stages of a job that need no traffic.
// Each reads what earlier stages published in the job folder and publishes its own
// output there; a task that fails leaves nothing. Tasks of one job on different
// blocks run side by side, here or on other workers.
package task

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"math/bits"
	"os"

	"github.com/RoaringBitmap/roaring/v2"

	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/column"
	"pairloom/sparse/compress"
	"pairloom/sparse/evidence"
	"pairloom/sparse/reduce"
	"pairloom/sparse/source"
	"pairloom/sparse/stage"
)

// Run does one task and returns what it settled; p hears of its progress.
func Run(ctx context.Context, t *pb.Task, p source.Progress) (*pb.TaskDone, error) {
	done := &pb.TaskDone{Task: t.Task}
	work := map[pb.Work]func(context.Context, *pb.Task, *pb.TaskDone) error{
		pb.Work_WORK_BOUNDARY:  boundary,
		pb.Work_WORK_SURVEY:    survey,
		pb.Work_WORK_GRAPH:     graph,
		pb.Work_WORK_TURN:      turn,
		pb.Work_WORK_SEAL:      seal,
		pb.Work_WORK_RECHECK:   recheck,
		pb.Work_WORK_UNCHANGED: unchanged,
	}[t.Work]
	switch {
	case t.Work == pb.Work_WORK_PREPARE:
		return done, prepare(ctx, t, p)
	case work == nil:
		return nil, fmt.Errorf("task: no such work %d", t.Work)
	}
	return done, work(ctx, t, done)
}

// open maps ∂_k; its bytes were checked when it was published, and are again by unchanged.
func open(t *pb.Task, k uint32) (*block.Matrix, error) {
	return chain.OpenBlock(stage.Order(t.Folder), int(k), true)
}

func boundary(ctx context.Context, t *pb.Task, _ *pb.TaskDone) error {
	low, err := open(t, t.Degree-1)
	if err != nil {
		return err
	}
	defer low.Close()
	high, err := open(t, t.Degree)
	if err != nil {
		return err
	}
	defer high.Close()
	return evidence.BoundaryOfBoundary(ctx, int(t.Degree), low, high, t.Seed)
}

// unchanged re-reads the bytes of a block, and of what was made of it, after the work.
func unchanged(_ context.Context, t *pb.Task, _ *pb.TaskDone) error {
	for _, turned := range []bool{false, true} {
		if err := ifThere(stage.MatrixPath(t.Folder, int(t.Degree), turned), verifyBlock); err != nil {
			return err
		}
		if err := ifThere(stage.SurveyPath(t.Folder, int(t.Degree), turned), stage.VerifySurvey); err != nil {
			return err
		}
	}
	return nil
}

func verifyBlock(path string) error {
	m, err := block.Open(path, true)
	if err != nil {
		return err
	}
	defer m.Close()
	return m.Verify()
}

// ifThere calls f for a file that exists.
func ifThere(path string, f func(string) error) error {
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	return f(path)
}

// survey finds apparent pairs; the residue is every other column.
func survey(ctx context.Context, t *pb.Task, done *pb.TaskDone) error {
	m, err := open(t, t.Degree)
	if err != nil {
		return err
	}
	defer m.Close()
	if err := m.Verify(); err != nil {
		return err
	}
	pivotOf, rest := make([]uint32, m.Rows), roaring.New()
	pairs, err := compress.Apparent(ctx, m, pivotOf, func(j uint32) { rest.Add(j) })
	if err != nil {
		return err
	}
	done.Apparent, done.Residual = uint64(pairs), rest.GetCardinality()
	return stage.WriteSurvey(stage.SurveyPath(t.Folder, int(t.Degree), false), pivotOf, rest)
}

// graph pairs a block by union–find, in one go with its fates and pairs.
func graph(ctx context.Context, t *pb.Task, done *pb.TaskDone) error {
	m, err := open(t, t.Degree)
	if err != nil {
		return err
	}
	defer m.Close()
	mate := make([]uint32, m.Rows)
	if t.Dual {
		err = compress.DualGraph(ctx, m, nil, mate)
	} else {
		err = compress.Graph(ctx, m, mate)
	}
	if err != nil {
		return err
	}
	fates := newFates(t, m)
	for r, j := range mate {
		if j == block.None {
			continue
		}
		if err := pair(t, m, fates, uint32(r), j, evidence.Graph); err != nil {
			return err
		}
	}
	fates.Rest(evidence.Graph)
	return publish(t, m, fates, done)
}

// turned says whether a task works in the coboundary route.
func turned(t *pb.Task) bool {
	return t.Route == pb.Route_ROUTE_COBOUNDARY || (t.Work == pb.Work_WORK_GRAPH && t.Dual)
}

// newFates starts the record of a block's columns in the task's route.
func newFates(t *pb.Task, m *block.Matrix) *evidence.Fates {
	if turned(t) {
		return evidence.NewFates(int(t.Degree), m.Cols, m.Rows)
	}
	return evidence.NewFates(int(t.Degree), m.Rows, m.Cols)
}

// pair records the pair of (k−1)-cell r and k-cell j in the task's route.
func pair(t *pb.Task, m *block.Matrix, f *evidence.Fates, r, j uint32, as evidence.Fate) error {
	if turned(t) {
		return f.Pair(m.Cols-1-j, m.Rows-1-r, as)
	}
	return f.Pair(r, j, as)
}

// publish writes a block's pairs once its fates partition its columns.
func publish(t *pb.Task, m *block.Matrix, f *evidence.Fates, done *pb.TaskDone) error {
	mate, err := f.Done()
	if err != nil {
		return err
	}
	if turned(t) {
		mate = compress.TurnPairs(mate, m.Rows)
	}
	for _, j := range mate {
		if j != block.None {
			done.Rank++
		}
	}
	done.Apparent, done.Graph, done.Cleared = f.Count(evidence.Apparent), f.Count(evidence.Graph), f.Count(evidence.Cleared)
	done.Settled, done.Zero = f.Count(evidence.Settled), f.Count(evidence.Zero)
	done.PairsDigest, err = stage.WritePairs(t.Folder, int(t.Degree), mate)
	return err
}

// Known are the masks of a block in its own ranks: k-cells known as births and
// (k−1)-cells known as deaths; nil where the neighbour is not solved.
type Known struct {
	Births, Deaths column.Bits
}

// Masks reads what the neighbours' pairs say about a block; their digests must be
// the ones that the coordinator fixed.
func Masks(folder string, degree uint32, k *pb.Masks) (Known, error) {
	var known Known
	c, err := chain.Read(stage.Order(folder))
	if err != nil {
		return known, err
	}
	if k.GetAbove() && int(degree) < c.Top() {
		err = withPairs(folder, c, degree+1, k.AboveDigest, func(p *stage.Pairs) { known.Births = p.Births() })
	}
	if err == nil && k.GetBelow() && degree > 1 {
		err = withPairs(folder, c, degree-1, k.BelowDigest, func(p *stage.Pairs) { known.Deaths = p.Deaths(c.Cells[degree-1]) })
	}
	return known, err
}

func withPairs(folder string, c *chain.Complex, k, digest uint32, f func(*stage.Pairs)) error {
	p, err := stage.OpenPairs(folder, int(k), c.Cells[k-1], c.Cells[k])
	if err != nil {
		return err
	}
	defer p.Close()
	if p.Digest() != digest {
		return &evidence.Broken{Check: "masks", Degree: int(k), Why: "its pairs are not those that the masks were fixed by"}
	}
	f(p)
	return nil
}

// turn writes the block of the coboundary route, its masks taken out, and its survey.
func turn(ctx context.Context, t *pb.Task, done *pb.TaskDone) error {
	m, err := open(t, t.Degree)
	if err != nil {
		return err
	}
	defer m.Close()
	known, err := Masks(t.Folder, t.Degree, t.Masks)
	if err != nil {
		return err
	}
	out, err := compress.Turn(ctx, m, known.Births, known.Deaths, stage.MatrixPath(t.Folder, int(t.Degree), true))
	if err != nil {
		return err
	}
	defer out.Close()
	var pivotOf []uint32
	if t.UseApparent {
		s, err := stage.OpenSurvey(stage.SurveyPath(t.Folder, int(t.Degree), false), m.Rows, m.Cols)
		if err != nil {
			return err
		}
		pivotOf = compress.TurnPairs(s.PivotOf, m.Cols)
		if err := s.Close(); err != nil {
			return err
		}
	}
	rest := roaring.New()
	rest.AddRange(0, uint64(out.Cols))
	for _, j := range pivotOf {
		if j != block.None {
			rest.Remove(j)
		}
	}
	done.RowsDropped = known.Births.Count()
	done.Residual = rest.GetCardinality()
	return stage.WriteSurvey(stage.SurveyPath(t.Folder, int(t.Degree), true), pivotOf, rest)
}

// seal gathers the fates of a reduced block: surveys, masks and tile results.
func seal(ctx context.Context, t *pb.Task, done *pb.TaskDone) error {
	m, err := open(t, t.Degree)
	if err != nil {
		return err
	}
	defer m.Close()
	f := newFates(t, m)
	rows, cols := m.Rows, m.Cols
	if turned(t) {
		rows, cols = cols, rows
	}
	if err := surveyFates(t, rows, cols, f); err != nil {
		return err
	}
	if err := clearedFates(t, m, f); err != nil {
		return err
	}
	for _, name := range t.Files {
		if err := tileFates(name, f); err != nil {
			return err
		}
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
	}
	return publish(t, m, f, done)
}

func surveyFates(t *pb.Task, rows, cols uint32, f *evidence.Fates) error {
	if !t.UseApparent {
		return nil
	}
	s, err := stage.OpenSurvey(stage.SurveyPath(t.Folder, int(t.Degree), turned(t)), rows, cols)
	if err != nil {
		return err
	}
	defer s.Close()
	for r, j := range s.PivotOf {
		if j == block.None {
			continue
		}
		if err := f.Pair(uint32(r), j, evidence.Apparent); err != nil {
			return err
		}
	}
	return nil
}

// clearedFates records the columns that the route never offered.
func clearedFates(t *pb.Task, m *block.Matrix, f *evidence.Fates) error {
	known, err := Masks(t.Folder, t.Degree, t.Masks)
	if err != nil {
		return err
	}
	mask, last := known.Births, uint32(0)
	if turned(t) {
		mask, last = known.Deaths, m.Rows-1
	}
	for i, w := range mask {
		for ; w != 0; w &= w - 1 {
			j := uint32(i)<<6 | uint32(bits.TrailingZeros64(w))
			if turned(t) {
				j = last - j
			}
			if err := f.Record(j, evidence.Cleared); err != nil {
				return err
			}
		}
	}
	return nil
}

func tileFates(path string, f *evidence.Fates) error {
	tiles, err := stage.OpenTiles(path)
	if err != nil {
		return err
	}
	defer tiles.Close()
	for i, r := range tiles.Rows {
		if err := f.Pair(r, tiles.Cols[i], evidence.Settled); err != nil {
			return err
		}
	}
	for _, j := range tiles.Zeros {
		if err := f.Record(j, evidence.Zero); err != nil {
			return err
		}
	}
	return nil
}

// recheck solves the block again by the other route, without its survey, with all
// that is known now of its neighbours, and compares the pairs.
func recheck(ctx context.Context, t *pb.Task, done *pb.TaskDone) error {
	m, err := open(t, t.Degree)
	if err != nil {
		return err
	}
	defer m.Close()
	first, err := stage.OpenPairs(t.Folder, int(t.Degree), m.Rows, m.Cols)
	if err != nil {
		return err
	}
	defer first.Close()
	known, err := Masks(t.Folder, t.Degree, t.Masks)
	if err != nil {
		return err
	}
	second, err := secondAnswer(ctx, t, m, known)
	if err != nil {
		return err
	}
	return evidence.SamePairs(int(t.Degree), first.Mate, second)
}

func secondAnswer(ctx context.Context, t *pb.Task, m *block.Matrix, known Known) ([]uint32, error) {
	p := reduce.Problem{Columns: m, Dropped: known.Deaths, Seed: t.Seed}
	cleared, cols := known.Births, m.Cols
	if t.Route == pb.Route_ROUTE_BOUNDARY { // so the second goes by the coboundary route
		out, err := compress.Turn(ctx, m, known.Births, known.Deaths, stage.MatrixPath(t.Folder, int(t.Degree), true)+"-again")
		if err != nil {
			return nil, err
		}
		defer out.Close()
		p.Columns, p.Dropped = out, nil
		cols = m.Rows
		cleared = Mirrored(known.Deaths, cols)
	}
	mate, _, err := reduce.Solve(ctx, p, func(yield func(uint32) bool) {
		for j := range cols {
			if !cleared.Has(j) && !yield(j) {
				return
			}
		}
	}, int(max(t.Threads, 1)))
	if err != nil || t.Route != pb.Route_ROUTE_BOUNDARY {
		return mate, err
	}
	return compress.TurnPairs(mate, m.Rows), nil
}

// Mirrored re-indexes a set of ranks below n by i ↦ n−1−i.
func Mirrored(b column.Bits, n uint32) column.Bits {
	if b == nil {
		return nil
	}
	out := column.NewBits(n)
	for r := range n {
		if b.Has(r) {
			out.Set(n - 1 - r)
		}
	}
	return out
}
