package schedule

import (
	"fmt"
	"sort"

	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/column"
	"pairloom/sparse/evidence"
)

// reduction is one block on its workers: opened, begun when all are ready, closed
// when the cascade says that every tile is done, sealed by a task.
type reduction struct {
	number   uint64
	block    *BlockState
	masks    *pb.Masks
	places   []int // crew numbers by place
	ready    int
	begun    bool
	closed   bool
	cascade  *cascade
	finished []*pb.Finished // by place
	columns  uint64         // residual columns that were offered
	settled  []uint64       // by place, for progress
}

// open asks the least loaded workers to make their tables.
func (m *Machine) open(r *reduction) {
	t := m.tiling(r.block)
	by := append([]*Member(nil), m.crew...)
	sort.SliceStable(by, func(i, j int) bool { return by[i].load < by[j].load })
	r.number = m.number()
	r.cascade = newCascade(t)
	r.finished, r.settled = make([]*pb.Finished, t.Workers), make([]uint64, t.Workers)
	order := &pb.Reduction{Reduction: r.number, Folder: m.job.Folder, Seed: m.job.Seed, Degree: uint32(r.block.Degree),
		Route: wire(r.block.Route), Masks: r.masks, Rows: t.Rows, TileHeight: t.Height, Tiles: uint32(t.Tiles),
		Attempt: 1, MapVersion: 1, UseApparent: m.apparent(), Form: form(m.job.Options.Form)}
	for _, w := range by[:t.Workers] {
		r.places = append(r.places, w.ID)
		order.Peers = append(order.Peers, w.Address)
		order.Crew = append(order.Crew, uint32(w.ID))
		w.load += float64(r.block.Residual) * 50 / float64(t.Workers)
	}
	for place, w := range by[:t.Workers] {
		o := &pb.Reduction{Reduction: order.Reduction, Folder: order.Folder, Seed: order.Seed, Degree: order.Degree, Route: order.Route,
			Masks: order.Masks, Rows: order.Rows, TileHeight: order.TileHeight, Tiles: order.Tiles, Attempt: order.Attempt,
			MapVersion: order.MapVersion, UseApparent: order.UseApparent, Form: order.Form, Peers: order.Peers, Crew: order.Crew,
			Self: uint32(place), Threads: uint32(max(w.Threads, 1))}
		m.order(w.ID, &pb.Order{Body: &pb.Order_Reduction{Reduction: o}})
	}
}

func form(name string) uint32 {
	return map[string]uint32{"lists": uint32(column.Lists), "pairs": uint32(column.Pairs)}[name]
}

// place returns where a worker stands in the reduction under way.
func (m *Machine) place(worker int, number uint64) (*reduction, int, error) {
	if r := m.current; r != nil && r.number == number {
		for place, w := range r.places {
			if w == worker {
				return r, place, nil
			}
		}
	}
	return nil, 0, fmt.Errorf("schedule: worker %d speaks of reduction %d, in which it has no part", worker, number)
}

func (m *Machine) all(r *reduction, o *pb.Order) {
	for _, w := range r.places {
		m.order(w, o)
	}
}

// Ready takes a worker's tables; when all have them, work begins.
func (m *Machine) Ready(worker int, e *pb.Ready) ([]Effect, error) {
	r, _, err := m.place(worker, e.Reduction)
	if err != nil {
		return nil, err
	}
	r.ready++
	r.columns += e.Columns
	r.block.Dropped = max(r.block.Dropped, e.RowsDropped)
	if r.ready == len(r.places) {
		r.begun = true
		r.block.Residual = r.columns
		m.all(r, &pb.Order{Body: &pb.Order_Begin{Begin: &pb.Begin{Reduction: r.number}}})
	}
	return m.deal(), nil
}

// Counters takes a worker's counters: all tiles done, or, when everything is quiet
// and yet not done, a probe. *evidence.Broken says that columns were lost or doubled.
func (m *Machine) Counters(worker int, e *pb.Counters) ([]Effect, error) {
	r, place, err := m.place(worker, e.Reduction)
	if err != nil || r.closed {
		return nil, err
	}
	r.settled[place] = e.Settled
	done, err := r.cascade.report(place, e)
	if err != nil {
		return nil, err
	}
	if done {
		r.closed = true
		m.all(r, &pb.Order{Body: &pb.Order_Close{Close: &pb.Close{Reduction: r.number}}})
		return m.deal(), nil
	}
	if r.cascade.quiet() {
		if err := m.probe(r); err != nil {
			return nil, &evidence.Broken{Check: "columns received", Degree: r.block.Degree, Why: err.Error()}
		}
	}
	return m.deal(), nil
}

// probe asks all workers for their counters, again and again while they change.
func (m *Machine) probe(r *reduction) error {
	c := r.cascade
	if c.probe > 0 {
		if !c.probed() {
			return nil
		}
		if err := c.lost(); err != nil {
			return err
		}
	}
	c.probe++
	m.all(r, &pb.Order{Body: &pb.Order_Probe{Probe: &pb.Probe{Reduction: r.number, Number: c.probe}}})
	return nil
}

// Finished takes a worker's written results; when all are there the block is sealed.
func (m *Machine) Finished(worker int, e *pb.Finished) ([]Effect, error) {
	r, place, err := m.place(worker, e.Reduction)
	if err != nil {
		return nil, err
	}
	if !r.closed || r.finished[place] != nil {
		return nil, fmt.Errorf("schedule: worker %d finished reduction %d out of turn", worker, e.Reduction)
	}
	r.finished[place] = e
	w := m.Crew[worker]
	w.Tiles += uint64(e.Tiles)
	w.Settled += e.Settled + e.Zero
	w.Sent += e.SentColumns
	w.Received += e.ReceivedColumns
	w.CPU = max(w.CPU, e.CpuSeconds)
	w.Peak = max(w.Peak, e.PeakBytes)
	r.block.Additions += e.Additions
	r.block.Evictions += e.Evictions
	m.Exchanged += e.SentColumns
	m.Bytes += e.SentBytes
	var files []string
	for _, f := range r.finished {
		if f == nil {
			return m.deal(), nil
		}
		files = append(files, f.File)
	}
	b := r.block
	m.add(&pb.Task{Work: pb.Work_WORK_SEAL, Degree: uint32(b.Degree), Route: wire(b.Route), Masks: r.masks, Files: files, UseApparent: m.apparent()},
		m.entries(b.Degree)/2, func(d *pb.TaskDone) {
			b.Done, b.sealed = d, true
			m.current = nil
		})
	return m.deal(), nil
}

// Progress says how far the reduction under way is: columns settled of all.
func (m *Machine) Progress() (done, total uint64) {
	r := m.current
	if r == nil || !r.begun {
		return 0, 0
	}
	for _, n := range r.settled {
		done += n
	}
	return done, r.columns
}
