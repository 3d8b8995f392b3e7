package record

import (
	"os"
	"path/filepath"
	"testing"

	"github.com/stretchr/testify/require"
)

const kind FileKind = 7

// sample publishes a file of two sections and returns its bytes.
func sample(t testing.TB, path string) []byte {
	f, err := Create(path, kind, Section{Kind: 1, Bytes: 12}, Section{Kind: 2, Bytes: 80})
	require.NoError(t, err)
	copy(View[uint32](f, 1), []uint32{3, 1, 4})
	for i := range f.Bytes(2) {
		f.Bytes(2)[i] = byte(i)
	}
	require.NoError(t, f.Publish(true))
	require.Equal(t, []uint32{3, 1, 4}, View[uint32](f, 1))
	require.NoError(t, f.Close())
	b, err := os.ReadFile(path)
	require.NoError(t, err)
	return b
}

func opened(t testing.TB, b []byte) error {
	path := filepath.Join(t.TempDir(), "file")
	require.NoError(t, os.WriteFile(path, b, 0o644))
	f, err := Open(path, kind, false)
	if err != nil {
		return err
	}
	require.NoError(t, f.Verify())
	return f.Close()
}

// Whatever one bit does, the file is refused, unless the bit is padding that nobody reads.
func TestEveryFlipThatMattersIsSeen(t *testing.T) {
	b := sample(t, filepath.Join(t.TempDir(), "a"))
	require.NoError(t, opened(t, b))
	padding := func(i int) bool {
		// 12 of 64 bytes of section 1, 80 of 128 of section 2
		return i >= 128+12 && i < 192 || i >= 256+80
	}
	for i := range b {
		hurt := append([]byte(nil), b...)
		hurt[i] ^= 1 << (i % 8)
		if err := opened(t, hurt); padding(i) {
			require.NoError(t, err, "byte %d", i)
		} else {
			require.Error(t, err, "byte %d", i)
		}
	}
}

func TestEveryCutIsSeen(t *testing.T) {
	b := sample(t, filepath.Join(t.TempDir(), "a"))
	for n := range len(b) {
		require.Error(t, opened(t, b[:n]), "%d bytes", n)
	}
	require.Error(t, opened(t, append(b, make([]byte, 64)...)))
}

// The first to publish a name wins; the loser leaves nothing behind.
func TestPublishIsCompareAndSwap(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "a")
	first := sample(t, path)
	f, err := Create(path, kind, Section{Kind: 1, Bytes: 4})
	require.NoError(t, err)
	require.ErrorIs(t, f.Publish(false), ErrExists)
	require.NoError(t, f.Close())
	f, err = Create(filepath.Join(dir, "b"), kind)
	require.NoError(t, err)
	f.Discard()
	now, err := os.ReadFile(path)
	require.NoError(t, err)
	require.Equal(t, first, now)
	entries, err := os.ReadDir(dir)
	require.NoError(t, err)
	require.Len(t, entries, 1)
}

func TestOtherKindsAreRefused(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a")
	sample(t, path)
	_, err := Open(path, kind+1, false)
	require.ErrorAs(t, err, new(*Damage))
}

func FuzzOpen(f *testing.F) {
	f.Add(sample(f, filepath.Join(f.TempDir(), "a")))
	f.Add([]byte("pairloom"))
	f.Fuzz(func(t *testing.T, b []byte) { _ = opened(t, b) })
}
