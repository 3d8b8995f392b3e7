// Package record is the one format of pairloom's own files: a sequence of
// checksummed sections that are mapped into memory, so that a block of millions
// of columns is written and read without a second copy on the heap.
//
// Layout (little endian). The file starts with one header of 64 bytes:
//
//	0  magic   "pairloom"
//	8  version uint32
//	12 kind    uint32   what the file is (FileKind)
//	16 count   uint32   number of sections
//	20 zero
//	60 crc     uint32   CRC-32C of bytes 0..59
//
// then, per section, a header of 64 bytes and the payload, padded with zeros to
// a multiple of 64:
//
//	0  magic   "section\x00"
//	8  kind    uint32   what the section is (SectionKind)
//	12 zero
//	16 bytes   uint64   length of the payload
//	24 crc     uint32   CRC-32C of the payload
//	60 crc     uint32   CRC-32C of bytes 0..59
//
// Lengths are checked against the file before anything is mapped or allocated.
// A file is immutable once published. A File is safe for concurrent reading.
package record

import (
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"os"
	"path/filepath"
	"unsafe"

	"golang.org/x/sys/unix"
)

// Version is the format version written by this build. Readers refuse others by name.
const Version = 1

const (
	align     = 64
	fileMagic = "pairloom"
	secMagic  = "section\x00"
	secCount  = 1 << 16 // more sections than any file has; guards the header walk
	crcOffset = 60
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

// FileKind says what a file is; SectionKind what a section is.
type (
	FileKind    uint32
	SectionKind uint32
)

// Section announces one section of a file that is about to be created.
type Section struct {
	Kind  SectionKind
	Bytes uint64 // length of the payload
}

// Damage is the error for bytes that do not hold what their checksums say.
type Damage struct {
	Path   string
	Offset int64
	Why    string
}

func (d *Damage) Error() string {
	return fmt.Sprintf("%s: damaged at byte %d: %s", d.Path, d.Offset, d.Why)
}

// ErrExists is returned by Publish when the final name is already taken: another
// coordinator or attempt won.
var ErrExists = errors.New("record: already published")

type section struct {
	kind    SectionKind
	offset  int64 // of the payload
	payload []byte
	crc     uint32
}

// File is a mapped record file, writable between Create and Publish.
type File struct {
	path     string
	tmp      *os.File // while being written
	mapped   []byte
	kind     FileKind
	sections []section
}

func padded(n uint64) uint64 { return (n + align - 1) / align * align }

// Create lays out a new file beside path and maps it for writing. Its space is
// reserved first, so that a full disk is an error here and never a fault later.
// The caller fills the sections and calls Publish, or Discard.
func Create(path string, kind FileKind, layout ...Section) (*File, error) {
	size := uint64(align)
	for _, s := range layout {
		size += align + padded(s.Bytes)
	}
	tmp, err := os.CreateTemp(filepath.Dir(path), "."+filepath.Base(path)+".*.part")
	if err != nil {
		return nil, err
	}
	f := &File{path: path, tmp: tmp, kind: kind}
	if err := reserve(tmp, int64(size)); err != nil {
		f.Discard()
		return nil, fmt.Errorf("%s: cannot reserve %d bytes: %w", path, size, err)
	}
	f.mapped, err = unix.Mmap(int(tmp.Fd()), 0, int(size), unix.PROT_READ|unix.PROT_WRITE, unix.MAP_SHARED)
	if err != nil {
		f.Discard()
		return nil, fmt.Errorf("%s: cannot map %d bytes: %w", path, size, err)
	}
	at := uint64(align)
	for _, s := range layout {
		at += align
		f.sections = append(f.sections, section{kind: s.Kind, offset: int64(at), payload: f.mapped[at : at+s.Bytes : at+s.Bytes]})
		at += padded(s.Bytes)
	}
	return f, nil
}

// reserve allocates the file's blocks; where the file system cannot, it writes zeros.
func reserve(file *os.File, size int64) error {
	err := unix.Fallocate(int(file.Fd()), 0, 0, size)
	if err == nil || !errors.Is(err, unix.EOPNOTSUPP) {
		return err
	}
	zeros := make([]byte, 1<<20)
	for at := int64(0); at < size; at += int64(len(zeros)) {
		if _, err := file.WriteAt(zeros[:min(int64(len(zeros)), size-at)], at); err != nil {
			return err
		}
	}
	return nil
}

// Publish seals the file: checksums and headers are written, the bytes reach the
// disk when durable is set, and the file appears under its name by link(2), which
// fails with ErrExists if the name is taken. The file stays mapped for reading.
func (f *File) Publish(durable bool) error {
	f.seal()
	if durable {
		if err := unix.Msync(f.mapped, unix.MS_SYNC); err != nil {
			return fmt.Errorf("%s: %w", f.path, err)
		}
		if err := f.tmp.Sync(); err != nil {
			return fmt.Errorf("%s: %w", f.path, err)
		}
	}
	name := f.tmp.Name()
	if err := f.tmp.Chmod(0o644); err != nil {
		return err
	}
	err := os.Link(name, f.path)
	if rm := os.Remove(name); err == nil {
		err = rm
	}
	if cl := f.tmp.Close(); err == nil {
		err = cl
	}
	f.tmp = nil
	if errors.Is(err, os.ErrExist) {
		return fmt.Errorf("%s: %w", f.path, ErrExists)
	}
	if err == nil && durable {
		err = syncFolder(filepath.Dir(f.path))
	}
	return err
}

func syncFolder(path string) error {
	dir, err := os.Open(path)
	if err != nil {
		return err
	}
	defer dir.Close()
	return dir.Sync()
}

func (f *File) seal() {
	head := f.mapped[:align]
	clear(head)
	copy(head, fileMagic)
	binary.LittleEndian.PutUint32(head[8:], Version)
	binary.LittleEndian.PutUint32(head[12:], uint32(f.kind))
	binary.LittleEndian.PutUint32(head[16:], uint32(len(f.sections)))
	binary.LittleEndian.PutUint32(head[crcOffset:], crc32.Checksum(head[:crcOffset], castagnoli))
	for i := range f.sections {
		s := &f.sections[i]
		s.crc = crc32.Checksum(s.payload, castagnoli)
		h := f.mapped[s.offset-align : s.offset]
		clear(h)
		copy(h, secMagic)
		binary.LittleEndian.PutUint32(h[8:], uint32(s.kind))
		binary.LittleEndian.PutUint64(h[16:], uint64(len(s.payload)))
		binary.LittleEndian.PutUint32(h[24:], s.crc)
		binary.LittleEndian.PutUint32(h[crcOffset:], crc32.Checksum(h[:crcOffset], castagnoli))
	}
}

// Discard drops a file that was not published. It is safe after Publish, where it does nothing.
func (f *File) Discard() {
	if f.tmp == nil {
		return
	}
	if f.mapped != nil {
		_ = unix.Munmap(f.mapped)
		f.mapped, f.sections = nil, nil
	}
	f.tmp.Close()
	os.Remove(f.tmp.Name())
	f.tmp = nil
}

// Open maps a published file, checks every header, and, unless trust is set, the
// checksum of every section. Errors: *Damage, or what the operating system says.
func Open(path string, kind FileKind, trust bool) (*File, error) {
	file, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		return nil, err
	}
	if info.Size() < align || info.Size()%align != 0 || !info.Mode().IsRegular() {
		return nil, &Damage{path, info.Size(), "the file is cut short or is not a record file"}
	}
	f := &File{path: path}
	f.mapped, err = unix.Mmap(int(file.Fd()), 0, int(info.Size()), unix.PROT_READ, unix.MAP_SHARED)
	if err != nil {
		return nil, fmt.Errorf("%s: cannot map %d bytes: %w", path, info.Size(), err)
	}
	if err := f.walk(kind); err != nil {
		f.Close()
		return nil, err
	}
	if !trust {
		if err := f.Verify(); err != nil {
			f.Close()
			return nil, err
		}
	}
	return f, nil
}

// walk reads the headers; every length is compared with what is there before it is used.
func (f *File) walk(kind FileKind) error {
	head := f.mapped[:align]
	le := binary.LittleEndian
	switch {
	case string(head[:8]) != fileMagic:
		return &Damage{f.path, 0, "not a pairloom record file"}
	case le.Uint32(head[crcOffset:]) != crc32.Checksum(head[:crcOffset], castagnoli):
		return &Damage{f.path, 0, "the file header's checksum differs"}
	case le.Uint32(head[8:]) != Version:
		return fmt.Errorf("%s: format version %d, this build reads version %d", f.path, le.Uint32(head[8:]), Version)
	case FileKind(le.Uint32(head[12:])) != kind:
		return &Damage{f.path, 12, fmt.Sprintf("file kind %d where %d was expected", le.Uint32(head[12:]), kind)}
	}
	f.kind = kind
	count, at, end := le.Uint32(head[16:]), uint64(align), uint64(len(f.mapped))
	if count > secCount {
		return &Damage{f.path, 16, "more sections than a file can hold"}
	}
	for range count {
		if end-at < align {
			return &Damage{f.path, int64(at), "a section header is missing"}
		}
		h := f.mapped[at : at+align]
		n := le.Uint64(h[16:])
		switch {
		case string(h[:8]) != secMagic || le.Uint32(h[crcOffset:]) != crc32.Checksum(h[:crcOffset], castagnoli):
			return &Damage{f.path, int64(at), "a section header does not check"}
		case n > end-at-align:
			return &Damage{f.path, int64(at), fmt.Sprintf("a section of %d bytes goes beyond the end of the file", n)}
		}
		at += align
		f.sections = append(f.sections, section{SectionKind(le.Uint32(h[8:])), int64(at), f.mapped[at : at+n : at+n], le.Uint32(h[24:])})
		at += padded(n)
	}
	if at != end {
		return &Damage{f.path, int64(at), "bytes after the last section"}
	}
	return nil
}

// Verify recomputes the checksum of every section: one pass at memory speed.
// It is called again after a reduction, so that a page changed under way is seen.
func (f *File) Verify() error {
	for i, s := range f.sections {
		if crc32.Checksum(s.payload, castagnoli) != s.crc {
			return &Damage{f.path, s.offset, fmt.Sprintf("the checksum of section %d differs", i)}
		}
	}
	return nil
}

// Close unmaps the file; slices taken from it must not be used afterwards.
func (f *File) Close() error {
	if f.mapped == nil {
		return nil
	}
	m := f.mapped
	f.mapped, f.sections = nil, nil
	return unix.Munmap(m)
}

// Path is the name under which the file is, or will be, published.
func (f *File) Path() string { return f.path }

// Size is the length of the file in bytes.
func (f *File) Size() int64 { return int64(len(f.mapped)) }

// Digest is a checksum of all sections' checksums: two files with one digest hold the same data.
func (f *File) Digest() uint32 {
	var b [4]byte
	d := uint32(f.kind)
	for _, s := range f.sections {
		binary.LittleEndian.PutUint32(b[:], s.crc)
		d = crc32.Update(d, castagnoli, b[:])
	}
	return d
}

// find returns the payload of the first section of a kind, nil if there is none.
func (f *File) find(kind SectionKind) []byte {
	for _, s := range f.sections {
		if s.kind == kind {
			return s.payload
		}
	}
	return nil
}

// Has says whether the file has a section of that kind.
func (f *File) Has(kind SectionKind) bool {
	for _, s := range f.sections {
		if s.kind == kind {
			return true
		}
	}
	return false
}

// Bytes is the payload of the first section of that kind (nil if none).
func (f *File) Bytes(kind SectionKind) []byte { return f.find(kind) }

// View is the payload of the first section of that kind as a slice of fixed-size
// numbers in the file's byte order. pairloom runs on little-endian machines only.
func View[T uint32 | uint64 | float64 | uint16](f *File, kind SectionKind) []T {
	b := f.find(kind)
	var zero T
	n := len(b) / int(unsafe.Sizeof(zero))
	if n == 0 {
		return nil
	}
	return unsafe.Slice((*T)(unsafe.Pointer(&b[0])), n)
}
