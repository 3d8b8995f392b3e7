package reduce

// Tiling cuts the rows of a block into contiguous tiles of equal height and deals
// them: tile t covers rows [t·Height, (t+1)·Height) and lives on worker t mod Workers.
type Tiling struct {
	Rows    uint32
	Height  uint32 // rows a tile, at least 1
	Tiles   int
	Workers int
}

// Cut makes a tiling with at most perWorker tiles a worker.
func Cut(rows uint32, workers, perWorker int) Tiling {
	workers = max(workers, 1)
	want := uint64(workers * max(perWorker, 1))
	height := max((uint64(rows)+want-1)/want, 1)
	return Tiling{Rows: rows, Height: uint32(height), Tiles: int((uint64(rows) + height - 1) / height), Workers: workers}
}

// Tile returns the tile of row r.
func (t Tiling) Tile(r uint32) int { return int(r / t.Height) }

// Owner returns the worker that a tile lives on.
func (t Tiling) Owner(tile int) int { return tile % t.Workers }

// slot returns where a row stands in the table of its owner.
func (t Tiling) slot(r uint32) uint32 {
	if t.Workers == 1 {
		return r
	}
	tile := r / t.Height
	return tile/uint32(t.Workers)*t.Height + (r - tile*t.Height)
}

// row is the inverse of slot on worker self.
func (t Tiling) row(self int, slot uint32) uint32 {
	if t.Workers == 1 {
		return slot
	}
	return (slot/t.Height*uint32(t.Workers)+uint32(self))*t.Height + slot%t.Height
}

// slots returns how many slots a worker's table has.
func (t Tiling) slots(self int) uint64 {
	if t.Workers == 1 {
		return uint64(t.Rows)
	}
	tiles := (t.Tiles - self + t.Workers - 1) / t.Workers
	return uint64(max(tiles, 0)) * uint64(t.Height)
}
