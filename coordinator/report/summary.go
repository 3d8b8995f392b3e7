package report

import (
	"encoding/json"
	"fmt"
	"io"
	"time"

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
	Euler      *int64            `json:"euler"` // alternating sum of the cells; null where some degrees are not there
	Graph      *GraphSummary     `json:"graph"`
	Exchange   ExchangeSummary   `json:"exchange"`
	Crew       []MemberSummary   `json:"crew"`
	Checkpoint CheckpointSummary `json:"checkpoints"`
	Seconds    SecondsSummary    `json:"seconds"`
	CPU        *float64          `json:"cpu_seconds"`
	Peak       *uint64           `json:"peak_bytes"`
	Checks     []Check           `json:"checks"` // the evidence, then what the reader counted
	notes      []chain.Note
	evidence   []Check
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

func summarise(run *Run, c *chain.Complex, d *diagram, took time.Duration) *Summary {
	s := &Summary{Schema: 1, Version: run.Version, Inputs: append([]stage.InputFile{}, run.Inputs...), Kind: c.Kind, Options: run.Options,
		Degrees: c.Degrees, Truncated: c.Truncated, Betti: d.betti, Euler: euler(c), Crew: []MemberSummary{},
		Exchange: ExchangeSummary{Columns: run.Exchanged, Bytes: run.ExchangeBytes}, Seconds: run.took(took),
		CPU: known(run.CPU), Peak: known(run.Peak), Checks: append([]Check{}, run.Checks...), notes: c.Notes, evidence: run.Checks, longest: d.longest}
	if g := c.Graph; g != nil {
		s.Graph = &GraphSummary{g.Vertices, g.Edges, g.Rank, g.Components, g.Loops}
	}
	for k, n := range c.Cells {
		s.PerDegree = append(s.PerDegree, degreeSummary(run, k, n, d.betti))
	}
	for _, b := range run.Blocks {
		s.Exchange.MatrixBytes += 4 * b.Nonzeros
	}
	for _, m := range run.Crew {
		s.Crew = append(s.Crew, MemberSummary(m))
	}
	for _, n := range c.Notes {
		s.Checks = append(s.Checks, Check{Name: "input: " + n.What, Verdict: fmt.Sprintf("counted: %d", n.Count)})
	}
	return s
}

// took enters the seconds of writing.
func (run *Run) took(write time.Duration) SecondsSummary {
	if run.Seconds == nil {
		run.Seconds = map[string]float64{}
	}
	if _, ok := run.Seconds["total"]; !ok {
		sum := 0.0
		for _, s := range run.Seconds {
			sum += s
		}
		run.Seconds["total"] = sum
	}
	run.Seconds["write"] = write.Seconds()
	run.Seconds["total"] += write.Seconds()
	return seconds(run.Seconds)
}

// euler is the alternating sum of the cells, nil where some are not there.
func euler(c *chain.Complex) *int64 {
	if c.Truncated || c.First > 0 {
		return nil
	}
	sum := int64(0)
	for k, n := range c.Cells {
		sum += int64(n) * int64(1-2*(k%2))
	}
	return &sum
}

// known is v, or nil for a figure that nobody took.
func known[T uint64 | float64](v T) *T {
	if v == 0 {
		return nil
	}
	return &v
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

// WriteJSON writes the summary as summary.json has it: keys in their order, indented.
func (s *Summary) WriteJSON(out io.Writer) error {
	e := json.NewEncoder(out)
	e.SetEscapeHTML(false)
	e.SetIndent("", "  ")
	return e.Encode(s)
}
