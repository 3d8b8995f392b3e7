package wire

import (
	"context"
	"errors"
	"fmt"
	"io"
	"net"
	"sync"
	"testing"
	"time"

	"github.com/stretchr/testify/require"
	"go.uber.org/goleak"
	"google.golang.org/grpc"

	"pairloom/proto/line"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/column"
	"pairloom/sparse/exit"
	"pairloom/worker/exchange"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// keeper is a worker with one open reduction that keeps what arrives.
type keeper struct {
	mu      sync.Mutex
	in      map[int]*exchange.Inbox
	got     map[int][]uint32 // column indices by sender, in order
	sizes   []int            // entries
	refuse  error
	arrived func(n int) // called after the nth batch was taken
	n       int
}

func newKeeper() *keeper {
	return &keeper{in: map[int]*exchange.Inbox{}, got: map[int][]uint32{}, arrived: func(int) {}}
}

func (k *keeper) Shape(reduction uint64) (rows, cols uint32, tiles int, ok bool) {
	return 1 << 28, 1 << 20, 9, reduction == 5
}

func (k *keeper) Receive(b exchange.Batch) error {
	k.mu.Lock()
	defer k.mu.Unlock()
	if k.refuse != nil {
		return k.refuse
	}
	if k.in[b.From] == nil {
		k.in[b.From] = exchange.NewInbox(1, 1)
	}
	fresh, err := k.in[b.From].Take(&b)
	if err != nil || !fresh {
		return err
	}
	for _, it := range b.Items {
		k.got[b.From] = append(k.got[b.From], it.Column.Index)
		k.sizes = append(k.sizes, it.Column.Entries())
	}
	k.n++
	k.arrived(k.n)
	return nil
}

// listen serves the Peers service on loopback.
func listen(t *testing.T, w Worker) (address string, service *Server) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	require.NoError(t, err)
	s, service := line.NewServer(), NewServer()
	service.Serve(w)
	pb.RegisterPeersServer(s, service)
	done := make(chan struct{})
	go func() { defer close(done); _ = s.Serve(l) }()
	t.Cleanup(func() { s.Stop(); <-done })
	return l.Addr().String(), service
}

func carrier(t *testing.T) *Carrier {
	c := NewCarrier()
	t.Cleanup(c.Close)
	return c
}

func batch(from int, sequence uint64, items ...exchange.Item) exchange.Batch {
	return exchange.Batch{Reduction: 5, From: from, Attempt: 1, MapVersion: 1, Sequence: sequence, Items: items}
}

func thin(index uint32) exchange.Item {
	return exchange.Item{Tile: 3, Column: column.Column{Index: index, Rows: []uint32{index, index + 7}}}
}

func TestBatchesOfManySendersArriveInOrder(t *testing.T) {
	k := newKeeper()
	address, _ := listen(t, k)
	c := carrier(t)
	var wg sync.WaitGroup
	for from := range 4 {
		wg.Go(func() {
			for n := range uint32(50) {
				bytes, err := c.Carry(t.Context(), exchange.Peer{Address: address}, batch(from, uint64(n)+1, thin(2*n), thin(2*n+1)))
				if err != nil || bytes < 20 {
					t.Errorf("%d bytes, %v", bytes, err)
				}
			}
		})
	}
	wg.Wait()
	for from := range 4 {
		require.Len(t, k.got[from], 100)
		for n, index := range k.got[from] {
			require.Equal(t, uint32(n), index)
		}
	}
}

// proxy passes bytes on and cuts all its connections on demand.
type proxy struct {
	l     net.Listener
	to    string
	mu    sync.Mutex
	conns []net.Conn
	wg    sync.WaitGroup
}

func newProxy(t *testing.T, to string) *proxy {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	require.NoError(t, err)
	p := &proxy{l: l, to: to}
	p.wg.Go(p.accept)
	t.Cleanup(func() { l.Close(); p.cut(); p.wg.Wait() })
	return p
}

func (p *proxy) accept() {
	for {
		in, err := p.l.Accept()
		if err != nil {
			return
		}
		out, err := net.Dial("tcp", p.to)
		if err != nil {
			in.Close()
			continue
		}
		p.mu.Lock()
		p.conns = append(p.conns, in, out)
		p.mu.Unlock()
		for _, way := range [][2]net.Conn{{in, out}, {out, in}} {
			p.wg.Go(func() { _, _ = io.Copy(way[0], way[1]); way[0].Close(); way[1].Close() })
		}
	}
}

func (p *proxy) cut() {
	p.mu.Lock()
	defer p.mu.Unlock()
	for _, c := range p.conns {
		c.Close()
	}
	p.conns = nil
}

// The line breaks just when a batch was taken, before its acknowledgement is out:
// it is sent again, and no column comes twice or not at all.
func TestBrokenLinesLoseAndDoubleNothing(t *testing.T) {
	k := newKeeper()
	address, _ := listen(t, k)
	p := newProxy(t, address)
	k.arrived = func(n int) {
		if n%7 == 0 {
			p.cut()
		}
	}
	c := carrier(t)
	for n := range uint32(40) {
		items := []exchange.Item{thin(n)}
		if n%14 == 5 {
			items[0] = wide(n, 300_000) // several messages
		}
		_, err := c.Carry(t.Context(), exchange.Peer{Address: p.l.Addr().String()}, batch(0, uint64(n)+1, items...))
		require.NoError(t, err)
	}
	require.Len(t, k.got[0], 40)
	for n, index := range k.got[0] {
		require.Equal(t, uint32(n), index)
	}
}

// wide is a column of entries entries, each of which takes two bytes or more.
func wide(index uint32, entries int) exchange.Item {
	c := column.Column{Index: index, Rows: make([]uint32, entries)}
	for i := range c.Rows {
		c.Rows[i] = uint32(i) * 199
	}
	return exchange.Item{Tile: 1, Column: c}
}

// A column above gRPC's limit of 4 MiB a message goes in parts.
func TestOneColumnMayBeLargerThanAMessage(t *testing.T) {
	k := newKeeper()
	address, _ := listen(t, k)
	bytes, err := carrier(t).Carry(t.Context(), exchange.Peer{Address: address}, batch(0, 1, thin(1), wide(2, 1_200_000), wide(3, 1_200_000)))
	require.NoError(t, err)
	require.Greater(t, bytes, uint64(4<<20))
	require.Equal(t, []int{2, 1_200_000, 1_200_000}, k.sizes)
	require.Equal(t, []uint32{1, 2, 3}, k.got[0])
}

func TestRefusalsAreForGoodAndNameTheirReason(t *testing.T) {
	k := newKeeper()
	address, service := listen(t, k)
	c := carrier(t)
	carry := func(b exchange.Batch) error {
		_, err := c.Carry(t.Context(), exchange.Peer{Address: address}, b)
		return err
	}
	require.NoError(t, carry(batch(0, 1, thin(1))))
	closed := batch(0, 2, thin(1))
	closed.Reduction = 6
	require.ErrorContains(t, carry(closed), "not open here")
	closed.Items = []exchange.Item{wide(1, 2_000_000)}
	require.ErrorContains(t, carry(closed), "not open here", "refused at its first part")
	require.ErrorContains(t, carry(batch(0, 3, thin(1))), "after batch 1")
	far := thin(1)
	far.Tile = 9
	require.ErrorContains(t, carry(batch(0, 2, far)), "no such tile")
	k.refuse = exit.With(exit.TooBig, errors.New("no room"))
	err := carry(batch(0, 2, thin(1)))
	require.ErrorContains(t, err, "no room")
	require.Equal(t, exit.TooBig, exit.Code(err))
	k.refuse = nil
	require.NoError(t, carry(batch(0, 2, thin(2))), "the line is as good as before")
	service.Serve(nil)
	require.ErrorContains(t, carry(batch(0, 3, thin(3))), "not open here")
}

// A batch whose acknowledgement was lost comes again when its reduction is closed.
func TestWhatWasTakenIsAcknowledgedAlsoAfterwards(t *testing.T) {
	k := newKeeper()
	address, service := listen(t, k)
	c := carrier(t)
	_, err := c.Carry(t.Context(), exchange.Peer{Address: address}, batch(0, 1, thin(1)))
	require.NoError(t, err)
	service.mu.Lock()
	service.worker = nil
	service.mu.Unlock()
	for _, items := range [][]exchange.Item{{thin(1)}, {wide(1, 1_500_000)}} {
		_, err = c.Carry(t.Context(), exchange.Peer{Address: address}, batch(0, 1, items...))
		require.NoError(t, err)
	}
	_, err = c.Carry(t.Context(), exchange.Peer{Address: address}, batch(0, 2, thin(1)))
	require.Error(t, err)
	require.Equal(t, []uint32{1}, k.got[0])
}

func TestAPeerThatIsNotThereIsGivenUp(t *testing.T) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	require.NoError(t, err)
	address := l.Addr().String()
	l.Close()
	c := carrier(t)
	c.patience = 100 * time.Millisecond
	_, err = c.Carry(t.Context(), exchange.Peer{Address: address}, batch(0, 1, thin(1)))
	require.Equal(t, exit.NoPeer, exit.Code(err))
	require.ErrorContains(t, err, address)
	_, err = c.Carry(t.Context(), exchange.Peer{Address: "nowhere"}, batch(0, 1, thin(1)))
	require.Equal(t, exit.Usage, exit.Code(err))
}

// A receiver that hangs does not hold a sender whose context ends.
func TestAContextEndsACarry(t *testing.T) {
	k := newKeeper()
	hold, why := make(chan struct{}), errors.New("the job was stopped")
	ctx, cancel := context.WithCancelCause(t.Context())
	k.arrived = func(n int) {
		if n == 1 {
			cancel(why)
			<-hold
		}
	}
	address, _ := listen(t, k)
	c := carrier(t)
	_, err := c.Carry(ctx, exchange.Peer{Address: address}, batch(0, 1, thin(1)))
	require.ErrorIs(t, err, why)
	_, err = c.Carry(ctx, exchange.Peer{Address: address}, batch(0, 1, thin(1)))
	require.ErrorIs(t, err, why)
	close(hold)
	_, err = c.Carry(t.Context(), exchange.Peer{Address: address}, batch(0, 2, thin(2)))
	require.NoError(t, err, "another reduction finds the line usable")
	require.Equal(t, []uint32{1, 2}, k.got[0])
}

// Joined parts may not take more memory than the largest batch of the block.
func TestPartsWithoutEndAreRefused(t *testing.T) {
	s := NewServer()
	s.Serve(small{})
	var parts []byte
	var err error
	for n := 0; err == nil; n++ {
		require.Less(t, n, 10)
		parts, err = s.join(parts, &pb.Batch{Reduction: 5, Sequence: 1, Columns: make([]byte, line.ChunkBytes), More: true})
	}
	require.ErrorContains(t, err, "has more than")
}

type small struct{ *keeper }

func (small) Shape(uint64) (rows, cols uint32, tiles int, ok bool) { return 100, 100, 1, true }

// crew greets one worker and breaks.
type crew struct {
	pb.UnimplementedCrewServer
}

func (crew) Join(s grpc.BidiStreamingServer[pb.Report, pb.Order]) error {
	r, err := s.Recv()
	if err != nil {
		return err
	}
	return s.Send(&pb.Order{Body: &pb.Order_Welcome{Welcome: &pb.Welcome{Version: r.GetHello().Version}}})
}

func TestJoinIsALink(t *testing.T) {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	require.NoError(t, err)
	s := line.NewServer()
	pb.RegisterCrewServer(s, crew{})
	done := make(chan struct{})
	go func() { defer close(done); _ = s.Serve(l) }()
	defer func() { s.Stop(); <-done }()
	conn, err := line.Dial(l.Addr().String())
	require.NoError(t, err)
	defer conn.Close()
	link, err := Join(t.Context(), conn)
	require.NoError(t, err)
	require.False(t, link.Welcomed())
	require.NoError(t, link.Send(&pb.Report{Body: &pb.Report_Hello{Hello: &pb.Hello{Version: "7"}}}))
	o, err := link.Recv()
	require.NoError(t, err)
	require.Equal(t, "7", o.GetWelcome().Version)
	require.True(t, link.Welcomed())
	_, err = link.Recv()
	require.ErrorIs(t, err, io.EOF)
	host, err := Toward(l.Addr().String())
	require.NoError(t, err)
	require.Equal(t, "127.0.0.1", host)
}

func BenchmarkCarry(b *testing.B) {
	k := newKeeper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	require.NoError(b, err)
	s, service := line.NewServer(), NewServer()
	service.Serve(k)
	pb.RegisterPeersServer(s, service)
	go func() { _ = s.Serve(l) }()
	defer s.Stop()
	for _, columns := range []int{1, 64, 4096} {
		b.Run(fmt.Sprint(columns), func(b *testing.B) {
			c := NewCarrier()
			defer c.Close()
			var items []exchange.Item
			for i := range columns {
				items = append(items, thin(uint32(i)))
			}
			k.in, k.got, k.sizes = map[int]*exchange.Inbox{}, map[int][]uint32{}, nil
			service.Serve(k)
			b.ReportAllocs()
			for n := range b.N {
				if _, err := c.Carry(b.Context(), exchange.Peer{Address: l.Addr().String()}, batch(0, uint64(n)+1, items...)); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
