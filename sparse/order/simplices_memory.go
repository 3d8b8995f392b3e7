package order

import (
	"unsafe"

	"golang.org/x/sys/unix"
)

// array is the memory behind one large slice: pages taken from the system and given
// back at a known moment, so that what a stage used is not held during the next. It
// grows by moving pages, not bytes (mremap). Where the system refuses, the Go heap
// stands in. The slice must not be used after free.
type array[T uint32 | uint64 | float64] struct{ raw []byte }

// make returns n zeros.
func (a *array[T]) make(n int) []T { return a.grow(nil, n)[:n] }

// grow returns s, which is a's slice or nil, with room for n elements in all.
func (a *array[T]) grow(s []T, n int) []T {
	if n <= cap(s) {
		return s
	}
	var zero T
	bytes := (n*int(unsafe.Sizeof(zero)) + 1<<16 - 1) &^ (1<<16 - 1)
	raw, err := a.pages(bytes)
	if err != nil {
		heap := append(make([]T, 0, n), s...)
		a.free()
		return heap
	}
	a.raw = raw
	return unsafe.Slice((*T)(unsafe.Pointer(&raw[0])), bytes/int(unsafe.Sizeof(zero)))[:len(s)]
}

func (a *array[T]) pages(bytes int) ([]byte, error) {
	if a.raw != nil {
		return unix.Mremap(a.raw, bytes, unix.MREMAP_MAYMOVE)
	}
	return unix.Mmap(-1, 0, bytes, unix.PROT_READ|unix.PROT_WRITE, unix.MAP_PRIVATE|unix.MAP_ANON)
}

// free gives the memory back; it may be called twice.
func (a *array[T]) free() {
	if a.raw != nil {
		_ = unix.Munmap(a.raw)
		a.raw = nil
	}
}
