package order

import (
	"pairloom/sparse/block"
	"pairloom/sparse/chain"
	"pairloom/sparse/source"
)

// values reads the value arrays and writes the cell tables.
func (m *matrices) values() error {
	m.value = make([][]float64, len(m.complex.Cells))
	for i, path := range m.spec.ValueFiles {
		k := m.first - 1 + i
		if k >= len(m.complex.Cells) {
			break // above the cut
		}
		v, err := readFunction(path)
		if err != nil {
			return err
		}
		if uint64(len(v)) != uint64(m.complex.Cells[k]) {
			return source.Broken(path, 0, "%d values; one for each of the %d cells of degree %d was expected", len(v), m.complex.Cells[k], k)
		}
		for j := 1; j < len(v); j++ {
			if v[j] < v[j-1] {
				return source.Broken(path, 0, "value %v of cell %d is below %v of the cell before; columns must stand in the order of their values", v[j], j, v[j-1])
			}
		}
		m.value[k] = v
	}
	if len(m.spec.ValueFiles) == 0 {
		return nil
	}
	for k, v := range m.value {
		if err := writeValues(m.dir, k, m.complex.Cells[k], v); err != nil {
			return err
		}
	}
	return nil
}

func writeValues(dir string, k int, n uint32, v []float64) error {
	out, err := chain.CreateValues(chain.CellsPath(dir, k), n)
	if err != nil {
		return err
	}
	defer out.Discard()
	copy(out.Values, v)
	return published(out.Publish(false), out.Close)
}

// inOrder checks that no face enters after its coface.
func (m *matrices) inOrder(k int, path string, b *block.Matrix) error {
	low, high := m.value[k-1], m.value[k]
	if low == nil || high == nil {
		return nil
	}
	for j := range b.Cols {
		for _, r := range b.Column(j, nil) {
			if low[r] > high[j] {
				return source.Broken(path, 0, "%d-cell %d enters at %v, before its face %d at %v; a face must not be later than its coface", k, j, high[j], r, low[r])
			}
		}
	}
	return nil
}
