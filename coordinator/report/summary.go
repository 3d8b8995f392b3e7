package report

import (
	"fmt"
	"io"
	"strings"

	"pairloom/sparse/chain"
	"pairloom/sparse/stage"
)

// Summary is summary.json, schema 1: keys are exact, null where unknown, never missing.
type Summary struct {
	Schema     int               `json:"schema"`
	Version    string            `json:"version"`
	Inputs     []stage.InputFile `json:"inputs"`
	Kind       string            `json:"kind"`
	Options    any               `json:"options"`
	Degrees    int               `json:"degrees"`
	Truncated  bool              `json:"truncated"`
	PerDegree  []DegreeSummary   `json:"per_degree"`
	Betti      []*uint64         `json:"betti"`
	Euler      *int64            `json:"euler"` // alternating sum of the cells; null where the complex is cut
	Graph      *GraphSummary     `json:"graph"`
	Exchange   ExchangeSummary   `json:"exchange"`
	Crew       []MemberSummary   `json:"crew"`
	Checkpoint CheckpointSummary `json:"checkpoints"`
	Seconds    SecondsSummary    `json:"seconds"`
	CPU        *float64          `json:"cpu_seconds"`
	Peak       *uint64           `json:"peak_bytes"`
	Checks     []Check           `json:"checks"`
	Notes      []chain.Note      `json:"notes"`
	longest    []Long
}

// DegreeSummary is a degree k and its block ∂_k; block figures are null for degree 0.
type DegreeSummary struct {
	Degree      int             `json:"degree"`
	Cells       uint32          `json:"cells"`
	Nonzeros    *uint64         `json:"nonzeros"`
	Rank        *uint64         `json:"rank"`
	Betti       *uint64         `json:"betti"`
	Route       *string         `json:"route"`
	RouteReason *string         `json:"route_reason"`
	Columns     *ColumnsSummary `json:"columns"`
	RowsDropped *uint64         `json:"rows_dropped"`
	Additions   *uint64         `json:"additions"`
	Evictions   *uint64         `json:"evictions"`
}

// ColumnsSummary counts the columns of a block's route by fate.
type ColumnsSummary struct {
	Apparent uint64 `json:"apparent"`
	Graph    uint64 `json:"graph"`
	Cleared  uint64 `json:"cleared"`
	Settled  uint64 `json:"settled"`
	Zero     uint64 `json:"zero"`
}

// GraphSummary treats an edge list as a directed multigraph.
type GraphSummary struct {
	Vertices   uint64 `json:"vertices"`
	Edges      uint64 `json:"edges"`
	Rank       uint64 `json:"rank"`
	Components uint64 `json:"components"`
	Loops      uint64 `json:"loops"`
}

// ExchangeSummary says what crossed between workers; MatrixBytes is 4 × nonzeros.
type ExchangeSummary struct {
	Columns     uint64 `json:"columns"`
	Bytes       uint64 `json:"bytes"`
	MatrixBytes uint64 `json:"matrix_bytes"`
}

// MemberSummary is what one worker did.
type MemberSummary struct {
	Name     string  `json:"name"`
	Tiles    uint64  `json:"tiles"`
	Settled  uint64  `json:"settled"`
	Sent     uint64  `json:"sent"`
	Received uint64  `json:"received"`
	CPU      float64 `json:"cpu_seconds"`
}

// CheckpointSummary says what was written and resumed; nothing yet.
type CheckpointSummary struct {
	Written     uint64  `json:"written"`
	Bytes       uint64  `json:"bytes"`
	ResumedFrom *string `json:"resumed_from"`
	Redone      uint64  `json:"columns_redone"`
}

// SecondsSummary is wall time by stage.
type SecondsSummary struct {
	Read     *float64 `json:"read"`
	Order    *float64 `json:"order"`
	Block    *float64 `json:"block"`
	Compress *float64 `json:"compress"`
	Reduce   *float64 `json:"reduce"`
	Merge    *float64 `json:"merge"`
	Evidence *float64 `json:"evidence"`
	Write    *float64 `json:"write"`
	Total    *float64 `json:"total"`
}

func seconds(m map[string]float64) SecondsSummary {
	at := func(name string) *float64 {
		if v, ok := m[name]; ok {
			return &v
		}
		return nil
	}
	return SecondsSummary{at("read"), at("order"), at("block"), at("compress"), at("reduce"), at("merge"), at("evidence"), at("write"), at("total")}
}

func summarise(run *Run, betti []*uint64) *Summary {
	c := run.Complex
	s := &Summary{Schema: 1, Version: run.Version, Inputs: run.Inputs, Kind: c.Kind, Options: run.Options, Degrees: c.Degrees, Truncated: c.Truncated,
		Betti: betti, Exchange: ExchangeSummary{Columns: run.Exchanged, Bytes: run.ExchangeBytes}, Crew: []MemberSummary{},
		Seconds: seconds(run.Seconds), CPU: &run.CPU, Peak: &run.Peak, Checks: run.Checks, Notes: append([]chain.Note{}, c.Notes...)}
	if g := c.Graph; g != nil {
		s.Graph = &GraphSummary{g.Vertices, g.Edges, g.Rank, g.Components, g.Loops}
	}
	if !c.Truncated {
		euler := int64(0)
		for k, n := range c.Cells {
			euler += int64(n) * int64(1-2*(k%2))
		}
		s.Euler = &euler
	}
	for k, n := range c.Cells {
		s.PerDegree = append(s.PerDegree, degreeSummary(run, k, n, betti))
	}
	for _, b := range run.Blocks {
		s.Exchange.MatrixBytes += 4 * b.Nonzeros
	}
	for _, m := range run.Crew {
		s.Crew = append(s.Crew, MemberSummary(m))
	}
	return s
}

func degreeSummary(run *Run, k int, cells uint32, betti []*uint64) DegreeSummary {
	d := DegreeSummary{Degree: k, Cells: cells}
	if k < len(betti) {
		d.Betti = betti[k]
	}
	for _, b := range run.Blocks {
		if b.Degree == k {
			d.Nonzeros, d.Rank, d.Route, d.RouteReason = &b.Nonzeros, &b.Rank, &b.Route, &b.Reason
			d.Columns = &ColumnsSummary{b.Apparent, b.Graph, b.Cleared, b.Settled, b.Zero}
			d.RowsDropped, d.Additions, d.Evictions = &b.RowsDropped, &b.Additions, &b.Evictions
		}
	}
	return d
}

// holes names the classes of a degree for people: one, many.
func holes(k int) (one, many string) {
	switch k {
	case 0:
		return "connected component", "connected components"
	case 1:
		return "independent loop", "independent loops"
	case 2:
		return "enclosed void", "enclosed voids"
	}
	return fmt.Sprintf("class of degree %d", k), fmt.Sprintf("classes of degree %d", k)
}

// Words says what came out, for a person.
func (s *Summary) Words(w io.Writer) {
	cells := uint64(0)
	for _, d := range s.PerDegree {
		cells += uint64(d.Cells)
	}
	fmt.Fprintf(w, "%d cells of a %s complex.\n", cells, s.Kind)
	for k, b := range s.Betti {
		if b == nil {
			continue
		}
		one, many := holes(k)
		name := many
		if *b == 1 {
			name = one
		}
		fmt.Fprintf(w, "  degree %d: %d %s at the end (Betti number %d)\n", k, *b, name, *b)
		for _, l := range s.longest {
			if l.Degree == k {
				fmt.Fprintf(w, "            one lasts from %v to %v (%v long), born at cell %s\n", l.Birth, l.Death, l.Death-l.Birth, l.Where)
			}
		}
	}
	if s.Truncated {
		fmt.Fprintf(w, "  cut above degree %d: nothing is claimed for higher degrees\n", s.Degrees)
	}
	if g := s.Graph; g != nil {
		fmt.Fprintf(w, "  as a directed multigraph: %d vertices, %d edges, rank %d, %d components, %d independent loops\n", g.Vertices, g.Edges, g.Rank, g.Components, g.Loops)
	}
	for _, n := range s.Notes {
		fmt.Fprintf(w, "  note: %s: %d\n", n.What, n.Count)
	}
	var checks []string
	for _, c := range s.Checks {
		checks = append(checks, c.Name+" ("+c.Verdict+")")
	}
	fmt.Fprintf(w, "  evidence: %s\n", strings.Join(checks, "; "))
}
