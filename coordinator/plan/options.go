// Package plan decides, from counts alone, how the blocks of a job are solved: in
// which order, by which route and method, on how many workers and tiles.
package plan

// Options is what a user may say about the work; the zero value is the default.
type Options struct {
	Route    string   `json:"route,omitempty"`    // auto (also empty), boundary, coboundary
	Without  []string `json:"without,omitempty"`  // apparent, graph, clearing, compression
	KeepZero bool     `json:"keep_zero"`          // report zero-length pairs
	Recheck  bool     `json:"recheck"`            // second answer for every block
	Memory   uint64   `json:"memory"`             // bytes; 0: no limit
	Spread   bool     `json:"spread,omitempty"`   // use all workers on every block, however small
	PerTile  int      `json:"per_tile,omitempty"` // tiles a worker, 0: 8
	Form     string   `json:"form,omitempty"`     // how changed columns are kept: smaller (also empty), lists, pairs
	Seed     uint64   `json:"-"`                  // secret seed of the words; 0: drawn
}
