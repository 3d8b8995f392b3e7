package wire

import (
	"errors"
	"fmt"
	"io"
	"sync"

	"google.golang.org/grpc"

	"pairloom/proto/line"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/worker/exchange"
)

// Shapes tells the decoder what an open reduction looks like: rows and columns of its
// block in its route, and the number of its tiles. False: not open here.
type Shapes interface {
	Shape(reduction uint64) (rows, cols uint32, tiles int, ok bool)
}

// Worker is what takes batches in.
type Worker interface {
	Shapes
	exchange.Receiver
}

// Server is the Peers service: it decodes what comes and hands it to the worker of
// the moment. Safe for concurrent use.
type Server struct {
	pb.UnimplementedPeersServer
	mu     sync.Mutex
	worker Worker
	taken  map[sender]uint64 // last sequence number taken
	order  []sender          // of taken, oldest first
}

// sender is where a sequence of numbers runs.
type sender struct {
	reduction uint64
	attempt   uint32
	from      uint32
}

// sendersMost bounds what is remembered of reductions that have ended.
const sendersMost = 1 << 14

// NewServer makes a service without a worker, which refuses every batch.
func NewServer() *Server { return &Server{taken: map[sender]uint64{}} }

// Serve makes w the worker that takes batches from now on; nil: none. What is known
// of senders is forgotten.
func (s *Server) Serve(w Worker) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.worker, s.taken, s.order = w, map[sender]uint64{}, nil
}

// Exchange implements the Peers service.
func (s *Server) Exchange(stream grpc.BidiStreamingServer[pb.Batch, pb.Ack]) error {
	var parts []byte
	for {
		m, err := stream.Recv()
		if errors.Is(err, io.EOF) {
			return nil
		}
		if err != nil {
			return err
		}
		ack := &pb.Ack{Sequence: m.Sequence}
		if m.More || parts != nil {
			parts, err = s.join(parts, m)
		}
		if err == nil && m.More {
			continue
		}
		if err == nil && parts != nil {
			m.Columns, parts = parts, nil
		}
		if err == nil {
			err = s.take(m)
		}
		if err != nil {
			ack.ExitCode, ack.Message = int32(exit.Code(err)), err.Error()
		}
		if err := stream.Send(ack); err != nil {
			return err
		}
		if ack.ExitCode != 0 && m.More {
			return line.Status(err) // what follows belongs to a batch that was refused
		}
	}
}

// join puts a part behind those that came, which no batch of the reduction exceeds.
func (s *Server) join(parts []byte, m *pb.Batch) ([]byte, error) {
	rows, _, _, ok := s.shape(m.Reduction)
	if !ok && s.have(m) {
		return []byte{}, nil // sent again, and dropped in the end
	}
	if !ok {
		return nil, notOpen(m)
	}
	if most := batchMost(rows); uint64(len(parts)+len(m.Columns)) > most {
		return nil, fmt.Errorf("batch %d from place %d has more than %d bytes", m.Sequence, m.From, most)
	}
	return append(parts, m.Columns...), nil
}

// batchMost bounds the encoding of a batch: one column of all rows, and what a batch
// may hold beside it.
func batchMost(rows uint32) uint64 { return uint64(rows/64+1)*13 + 4*line.ChunkBytes }

func notOpen(m *pb.Batch) error {
	return fmt.Errorf("batch %d from place %d is for reduction %d, which is not open here", m.Sequence, m.From, m.Reduction)
}

func (s *Server) shape(reduction uint64) (rows, cols uint32, tiles int, ok bool) {
	s.mu.Lock()
	w := s.worker
	s.mu.Unlock()
	if w == nil {
		return 0, 0, 0, false
	}
	return w.Shape(reduction)
}

// have says that a batch was taken before; it may come again after its reduction was
// closed, when its acknowledgement was lost with its stream.
func (s *Server) have(m *pb.Batch) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	return m.Sequence != 0 && m.Sequence <= s.taken[senderOf(m)]
}

func senderOf(m *pb.Batch) sender { return sender{m.Reduction, m.Attempt, m.From} }

func (s *Server) take(m *pb.Batch) error {
	if s.have(m) {
		return nil
	}
	rows, cols, tiles, ok := s.shape(m.Reduction)
	if !ok {
		return notOpen(m)
	}
	items, err := exchange.DecodeItems(m.Columns, rows, cols, tiles)
	if err != nil {
		return fmt.Errorf("batch %d from place %d: %w", m.Sequence, m.From, err)
	}
	s.mu.Lock()
	w := s.worker
	s.mu.Unlock()
	if w == nil {
		return notOpen(m)
	}
	err = w.Receive(exchange.Batch{Reduction: m.Reduction, From: int(m.From), Attempt: m.Attempt,
		MapVersion: m.MapVersion, Sequence: m.Sequence, Items: items})
	if err == nil {
		s.remember(m)
	}
	return err
}

func (s *Server) remember(m *pb.Batch) {
	s.mu.Lock()
	defer s.mu.Unlock()
	key := senderOf(m)
	if s.taken[key] == 0 {
		if len(s.order) == sendersMost {
			delete(s.taken, s.order[0])
			s.order = s.order[1:]
		}
		s.order = append(s.order, key)
	}
	s.taken[key] = max(s.taken[key], m.Sequence)
}
