package task

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"io"
	"os"
	"path/filepath"

	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/chain"
	"pairloom/sparse/order"
	"pairloom/sparse/source"
	"pairloom/sparse/stage"
)

// builder reads an input of one kind and publishes the filtered complex in dir.
type builder func(ctx context.Context, spec source.Spec, dir string, threads int, p source.Progress) (*chain.Complex, error)

// builders is where a kind of input is added.
var builders = map[source.Kind]builder{
	source.Grid:      order.Grid,
	source.Points:    order.Points,
	source.Distances: order.Distances,
	source.Graph:     order.Graph,
	source.Facets:    order.Facets,
	source.Simplices: order.Simplices,
	source.Matrix:    order.Matrix,
}

// prepare reads, orders and writes blocks: the one task before all others.
func prepare(ctx context.Context, t *pb.Task, p source.Progress) error {
	var spec source.Spec
	if err := json.Unmarshal([]byte(t.Spec), &spec); err != nil {
		return fmt.Errorf("task: specification: %w", err)
	}
	build, ok := builders[spec.Kind]
	if !ok {
		return &source.UsageError{Why: fmt.Sprintf("no such kind of input: %q", spec.Kind)}
	}
	if err := stage.Make(t.Folder); err != nil {
		return err
	}
	if _, err := build(ctx, spec, stage.Order(t.Folder), int(max(t.Threads, 1)), p); err != nil {
		return err
	}
	return digests(ctx, t.Folder, spec)
}

// digests records what was read; result files name inputs by it.
func digests(ctx context.Context, folder string, spec source.Spec) error {
	var files []stage.InputFile
	paths := append(append([]string{}, spec.Inputs...), spec.ValueFiles...)
	if spec.Function != "" {
		paths = append(paths, spec.Function)
	}
	for _, path := range paths {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		f, err := digest(path)
		if err != nil {
			return err
		}
		files = append(files, f)
	}
	return stage.WriteInputs(folder, files)
}

func digest(path string) (stage.InputFile, error) {
	f, err := os.Open(path)
	if err != nil {
		return stage.InputFile{}, err
	}
	defer f.Close()
	h := sha256.New()
	n, err := io.Copy(h, f)
	return stage.InputFile{Path: filepath.Base(path), Bytes: uint64(n), SHA256: hex.EncodeToString(h.Sum(nil))}, err
}
