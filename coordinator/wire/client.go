package wire

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	healthpb "google.golang.org/grpc/health/grpc_health_v1"
	"google.golang.org/grpc/status"

	"pairloom/coordinator/journal"
	"pairloom/coordinator/plan"
	"pairloom/proto/line"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/sparse/source"
)

// Client uses a coordinator from afar. Its errors have exit codes.
type Client struct {
	conn    *grpc.ClientConn
	jobs    pb.JobsClient
	address string
}

// NewClient makes a client of the coordinator at HOST:PORT; nothing is sent yet.
func NewClient(address string) (*Client, error) {
	conn, err := line.Dial(address)
	if err != nil {
		return nil, err
	}
	return &Client{conn: conn, jobs: pb.NewJobsClient(conn), address: address}, nil
}

// Close ends the connection.
func (c *Client) Close() error { return c.conn.Close() }

// wrap gives an error its exit code, and names the coordinator where gRPC itself
// says that it cannot be reached.
func (c *Client) wrap(err error) error {
	if s, ok := status.FromError(err); ok && s.Code() == codes.Unavailable && len(s.Details()) == 0 {
		return exit.With(exit.NoPeer, fmt.Errorf("the coordinator at %s cannot be reached: %s", c.address, s.Message()))
	}
	return line.Error(err)
}

// Health returns nil if the coordinator is there and serves.
func (c *Client) Health(ctx context.Context) error {
	r, err := healthpb.NewHealthClient(c.conn).Check(ctx, &healthpb.HealthCheckRequest{})
	if err != nil {
		return exit.With(exit.NoPeer, fmt.Errorf("the coordinator at %s does not answer: %w", c.address, line.Error(err)))
	}
	if r.Status != healthpb.HealthCheckResponse_SERVING {
		return exit.With(exit.NoPeer, fmt.Errorf("the coordinator at %s answers %s", c.address, r.Status))
	}
	return nil
}

// Submission is a job to be submitted.
type Submission struct {
	Name    string // empty: chosen by the coordinator
	Spec    source.Spec
	Options plan.Options
	InPlace bool // the paths of the specification are the coordinator's own
}

// Submit hands a job in and returns its name; the inputs are uploaded unless they
// are in place.
func (c *Client) Submit(ctx context.Context, job Submission) (string, error) {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	spec := job.Spec // its slices are copied before they change
	spec.Inputs, spec.ValueFiles = append([]string{}, spec.Inputs...), append([]string(nil), spec.ValueFiles...)
	paths := journal.Paths(&spec)
	asked := &pb.JobSpec{Name: job.Name, InPlace: job.InPlace}
	var files []string
	for i, p := range paths {
		if job.InPlace {
			abs, err := filepath.Abs(*p)
			if err != nil {
				return "", err
			}
			*p = abs
			continue
		}
		files = append(files, *p)
		asked.Files = append(asked.Files, uploadName(*p, i, asked.Files))
		*p = asked.Files[i]
	}
	if err := errors.Join(encode(spec, &asked.Spec), encode(job.Options, &asked.Options)); err != nil {
		return "", err
	}
	if err := readable(files); err != nil {
		return "", err
	}
	stream, err := c.jobs.Submit(ctx)
	if err != nil {
		return "", c.wrap(err)
	}
	send := func(m *pb.Upload) error { return stream.Send(m) }
	err = send(&pb.Upload{Body: &pb.Upload_Spec{Spec: asked}})
	for _, path := range files {
		if err == nil {
			err = upload(path, send)
		}
	}
	if err != nil && !errors.Is(err, io.EOF) { // EOF: the answer says why
		return "", err
	}
	r, err := stream.CloseAndRecv()
	if err != nil {
		return "", c.wrap(err)
	}
	return r.Job, nil
}

func encode(from any, to *string) error {
	b, err := json.Marshal(from)
	*to = string(b)
	return err
}

// uploadName is what an input is called in the job folder: its own name as far as
// that is one, and no name twice.
func uploadName(path string, i int, taken []string) string {
	name := journal.Tidy(filepath.Base(path))
	for _, t := range taken {
		if t == name {
			return journal.Tidy(fmt.Sprintf("%d-%s", i+1, name))
		}
	}
	return name
}

// readable finds a missing input before anything is sent.
func readable(files []string) error {
	for _, path := range files {
		f, err := os.Open(path)
		if err != nil {
			return err
		}
		info, err := f.Stat()
		f.Close()
		if err == nil && info.IsDir() {
			err = exit.With(exit.NoInput, fmt.Errorf("%s is a folder; a file was expected", path))
		}
		if err != nil {
			return err
		}
	}
	return nil
}

func upload(path string, send func(*pb.Upload) error) error {
	f, err := os.Open(path)
	if err != nil {
		return err
	}
	defer f.Close()
	digest := sha256.New()
	err = chunks(f, func(b []byte, _ bool) error {
		digest.Write(b)
		return send(&pb.Upload{Body: &pb.Upload_Chunk{Chunk: b}})
	})
	if err != nil {
		return err
	}
	return send(&pb.Upload{Body: &pb.Upload_EndSha256{EndSha256: hex.EncodeToString(digest.Sum(nil))}})
}

// List returns all jobs in the order of submission.
func (c *Client) List(ctx context.Context) ([]*pb.JobState, error) {
	r, err := c.jobs.List(ctx, &pb.ListRequest{})
	if err != nil {
		return nil, c.wrap(err)
	}
	return r.Jobs, nil
}

// Watch calls see with the job's state at once and on every change, and returns the
// last one.
func (c *Client) Watch(ctx context.Context, job string, see func(*pb.JobState)) (*pb.JobState, error) {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	stream, err := c.jobs.Watch(ctx, &pb.JobName{Job: job})
	if err != nil {
		return nil, c.wrap(err)
	}
	var last *pb.JobState
	for {
		s, err := stream.Recv()
		if errors.Is(err, io.EOF) && last != nil {
			return last, nil
		}
		if err != nil {
			return nil, c.wrap(err)
		}
		last = s
		see(s)
	}
}

// Fetch writes the result files of a finished job into a folder, which must be there.
func (c *Client) Fetch(ctx context.Context, job, folder string) error {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	root, err := os.OpenRoot(folder)
	if err != nil {
		return exit.With(exit.CannotOut, err)
	}
	defer root.Close()
	stream, err := c.jobs.Fetch(ctx, &pb.JobName{Job: job})
	if err != nil {
		return c.wrap(err)
	}
	for _, name := range ResultFiles {
		if err := c.fetch(stream, root, name); err != nil {
			return err
		}
	}
	return nil
}

func (c *Client) fetch(stream grpc.ServerStreamingClient[pb.FileChunk], root *os.Root, name string) (err error) {
	var f *os.File
	defer func() {
		if f != nil {
			err = errors.Join(err, f.Close())
		}
	}()
	for {
		m, err := stream.Recv()
		if err != nil {
			return c.wrap(err)
		}
		if m.Name != name {
			return exit.With(exit.Internal, fmt.Errorf("the coordinator sent %q in the place of %s", m.Name, name))
		}
		if f == nil {
			if f, err = root.OpenFile(name, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644); err != nil {
				return exit.With(exit.CannotOut, err)
			}
		}
		if _, err := f.Write(m.Data); err != nil || m.Last {
			return err
		}
	}
}
