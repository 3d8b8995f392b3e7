// Package report turns the pairs of a finished job into its result folder:
// pairs.csv, betti.csv and summary.json, and into words for a person.
package report

import (
	"pairloom/sparse/chain"
	"pairloom/sparse/stage"
)

// BlockRun is what happened to one block.
type BlockRun struct {
	Degree      int    // of the block: ∂_Degree
	Route       string // "boundary", "coboundary"
	Reason      string // why that route, in a few words
	Apparent    uint64 // columns of the route by fate
	Graph       uint64
	Cleared     uint64
	Settled     uint64
	Zero        uint64
	RowsDropped uint64
	Additions   uint64
	Evictions   uint64
	Rank        uint64 // pairs
	Nonzeros    uint64
}

// Member is what one worker did.
type Member struct {
	Name     string
	Tiles    uint64 // tiles owned, all blocks together
	Settled  uint64 // columns that ended here: settled or zero
	Sent     uint64 // columns
	Received uint64
	CPU      float64 // seconds
}

// Check is one piece of evidence.
type Check struct {
	Name    string `json:"name"`
	Verdict string `json:"verdict"` // "passed", or "skipped: why"; a failed check never gets here
}

// Run is all that a coordinator knows of a finished job beside its pairs.
type Run struct {
	Version       string
	Inputs        []stage.InputFile
	Options       any // what was asked, as JSON
	Complex       *chain.Complex
	Blocks        []BlockRun // degrees 1..top
	Exchanged     uint64     // columns sent between workers
	ExchangeBytes uint64
	Crew          []Member
	Seconds       map[string]float64 // read, order, block, compress, reduce, merge, evidence, write, total: wall
	CPU           float64
	Peak          uint64 // bytes
	Checks        []Check
}
