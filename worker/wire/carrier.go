// Package wire carries a worker's traffic over gRPC: column batches between workers
// (Carrier and Server, the Peers service), and the link to the coordinator (Join).
//
// One stream leads to each peer, with one batch under way: it is sent again, with
// its number, on a new stream when the old one broke, until it is acknowledged. So
// batches arrive in order, and the receiver drops what it has. What a batch holds
// above line.ChunkBytes goes in several messages of one number.
package wire

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/protobuf/proto"

	"pairloom/proto/line"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/worker/exchange"
)

const (
	patience   = 20 * time.Second // since a batch first failed to get through
	pauseFirst = 20 * time.Millisecond
	pauseMost  = time.Second
	keptBytes  = 4 << 20 // of an encoding buffer between batches
)

// Carrier implements exchange.Carrier over gRPC. Calls for one peer wait for each
// other; calls for different peers run side by side.
type Carrier struct {
	ctx      context.Context // of the streams
	cancel   context.CancelFunc
	patience time.Duration
	mu       sync.Mutex
	peers    map[string]*peer
}

type peer struct {
	address string
	turn    chan struct{} // holds one token: whose turn it is
	conn    *grpc.ClientConn
	stream  grpc.BidiStreamingClient[pb.Batch, pb.Ack]
	end     context.CancelFunc // of the stream
	buf     []byte
}

// NewCarrier makes a carrier without connections. Close ends it.
func NewCarrier() *Carrier {
	ctx, cancel := context.WithCancel(context.Background())
	return &Carrier{ctx: ctx, cancel: cancel, patience: patience, peers: map[string]*peer{}}
}

// Close breaks all streams and closes all connections. Calls of Carry must have ended.
func (c *Carrier) Close() {
	c.cancel()
	c.mu.Lock()
	defer c.mu.Unlock()
	for _, p := range c.peers {
		p.drop()
		p.conn.Close()
	}
	c.peers = nil
}

// Carry implements exchange.Carrier: it returns when the peer has the batch. A peer
// that cannot be reached for 20 s is given up with exit code 69; one that refuses
// the batch, with the code of its refusal. The bytes count what was sent, again or not.
func (c *Carrier) Carry(ctx context.Context, to exchange.Peer, b exchange.Batch) (uint64, error) {
	p, err := c.peer(to.Address)
	if err != nil {
		return 0, err
	}
	select {
	case <-p.turn:
	case <-ctx.Done():
		return 0, context.Cause(ctx)
	}
	defer func() { p.turn <- struct{}{} }()
	p.buf = exchange.AppendItems(p.buf[:0], b.Items)
	defer p.shrink()
	sent, wait := uint64(0), pauseFirst
	var failing time.Time // since when
	for {
		ack, n, err := c.attempt(ctx, p, b)
		sent += n
		switch {
		case err == nil && ack.ExitCode != 0:
			return sent, exit.With(int(ack.ExitCode), fmt.Errorf("worker at %s: %s", p.address, ack.Message))
		case err == nil:
			return sent, nil
		}
		p.drop()
		if ctx.Err() != nil {
			return sent, context.Cause(ctx)
		}
		if failing.IsZero() {
			failing = time.Now()
		}
		if time.Since(failing)+wait > c.patience || c.ctx.Err() != nil {
			return sent, exit.With(exit.NoPeer, fmt.Errorf("worker at %s cannot be reached: %w", p.address, line.Error(err)))
		}
		pause(ctx, wait)
		wait = min(2*wait, pauseMost)
	}
}

func (c *Carrier) peer(address string) (*peer, error) {
	c.mu.Lock()
	defer c.mu.Unlock()
	if p := c.peers[address]; p != nil {
		return p, nil
	}
	if c.peers == nil {
		return nil, exit.With(exit.Stopped, errors.New("the carrier is closed"))
	}
	conn, err := line.Dial(address)
	if err != nil {
		return nil, err
	}
	p := &peer{address: address, turn: make(chan struct{}, 1), conn: conn}
	p.turn <- struct{}{}
	c.peers[address] = p
	return p, nil
}

// attempt sends the batch in p.buf once and waits for its acknowledgement. Echoes of
// batches that were sent twice cannot come: every attempt after a failure has a new stream.
func (c *Carrier) attempt(ctx context.Context, p *peer, b exchange.Batch) (ack *pb.Ack, sent uint64, err error) {
	if p.stream == nil {
		sctx, end := context.WithCancel(c.ctx)
		p.end = end
		defer context.AfterFunc(ctx, end)()
		if p.stream, err = pb.NewPeersClient(p.conn).Exchange(sctx); err != nil {
			return nil, 0, err
		}
	} else {
		defer context.AfterFunc(ctx, p.end)()
	}
	for rest := p.buf; ; {
		n := min(len(rest), line.ChunkBytes)
		m := &pb.Batch{Reduction: b.Reduction, From: uint32(b.From), Attempt: b.Attempt, MapVersion: b.MapVersion,
			Sequence: b.Sequence, Columns: rest[:n], More: n < len(rest)}
		if p.stream.Send(m) != nil {
			break // Recv tells why: the stream broke, or the batch was refused half-way
		}
		sent += uint64(proto.Size(m))
		if rest = rest[n:]; len(rest) == 0 {
			break
		}
	}
	ack, err = p.stream.Recv()
	if err == nil && ack.Sequence != b.Sequence {
		err = fmt.Errorf("batch %d was acknowledged in the place of batch %d", ack.Sequence, b.Sequence)
	}
	return ack, sent, err
}

func (p *peer) drop() {
	if p.end != nil {
		p.end()
	}
	p.stream, p.end = nil, nil
}

// shrink lets a buffer go that one large batch made.
func (p *peer) shrink() {
	if cap(p.buf) > keptBytes {
		p.buf = nil
	}
}

func pause(ctx context.Context, d time.Duration) {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
	case <-ctx.Done():
	}
}
