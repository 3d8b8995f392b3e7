package schedule

import (
	"fmt"

	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/reduce"
)

// cascade works out from the workers' counters which tiles are done: a tile is
// done when all tiles above it are done, it is empty, and it has received all that
// was sent to it. A worker's report is taken at one instant, and a tile that is
// done stays done, so reports of different instants may be walked together from
// the top: what a done tile sent is final in the report that shows it empty.
type cascade struct {
	tiling  reduce.Tiling
	reports []*pb.Counters // latest, by place
	done    int            // tiles done, from the top
	probe   uint64         // number of the probe under way, 0: none
	before  []uint64       // what tiles had received and been sent at the last complete probe
}

func newCascade(t reduce.Tiling) *cascade {
	return &cascade{tiling: t, reports: make([]*pb.Counters, t.Workers)}
}

// report takes a worker's counters and says whether all tiles are done.
func (c *cascade) report(place int, r *pb.Counters) (done bool, err error) {
	if len(r.Received) != c.tiling.Tiles || len(r.Sent) != c.tiling.Tiles || len(r.Empty) != c.tiling.Tiles {
		return false, fmt.Errorf("schedule: counters of %d tiles where there are %d", len(r.Received), c.tiling.Tiles)
	}
	c.reports[place] = r
	for c.done < c.tiling.Tiles && c.tileDone(c.tiling.Tiles-1-c.done) {
		c.done++
	}
	return c.done == c.tiling.Tiles, nil
}

func (c *cascade) tileDone(t int) bool {
	own := c.reports[c.tiling.Owner(t)]
	if own == nil || own.Empty[t] == 0 {
		return false
	}
	sent, known := c.sent(t)
	return known && sent == own.Received[t]
}

// sent sums what all workers sent to a tile; false while one has not reported. A
// worker that has no tile above t sends nothing to it, but it reports all the same.
func (c *cascade) sent(t int) (n uint64, known bool) {
	for _, r := range c.reports {
		if r == nil {
			return 0, false
		}
		n += r.Sent[t]
	}
	return n, true
}

// quiet says that every worker reported to be empty with nothing on the way:
// then either all is done or a column was lost, and a probe tells.
func (c *cascade) quiet() bool {
	for place, r := range c.reports {
		if r == nil || r.Outstanding > 0 {
			return false
		}
		for t := place; t < c.tiling.Tiles; t += c.tiling.Workers {
			if r.Empty[t] == 0 {
				return false
			}
		}
	}
	return true
}

// probed says that every worker's report answers the probe under way.
func (c *cascade) probed() bool {
	for _, r := range c.reports {
		if r == nil || r.Probe != c.probe {
			return false
		}
	}
	return true
}

// lost compares two complete probes in a row, both quiet. All reports of the second
// were taken after all of the first, when nothing was on its way; so if nothing has
// changed and a tile still has not received what it was sent, columns are gone (or,
// received more, were doubled).
func (c *cascade) lost() error {
	now := make([]uint64, 0, 2*c.tiling.Tiles)
	missing := -1
	for t := range c.tiling.Tiles {
		sent, _ := c.sent(t)
		got := c.reports[c.tiling.Owner(t)].Received[t]
		now = append(now, sent, got)
		if sent != got {
			missing = t
		}
	}
	same := len(c.before) == len(now)
	for i := range c.before {
		same = same && c.before[i] == now[i]
	}
	c.before = now
	if same && missing >= 0 {
		return fmt.Errorf("schedule: tile %d received %d columns of %d sent to it, and nothing is on its way", missing, now[2*missing+1], now[2*missing])
	}
	return nil
}
