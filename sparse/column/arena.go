package column

import (
	"errors"
	"sync"
	"unsafe"
)

// A Ref says where in an Arena a column is: its offset in 8-byte words.
type Ref uint32

// Raw is the Ref of a column that was never changed: it is read from the block.
const Raw Ref = 1<<32 - 1

const (
	pageBits   = 12 // 4,096 words, 32 KiB
	pageWords  = 1 << pageBits
	folderBits = 10
	growthMax  = 64 // pages a shelf takes at once, at most
)

// ErrFull is returned when the changed columns of one block exceed an arena's 32 GiB.
var ErrFull = errors.New("column: changed columns take more than 32 GiB on one worker; use more workers")

// Arena keeps changed columns in pointer-free pages that the garbage collector
// never walks. Columns are written through Shelves, one a goroutine, and may be
// read by anyone who got their Ref through an atomic operation; nothing is moved
// or overwritten while the arena lives. Space of columns that were evicted stays
// until the block is finished.
type Arena struct {
	mu      sync.Mutex
	next    uint32 // first page not handed out
	folders [1 << (32 - pageBits - folderBits)]*[1 << folderBits][]uint64
}

// Shelf is one goroutine's place in an Arena.
type Shelf struct {
	arena *Arena
	words []uint64 // what is left of the pages taken last
	base  Ref      // Ref of words[0]
	grow  int
	held  uint64
}

// Shelf returns a new place for one goroutine.
func (a *Arena) Shelf() *Shelf { return &Shelf{arena: a, grow: 1} }

// take hands out n adjoining pages.
func (a *Arena) take(n int) ([]uint64, Ref, error) {
	words := make([]uint64, n*pageWords)
	a.mu.Lock()
	defer a.mu.Unlock()
	if uint64(a.next)+uint64(n) >= 1<<(32-pageBits) {
		return nil, 0, ErrFull
	}
	first := a.next
	for i := range n {
		p := first + uint32(i)
		f := &a.folders[p>>folderBits]
		if *f == nil {
			*f = new([1 << folderBits][]uint64)
		}
		(*f)[p&(1<<folderBits-1)] = words[i*pageWords:]
	}
	a.next += uint32(n)
	return words, Ref(first) << pageBits, nil
}

func (a *Arena) at(r Ref) []uint64 {
	p := uint32(r) >> pageBits
	return a.folders[p>>folderBits][p&(1<<folderBits-1)][r&(pageWords-1):]
}

// Stored layout: word 0 the checksum, word 1 the length twice, plus 1 for bitmap
// pairs; then the 64-bit words (pairs only); then the uint32, two a word.

// Put stores a column given as drained words, in the form asked for.
func (s *Shelf) Put(form Form, sum uint64, at []uint32, words []uint64, entries int) (Ref, error) {
	pairs := form.pairs(len(at), entries)
	n, need := entries, 2+(entries+1)/2
	if pairs {
		n, need = len(at), 2+len(at)+(len(at)+1)/2
	}
	if need > len(s.words) {
		if err := s.more(need); err != nil {
			return 0, err
		}
	}
	ref, to := s.base, s.words[:need]
	s.words, s.base = s.words[need:], s.base+Ref(need)
	s.held += uint64(need)
	to[0], to[1] = sum, uint64(n)<<1
	if pairs {
		to[1] |= 1
		copy(to[2:], words)
		copy(halves(to[2+n:], n), at)
		return ref, nil
	}
	spread(halves(to[2:], n), at, words)
	return ref, nil
}

func (s *Shelf) more(need int) error {
	pages := max(s.grow, (need+pageWords-1)/pageWords)
	s.grow = min(2*s.grow, growthMax)
	words, base, err := s.arena.take(pages)
	if err != nil {
		return err
	}
	s.words, s.base = words, base
	return nil
}

// Drop takes back the column that was put last, as nobody has seen it.
func (s *Shelf) Drop(r Ref) {
	n := int(s.base - r)
	s.words, s.base = s.arena.at(r)[:n+len(s.words)], r
	s.held -= uint64(n)
}

// Bytes is the space that columns put on this shelf take.
func (s *Shelf) Bytes() uint64 { return 8 * s.held }

// Get returns the column at a Ref; its slices point into the arena.
func (a *Arena) Get(index uint32, r Ref) Column {
	w := a.at(r)
	n := int(w[1] >> 1)
	c := Column{Index: index, Sum: w[0]}
	if w[1]&1 == 0 {
		c.Rows = halves(w[2:], n)
		return c
	}
	c.Words, c.Rows = w[2:2+n:2+n], halves(w[2+n:], n)
	return c
}

func halves(w []uint64, n int) []uint32 {
	if n == 0 {
		return nil
	}
	_ = w[(n-1)/2]
	return unsafe.Slice((*uint32)(unsafe.Pointer(&w[0])), n)
}

// spread writes the rows of drained words as a list.
func spread(to []uint32, at []uint32, words []uint64) {
	c := Column{Rows: at, Words: words}
	i := 0
	c.Each(func(r uint32) { to[i] = r; i++ })
}
