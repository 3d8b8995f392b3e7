// Package schedule is one job as a state machine: events of workers go in, orders
// to workers come out. It deals tasks to the crew, runs the blocks in the planned
// order, opens each reduction on its workers, works out from their counters when
// every tile is done, and knows when the job is. No socket, file, clock or
// goroutine; the same events give the same orders.
//
//	prepare ─┬─ survey or graph of every block ── blocks in planned order:
//	         └─ ∂∂ = 0 of every block             [turn] → reduction → seal
//	                                              then second answers, blocks unchanged
package schedule

import (
	"fmt"
	"sort"

	"pairloom/coordinator/plan"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/chain"
	"pairloom/sparse/reduce"
)

// Member is a worker as the schedule sees it.
type Member struct {
	ID      int
	Threads int
	Address string
	load    float64 // cost of what it was given so far, in entries read
	tasks   int     // running now
}

// Job is what is to be done.
type Job struct {
	Folder  string
	Seed    uint64
	Spec    string // source.Spec as JSON
	Options plan.Options
	First   uint64 // first task and reduction number, unique in the coordinator's life
}

// Effect is an order to a worker.
type Effect struct {
	Worker int
	Order  *pb.Order
}

// BlockState is what is known of a block so far.
type BlockState struct {
	plan.Block
	Residual  uint64
	Dropped   uint64
	Done      *pb.TaskDone // fates of the sealed block
	Additions uint64
	Evictions uint64
	surveyed  bool
	sealed    bool
}

type task struct {
	order *pb.Task
	cost  float64
	then  func(*pb.TaskDone)
}

// Machine runs one job.
type Machine struct {
	job      Job
	crew     []*Member
	complex  *chain.Complex
	blocks   []*BlockState // in solving order
	byDegree map[int]*BlockState
	waiting  []*task // ready to run, in order of importance
	running  map[uint64]*running
	next     uint64
	current  *reduction
	step     int // index into blocks of the one being solved
	last     bool
	ended    bool
	out      []Effect

	// What workers did, by crew number.
	Crew      map[int]*MemberWork
	Exchanged uint64
	Bytes     uint64
}

// MemberWork is what one worker did.
type MemberWork struct {
	Tiles, Settled, Sent, Received uint64
	CPU                            float64
	Peak                           uint64
}

type running struct {
	*task
	worker int
}

// Lost says that a job cannot go on: a worker left while it was needed.
type Lost struct{ Worker int }

func (l *Lost) Error() string {
	return fmt.Sprintf("worker %d left while it was needed", l.Worker)
}

// New makes the machine of a job on a crew of at least one worker, and the first orders.
func New(job Job, crew []Member) (*Machine, []Effect) {
	m := &Machine{job: job, next: job.First, running: map[uint64]*running{}, byDegree: map[int]*BlockState{}, Crew: map[int]*MemberWork{}}
	for _, c := range crew {
		m.crew = append(m.crew, &c)
		m.Crew[c.ID] = &MemberWork{}
	}
	m.add(&pb.Task{Work: pb.Work_WORK_PREPARE, Spec: job.Spec}, 0, func(*pb.TaskDone) {})
	return m, m.deal()
}

// Ended says that everything is done; Next the first unused number.
func (m *Machine) Ended() bool { return m.ended }

// Next is described at Ended.
func (m *Machine) Next() uint64 { return m.next }

// Blocks returns the blocks' states by degree 1..top.
func (m *Machine) Blocks() []BlockState {
	var out []BlockState
	for _, b := range m.blocks {
		out = append(out, *b)
	}
	sort.Slice(out, func(i, j int) bool { return out[i].Degree < out[j].Degree })
	return out
}

// Complex returns the prepared complex, nil before.
func (m *Machine) Complex() *chain.Complex { return m.complex }

func (m *Machine) number() uint64 {
	n := m.next
	m.next++
	return n
}

func (m *Machine) add(t *pb.Task, cost float64, then func(*pb.TaskDone)) {
	t.Task, t.Folder, t.Seed = m.number(), m.job.Folder, m.job.Seed
	m.waiting = append(m.waiting, &task{t, cost, then})
}

// deal gives waiting tasks to the workers that have done least, as far as they have
// threads free, and returns all orders that came up.
func (m *Machine) deal() []Effect {
	for len(m.waiting) > 0 {
		w := m.freest()
		if w == nil {
			break
		}
		t := m.waiting[0]
		m.waiting = m.waiting[1:]
		t.order.Threads = 1
		if t.order.Work == pb.Work_WORK_PREPARE || len(m.waiting) == 0 {
			t.order.Threads = uint32(max(w.Threads-w.tasks, 1))
		}
		w.tasks++
		w.load += t.cost
		m.running[t.order.Task] = &running{t, w.ID}
		m.order(w.ID, &pb.Order{Body: &pb.Order_Task{Task: t.order}})
	}
	out := m.out
	m.out = nil
	return out
}

func (m *Machine) order(worker int, o *pb.Order) { m.out = append(m.out, Effect{worker, o}) }

func (m *Machine) freest() *Member {
	var best *Member
	for _, w := range m.crew {
		if w.tasks < max(w.Threads, 1) && (best == nil || w.load < best.load) {
			best = w
		}
	}
	return best
}

// Prepared tells the machine what the prepare task published; it plans the blocks.
func (m *Machine) Prepared(c *chain.Complex) []Effect {
	m.complex = c
	for _, w := range m.crew {
		if w.load == 0 && len(m.crew) > 1 && m.Crew[w.ID].CPU > 0 { // it prepared: that was most of the work
			w.load = prepareCost(c)
		}
	}
	for _, b := range plan.Blocks(c, m.job.Options) {
		s := &BlockState{Block: b}
		m.blocks = append(m.blocks, s)
		m.byDegree[b.Degree] = s
	}
	for _, b := range m.blocks {
		m.firstTask(b)
	}
	for k := 2; k <= c.Top(); k++ {
		m.add(&pb.Task{Work: pb.Work_WORK_BOUNDARY, Degree: uint32(k)}, m.entries(k)+m.entries(k-1), func(*pb.TaskDone) {})
	}
	m.advance()
	return m.deal()
}

func prepareCost(c *chain.Complex) float64 {
	n := 0.0
	for k, cells := range c.Cells {
		n += 12 * float64(cells) * float64(k+1)
	}
	return n
}

// entries estimates the entries of block k.
func (m *Machine) entries(k int) float64 { return float64(m.complex.Cells[k]) * float64(k+1) }

// firstTask settles what can be settled of a block without its neighbours.
func (m *Machine) firstTask(b *BlockState) {
	k := uint32(b.Degree)
	switch {
	case b.Method != plan.Reduce:
		dual := b.Method == plan.DualGraph
		m.add(&pb.Task{Work: pb.Work_WORK_GRAPH, Degree: k, Dual: dual, Route: wire(b.Route)}, 2*m.entries(b.Degree), func(d *pb.TaskDone) {
			b.Done, b.sealed = d, true
		})
	case m.apparent():
		m.add(&pb.Task{Work: pb.Work_WORK_SURVEY, Degree: k}, m.entries(b.Degree), func(d *pb.TaskDone) {
			b.Residual, b.surveyed = d.Residual, true
		})
	default:
		b.surveyed = true
		b.Residual = uint64(m.complex.Cells[b.Degree])
		if b.Route == plan.Coboundary {
			b.Residual = uint64(m.complex.Cells[b.Degree-1])
		}
	}
}

func (m *Machine) apparent() bool {
	for _, s := range m.job.Options.Without {
		if s == "apparent" {
			return false
		}
	}
	return true
}

func wire(r plan.Route) pb.Route {
	if r == plan.Coboundary {
		return pb.Route_ROUTE_COBOUNDARY
	}
	return pb.Route_ROUTE_BOUNDARY
}

// Done takes a finished task.
func (m *Machine) Done(worker int, d *pb.TaskDone) ([]Effect, error) {
	r := m.running[d.Task]
	if r == nil || r.worker != worker {
		return nil, fmt.Errorf("schedule: worker %d finished task %d, which it was not given", worker, d.Task)
	}
	delete(m.running, d.Task)
	for _, w := range m.crew {
		if w.ID == worker {
			w.tasks--
		}
	}
	work := m.Crew[worker]
	work.CPU = max(work.CPU, d.CpuSeconds)
	work.Peak = max(work.Peak, d.PeakBytes)
	r.then(d)
	if m.complex != nil {
		m.advance()
	}
	return m.deal(), nil
}

// Gone takes the loss of a worker: fatal to the job if it belongs to the crew.
func (m *Machine) Gone(worker int) error {
	for _, w := range m.crew {
		if w.ID == worker && !m.ended {
			return &Lost{worker}
		}
	}
	return nil
}

// advance starts the next block when its turn has come, and the last checks after
// all blocks.
func (m *Machine) advance() {
	for m.step < len(m.blocks) && m.blocks[m.step].sealed {
		m.step++
	}
	switch {
	case m.step < len(m.blocks):
		if b := m.blocks[m.step]; b.Method == plan.Reduce && b.surveyed && m.current == nil && !m.blocksGraphs() {
			m.solve(b)
		}
	case !m.last:
		m.last = true
		m.lastChecks()
	case len(m.waiting) == 0 && len(m.running) == 0:
		m.ended = true
	}
}

// blocksGraphs says that a graph block is still under way: its result clears others.
func (m *Machine) blocksGraphs() bool {
	for _, b := range m.blocks {
		if b.Method != plan.Reduce && !b.sealed {
			return true
		}
	}
	return false
}

// lastChecks runs the second answers, with all that is known, and re-reads the blocks.
func (m *Machine) lastChecks() {
	for _, b := range m.blocks {
		if b.Residual <= plan.RecheckLimit || m.job.Options.Recheck {
			m.add(&pb.Task{Work: pb.Work_WORK_RECHECK, Degree: uint32(b.Degree), Route: wire(b.Route), Masks: m.known(b, true, true)}, 3*m.entries(b.Degree), func(*pb.TaskDone) {})
		}
	}
	for _, b := range m.blocks {
		m.add(&pb.Task{Work: pb.Work_WORK_UNCHANGED, Degree: uint32(b.Degree)}, m.entries(b.Degree)/20, func(*pb.TaskDone) {})
	}
	if len(m.blocks) == 0 {
		m.ended = true
	}
}

// masks says which neighbours clear and compress block b in its route, of those solved.
func (m *Machine) masks(b *BlockState) *pb.Masks {
	above, below := b.Clear, b.Drop
	if b.Route == plan.Coboundary {
		above, below = b.Drop, b.Clear
	}
	return m.known(b, above, below)
}

// known says which of a block's neighbours are solved, and by which pairs.
func (m *Machine) known(b *BlockState, above, below bool) *pb.Masks {
	solved := func(k int) bool { n := m.byDegree[k]; return n != nil && n.sealed }
	masks := &pb.Masks{Above: above && solved(b.Degree+1), Below: below && solved(b.Degree-1)}
	if masks.Above {
		masks.AboveDigest = m.byDegree[b.Degree+1].Done.PairsDigest
	}
	if masks.Below {
		masks.BelowDigest = m.byDegree[b.Degree-1].Done.PairsDigest
	}
	return masks
}

// solve starts the reduction of a block, by way of its anti-transpose in the coboundary route.
func (m *Machine) solve(b *BlockState) {
	r := &reduction{block: b, masks: m.masks(b)}
	m.current = r
	if b.Route == plan.Boundary {
		m.open(r)
		return
	}
	m.add(&pb.Task{Work: pb.Work_WORK_TURN, Degree: uint32(b.Degree), Masks: r.masks, UseApparent: m.apparent()}, 2*m.entries(b.Degree), func(d *pb.TaskDone) {
		b.Residual, b.Dropped = d.Residual, d.RowsDropped
		m.open(r)
	})
}

// Stage names what is under way, for people and for the account of seconds.
func (m *Machine) Stage() string {
	compress := false
	for _, r := range m.running {
		switch r.order.Work {
		case pb.Work_WORK_PREPARE:
			return "prepare"
		case pb.Work_WORK_SURVEY, pb.Work_WORK_GRAPH, pb.Work_WORK_TURN, pb.Work_WORK_SEAL:
			compress = true
		}
	}
	switch {
	case m.current != nil && m.current.begun:
		return "reduce"
	case compress:
		return "compress"
	}
	return "evidence"
}

// shape returns rows and columns of a block in its route.
func (m *Machine) shape(b *BlockState) (rows, cols uint32) {
	rows, cols = m.complex.Cells[b.Degree-1], m.complex.Cells[b.Degree]
	if b.Route == plan.Coboundary {
		rows, cols = cols, rows
	}
	return rows, cols
}

func (m *Machine) tiling(b *BlockState) reduce.Tiling {
	rows, cols := m.shape(b)
	threads := 1
	for _, w := range m.crew {
		threads = max(threads, w.Threads)
	}
	per := m.job.Options.PerTile
	if per == 0 {
		per = plan.TilesAWorker
	}
	return reduce.Cut(rows, plan.Workers(b.Residual, uint64(cols), threads, len(m.crew), m.job.Options), per)
}
