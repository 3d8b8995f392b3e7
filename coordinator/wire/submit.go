package wire

import (
	"bytes"
	"crypto/rand"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"time"

	"google.golang.org/grpc"

	"pairloom/coordinator/journal"
	"pairloom/proto/line"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/sparse/stage"
)

type uploads = grpc.ClientStreamingServer[pb.Upload, pb.Submitted]

// Submit implements the Jobs service: a job is received into a hidden folder, and
// appears under its name when everything has come and its digests fit.
func (s *Server) Submit(stream uploads) error {
	name, err := s.queue.submit(stream)
	if err != nil {
		return line.Status(err)
	}
	return stream.SendAndClose(&pb.Submitted{Job: name})
}

func (q *Queue) submit(stream uploads) (string, error) {
	first, err := stream.Recv()
	if err != nil {
		return "", broken(err)
	}
	asked := first.GetSpec()
	if asked == nil {
		return "", usage("a submission must start with what is asked")
	}
	r := journal.Request{Version: q.cfg.Version, Submitted: time.Now(), InPlace: asked.InPlace}
	if err := errors.Join(strict(asked.Spec, &r.Spec), strict(asked.Options, &r.Options)); err != nil {
		return "", err
	}
	paths := journal.Paths(&r.Spec)
	if len(paths) == 0 {
		return "", usage("a job needs an input")
	}
	if r.Job, err = q.reserve(asked.Name, *paths[0]); err != nil {
		return "", err
	}
	defer q.release(r.Job)
	if err := q.place(&r, paths, asked.Files); err != nil {
		return "", err
	}
	return r.Job, q.receive(stream, r, asked.Files)
}

func usage(format string, args ...any) error {
	return exit.With(exit.Usage, fmt.Errorf(format, args...))
}

// broken is the error of an upload whose sender is gone.
func broken(err error) error {
	if errors.Is(err, io.EOF) {
		return usage("the upload ended before all of it had come")
	}
	return err
}

// strict reads JSON that a client made, which may hold nothing that this build does not know.
func strict(text string, into any) error {
	d := json.NewDecoder(strings.NewReader(text))
	d.DisallowUnknownFields()
	if err := d.Decode(into); err != nil {
		return usage("what was asked cannot be read: %w", err)
	}
	if _, err := d.Token(); !errors.Is(err, io.EOF) {
		return usage("what was asked is followed by something else")
	}
	return nil
}

// place puts the paths that workers will open into the specification.
func (q *Queue) place(r *journal.Request, paths []*string, files []string) (err error) {
	if r.InPlace {
		if len(files) > 0 {
			return usage("inputs in place are not uploaded")
		}
		for _, p := range paths {
			if *p, err = q.inPlace(*p); err != nil {
				return err
			}
		}
		return nil
	}
	if len(files) != len(paths) {
		return usage("%d files are announced, %d are asked for", len(files), len(paths))
	}
	seen := map[string]bool{}
	for i, p := range paths {
		if err := journal.CheckName(files[i]); err != nil {
			return err
		}
		if seen[files[i]] {
			return usage("two inputs are called %s", files[i])
		}
		seen[files[i]] = true
		*p = filepath.Join(stage.Input(filepath.Join(q.folder, r.Job)), files[i])
	}
	return nil
}

// inPlace resolves a path on the coordinator's machine and insists that it is a file
// below the inputs folder, whatever links lead to it.
func (q *Queue) inPlace(path string) (string, error) {
	if q.cfg.Inputs == "" {
		return "", exit.With(exit.NotAllowed, errors.New("this coordinator takes no inputs in place: it was started without --inputs"))
	}
	base, err := filepath.EvalSymlinks(q.cfg.Inputs)
	if err != nil {
		return "", err
	}
	if base, err = filepath.Abs(base); err != nil {
		return "", err
	}
	outside := exit.With(exit.NotAllowed, fmt.Errorf("%s is not below the coordinator's inputs folder", path))
	if !filepath.IsAbs(path) || !below(base, filepath.Clean(path)) && !below(filepath.Clean(q.cfg.Inputs), filepath.Clean(path)) {
		return "", outside // before it is said whether there is such a file
	}
	real, err := filepath.EvalSymlinks(path)
	if err != nil {
		return "", err
	}
	if !below(base, real) {
		return "", outside
	}
	info, err := os.Stat(real)
	if err == nil && !info.Mode().IsRegular() {
		err = exit.With(exit.NoInput, fmt.Errorf("%s is not a file", path))
	}
	return real, err
}

func below(base, path string) bool {
	rel, err := filepath.Rel(base, path)
	return err == nil && filepath.IsLocal(rel) && rel != "."
}

// receive takes the uploads of a job into a hidden folder and publishes it. A rename
// onto a folder that is not empty fails, so no other job of that name is overwritten.
func (q *Queue) receive(stream uploads, r journal.Request, files []string) error {
	part := "." + r.Job + "." + rand.Text()[:8] + partEnd
	if err := q.root.Mkdir(part, 0o755); err != nil {
		return exit.With(exit.CannotOut, err)
	}
	defer func() { _ = q.root.RemoveAll(part) }() // gone after the rename
	folder := filepath.Join(q.folder, part)
	if err := journal.WriteRequest(folder, r); err != nil {
		return err
	}
	if err := q.root.Mkdir(filepath.Join(part, "input"), 0o755); err != nil {
		return err
	}
	for _, name := range files {
		if err := q.file(stream, filepath.Join(part, "input", name)); err != nil {
			return err
		}
	}
	if _, err := stream.Recv(); err == nil {
		return usage("more was sent than the %d inputs announced", len(files))
	} else if !errors.Is(err, io.EOF) {
		return err
	}
	state := journal.State{State: journal.Waiting}
	if err := errors.Join(journal.WriteState(folder, state), journal.Append(folder, journal.Event{Time: r.Submitted, Event: "submitted"})); err != nil {
		return err
	}
	if err := errors.Join(durable(filepath.Join(folder, "input")), durable(folder)); err != nil {
		return err
	}
	if err := q.root.Rename(part, r.Job); err != nil {
		return exit.With(exit.CannotOut, err)
	}
	if err := durable(q.folder); err != nil {
		q.cfg.Log.Error("the jobs folder cannot be brought to the disk", "error", err)
	}
	q.add(r, state)
	q.cfg.Log.Info("job submitted", "job", r.Job, "kind", r.Spec.Kind, "in_place", r.InPlace)
	return nil
}

// file receives one input.
func (q *Queue) file(stream uploads, path string) (err error) {
	f, err := q.root.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	digest := sha256.New()
	for {
		m, err := stream.Recv()
		if err != nil {
			return broken(err)
		}
		switch b := m.Body.(type) {
		case *pb.Upload_Chunk:
			digest.Write(b.Chunk)
			if _, err := f.Write(b.Chunk); err != nil {
				return err
			}
		case *pb.Upload_EndSha256:
			if want, err := hex.DecodeString(b.EndSha256); err != nil || !bytes.Equal(want, digest.Sum(nil)) {
				return exit.With(exit.IO, fmt.Errorf("%s was damaged on its way: its SHA-256 is %x, not %s; submit it again", filepath.Base(path), digest.Sum(nil), b.EndSha256))
			}
			return f.Sync()
		default:
			return usage("the inputs were expected, in chunks")
		}
	}
}
