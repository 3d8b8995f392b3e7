// Package wire is the coordinator's end of the network: the gRPC services by which
// workers join (Crew) and people use it (Jobs, health), the queue of jobs in the jobs
// folder, and the client that the commands use. What workers are told is decided in
// packages server and schedule.
package wire

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"os"
	"path/filepath"

	"google.golang.org/grpc"
	"google.golang.org/grpc/health"
	healthpb "google.golang.org/grpc/health/grpc_health_v1"

	"pairloom/coordinator/journal"
	"pairloom/proto/line"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/sparse/stage"
)

// ResultFiles are the files of a result, in the order in which they are fetched.
var ResultFiles = []string{"pairs.csv", "betti.csv", "summary.json"}

// Server serves the Crew, Jobs and health services of one coordinator.
type Server struct {
	pb.UnimplementedJobsServer
	queue  *Queue
	server *grpc.Server
	health *health.Server
}

// crew is the Crew service.
type crew struct {
	pb.UnimplementedCrewServer
	engine Engine
}

// Join implements the Crew service.
func (c *crew) Join(stream grpc.BidiStreamingServer[pb.Report, pb.Order]) error {
	err := c.engine.Join(stream.Context(), stream)
	if errors.Is(err, io.EOF) {
		return nil // the worker left
	}
	return line.Status(err)
}

// NewServer makes the services of an engine and its queue of jobs.
func NewServer(e Engine, q *Queue) *Server {
	s := &Server{queue: q, server: line.NewServer(), health: health.NewServer()}
	pb.RegisterJobsServer(s.server, s)
	pb.RegisterCrewServer(s.server, &crew{engine: e})
	healthpb.RegisterHealthServer(s.server, s.health)
	return s
}

// Serve accepts connections until Stop.
func (s *Server) Serve(l net.Listener) error { return s.server.Serve(l) }

// Stop ends all calls: those under way have until ctx ends. It returns when no
// goroutine of the server is left.
func (s *Server) Stop(ctx context.Context) {
	s.health.Shutdown()
	line.Stop(ctx, s.server)
}

// List implements the Jobs service.
func (s *Server) List(context.Context, *pb.ListRequest) (*pb.JobList, error) {
	return &pb.JobList{Jobs: s.queue.list()}, nil
}

func unknown(job string) error {
	return line.Status(exit.With(exit.NoInput, fmt.Errorf("there is no job %q", job)))
}

// Watch implements the Jobs service. Changes that come faster than they are sent are
// passed over; the last state is always sent.
func (s *Server) Watch(m *pb.JobName, stream grpc.ServerStreamingServer[pb.JobState]) error {
	for {
		state, change := s.queue.look(m.Job)
		if state == nil {
			return unknown(m.Job)
		}
		if err := stream.Send(state); err != nil {
			return err
		}
		if state.State == journal.Done || state.State == journal.Failed {
			return nil
		}
		select {
		case <-change:
		case <-stream.Context().Done():
			return line.Status(context.Cause(stream.Context()))
		}
	}
}

// Fetch implements the Jobs service. The error of a job that failed is its own.
func (s *Server) Fetch(m *pb.JobName, stream grpc.ServerStreamingServer[pb.FileChunk]) error {
	state, _ := s.queue.look(m.Job)
	switch {
	case state == nil:
		return unknown(m.Job)
	case state.State == journal.Failed:
		return line.Status(exit.With(int(state.ExitCode), fmt.Errorf("job %s failed: %s", m.Job, state.Message)))
	case state.State != journal.Done:
		return line.Status(exit.With(exit.NoInput, fmt.Errorf("job %s has no result yet: it is %s", m.Job, state.State)))
	}
	for _, name := range ResultFiles {
		if err := s.send(m.Job, name, stream); err != nil {
			return line.Status(err)
		}
	}
	return nil
}

func (s *Server) send(job, name string, stream grpc.ServerStreamingServer[pb.FileChunk]) error {
	f, err := s.queue.root.Open(filepath.Join(job, filepath.Base(stage.Result(job)), name))
	if err != nil {
		return err
	}
	defer f.Close()
	return chunks(f, func(b []byte, last bool) error {
		return stream.Send(&pb.FileChunk{Name: name, Data: b, Last: last})
	})
}

// chunks reads a file to its end; the last chunk may be empty. A chunk is valid
// during the call.
func chunks(f *os.File, send func(b []byte, last bool) error) error {
	buf := make([]byte, line.ChunkBytes)
	for {
		n, err := io.ReadFull(f, buf)
		last := errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF)
		if err != nil && !last {
			return err
		}
		if err := send(buf[:n], last); err != nil || last {
			return err
		}
	}
}
