// Package layers is the test that keeps the house in order: which room may import
// which, what the core may not call, that every exported name is documented, and
// that the top level holds nothing unexpected.
package layers

import (
	"bytes"
	"go/ast"
	"go/format"
	"go/parser"
	"go/token"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/stretchr/testify/require"
)

const module = "pairloom/"

// floors lists the rooms from the ground up. A room may import rooms of lower
// floors, and of its own floor only those to its left.
var floors = [][]string{
	{"sparse/guard", "sparse/column", "sparse/record", "sparse/source"},                                     // words
	{"sparse/block", "sparse/source/table", "sparse/source/npy", "sparse/source/market"},                    // matrix, formats
	{"sparse/chain", "sparse/stage", "sparse/order", "sparse/compress", "sparse/evidence", "sparse/reduce"}, // algebra
	{"sparse/oracle", "sparse/gen", "sparse/exit"},
	{"proto/pairloomv1", "proto/line"},
	{"coordinator/plan", "coordinator/schedule", "coordinator/report", "coordinator/journal", "coordinator/server", "coordinator/wire",
		"worker/tile", "worker/exchange", "worker/task", "worker/server", "worker/wire"},
	{"coordinator/cmd/inprocess", "coordinator/cmd/pairloom"},
	{"bench"},
}

// place returns a room's floor and its place there; rooms below bench/ are bench.
func place(room string) (floor, at int, ok bool) {
	if room == "bench" || strings.HasPrefix(room, "bench/") {
		room = "bench"
	}
	for f, rooms := range floors {
		if i := slices.Index(rooms, room); i >= 0 {
			return f, i, true
		}
	}
	return 0, 0, false
}

// onlyHere says which rooms may import a package from outside (by prefix).
var onlyHere = map[string][]string{
	"google.golang.org/grpc":     {"proto/", "coordinator/wire", "worker/wire", "coordinator/cmd/pairloom", "bench"},
	"google.golang.org/protobuf": {"proto/", "coordinator/", "worker/", "bench"},
	"net":                        {"proto/line", "coordinator/wire", "worker/wire", "coordinator/cmd/pairloom", "bench"},
	"github.com/spf13/cobra":     {"coordinator/cmd/pairloom"},
}

// pure rooms may use no clock, file system, network or source of randomness of the machine.
var pure = []string{"coordinator/schedule", "worker/tile", "worker/exchange", "sparse/reduce", "sparse/compress", "sparse/evidence", "sparse/column"}

var impure = []string{"os", "net", "math/rand", "math/rand/v2", "crypto/rand", "syscall", "golang.org/x/sys/unix"}

type file struct {
	path, room string
	test       bool
	syntax     *ast.File
	text       []byte
}

func root(t *testing.T) string {
	dir, err := filepath.Abs("../..")
	require.NoError(t, err)
	return dir
}

func files(t *testing.T) []file {
	var out []file
	top := root(t)
	require.NoError(t, filepath.WalkDir(top, func(path string, d os.DirEntry, err error) error {
		if err != nil || d.IsDir() && strings.HasPrefix(d.Name(), ".") && path != top {
			return filepath.SkipDir
		}
		if d.IsDir() || !strings.HasSuffix(path, ".go") {
			return nil
		}
		text, err := os.ReadFile(path)
		require.NoError(t, err)
		syntax, err := parser.ParseFile(token.NewFileSet(), path, text, parser.ParseComments)
		require.NoError(t, err)
		room, err := filepath.Rel(top, filepath.Dir(path))
		require.NoError(t, err)
		out = append(out, file{path, filepath.ToSlash(room), strings.HasSuffix(path, "_test.go"), syntax, text})
		return nil
	}))
	require.Greater(t, len(out), 50, "the walk must see the project")
	return out
}

func imports(f file) []string {
	var out []string
	for _, i := range f.syntax.Imports {
		out = append(out, strings.Trim(i.Path.Value, `"`))
	}
	return out
}

func TestImportsPointDown(t *testing.T) {
	for _, f := range files(t) {
		floor, at, ok := place(f.room)
		require.True(t, ok, "room %s is on no floor: add it to the table", f.room)
		for _, path := range imports(f) {
			room, inside := strings.CutPrefix(path, module)
			if !inside || room == f.room || f.test {
				continue
			}
			below, left, ok := place(room)
			require.True(t, ok, "%s imports unknown room %s", f.path, room)
			require.True(t, below < floor || below == floor && left < at, "%s: %s may not import %s", f.path, f.room, room)
			require.False(t, room == "sparse/oracle" || room == "sparse/gen" && floor < len(floors)-1, "%s: only tests and bench import %s", f.path, room)
			sides := strings.HasPrefix(f.room, "coordinator/") && !strings.Contains(f.room, "/cmd/") && strings.HasPrefix(room, "worker/") ||
				strings.HasPrefix(f.room, "worker/") && strings.HasPrefix(room, "coordinator/")
			require.False(t, sides, "%s: coordinator and worker never import each other", f.path)
		}
	}
}

func TestOutsidePackagesStayWhereTheyBelong(t *testing.T) {
	for _, f := range files(t) {
		for _, path := range imports(f) {
			for prefix, rooms := range onlyHere {
				if path == prefix || strings.HasPrefix(path, prefix+"/") {
					allowed := f.test || slices.ContainsFunc(rooms, func(r string) bool { return strings.HasPrefix(f.room+"/", r) || f.room == r })
					require.True(t, allowed, "%s may not import %s", f.path, path)
				}
			}
			if slices.Contains(pure, f.room) && !f.test {
				require.NotContains(t, impure, path, "%s: a pure room", f.path)
			}
		}
	}
}

func TestSparseHasNoClock(t *testing.T) {
	for _, f := range files(t) {
		clocked := strings.HasPrefix(f.room, "sparse/") || slices.Contains(pure, f.room)
		if clocked && !f.test {
			require.False(t, bytes.Contains(f.text, []byte("time.Now")) || bytes.Contains(f.text, []byte("time.Since")), "%s reads the clock", f.path)
		}
	}
}

func TestFormatted(t *testing.T) {
	for _, f := range files(t) {
		want, err := format.Source(f.text)
		require.NoError(t, err)
		require.True(t, bytes.Equal(want, f.text), "%s is not formatted by gofmt", f.path)
	}
}

func TestNothingIsLeftOpen(t *testing.T) {
	for _, f := range files(t) {
		for _, word := range []string{"TO" + "DO", "FIX" + "ME", "t.Sk" + "ip("} {
			require.False(t, bytes.Contains(f.text, []byte(word)), "%s: %s", f.path, word)
		}
	}
}

// Every package and every exported name says what it is.
func TestExportedNamesAreDocumented(t *testing.T) {
	documented, rooms := map[string]bool{}, map[string]bool{}
	for _, f := range files(t) {
		if f.test || strings.HasPrefix(f.room, "proto/") {
			continue
		}
		rooms[f.room] = true
		documented[f.room] = documented[f.room] || f.syntax.Doc != nil
		for _, d := range f.syntax.Decls {
			checkDoc(t, f, d)
		}
	}
	for room := range rooms {
		require.True(t, documented[room], "%s has no package comment", room)
	}
}

func checkDoc(t *testing.T, f file, d ast.Decl) {
	switch d := d.(type) {
	case *ast.FuncDecl:
		if d.Name.IsExported() && exportedReceiver(d) && d.Name.Name != "Error" && d.Name.Name != "String" {
			require.NotNil(t, d.Doc, "%s: %s has no comment", f.path, d.Name.Name)
		}
	case *ast.GenDecl:
		for _, s := range d.Specs {
			if s, ok := s.(*ast.TypeSpec); ok && s.Name.IsExported() {
				require.True(t, d.Doc != nil || s.Doc != nil || s.Comment != nil, "%s: %s has no comment", f.path, s.Name.Name)
			}
			if s, ok := s.(*ast.ValueSpec); ok && s.Names[0].IsExported() {
				require.True(t, d.Doc != nil || s.Doc != nil || s.Comment != nil, "%s: %s has no comment", f.path, s.Names[0].Name)
			}
		}
	}
}

// exportedReceiver says whether a method belongs to a type that others can see.
func exportedReceiver(d *ast.FuncDecl) bool {
	if d.Recv == nil {
		return true
	}
	kind := d.Recv.List[0].Type
	if star, ok := kind.(*ast.StarExpr); ok {
		kind = star.X
	}
	if index, ok := kind.(*ast.IndexExpr); ok {
		kind = index.X
	}
	name, ok := kind.(*ast.Ident)
	return !ok || name.IsExported()
}

func TestTopLevelIsFixed(t *testing.T) {
	entries, err := os.ReadDir(root(t))
	require.NoError(t, err)
	fixed := []string{"coordinator", "worker", "proto", "sparse", "bench", "deploy", "go.mod", "go.sum", "README.md", "DEVELOPERS.md", "docker-compose.yml", "LICENSE"}
	for _, e := range entries {
		if !strings.HasPrefix(e.Name(), ".") {
			require.Contains(t, fixed, e.Name())
		}
	}
}

// Short functions are the aim, not the law: the median is at most 10 lines and 95
// of 100 at most 60.
func TestFunctionsAreShort(t *testing.T) {
	var lengths []int
	for _, f := range files(t) {
		if f.test || strings.HasPrefix(f.room, "proto/") {
			continue
		}
		for _, d := range f.syntax.Decls {
			if d, ok := d.(*ast.FuncDecl); ok && d.Body != nil {
				text := f.text[d.Pos()-f.syntax.FileStart : d.End()-f.syntax.FileStart]
				lengths = append(lengths, bytes.Count(text, []byte("\n"))+1)
			}
		}
	}
	slices.Sort(lengths)
	require.LessOrEqual(t, lengths[len(lengths)/2], 12, "median of function lengths")
	require.LessOrEqual(t, lengths[len(lengths)*95/100], 60, "95 %% of function lengths")
}
