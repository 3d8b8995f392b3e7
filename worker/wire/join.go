package wire

import (
	"context"
	"net"

	"google.golang.org/grpc"

	pb "pairloom/proto/pairloomv1"
)

// Link is a worker's stream to its coordinator (server.Link of package worker/server).
type Link struct {
	grpc.BidiStreamingClient[pb.Report, pb.Order]
	welcomed bool
}

// Join opens the stream over a connection; it ends with ctx.
func Join(ctx context.Context, conn *grpc.ClientConn) (*Link, error) {
	s, err := pb.NewCrewClient(conn).Join(ctx)
	if err != nil {
		return nil, err
	}
	return &Link{BidiStreamingClient: s}, nil
}

// Recv waits for the next order.
func (l *Link) Recv() (*pb.Order, error) {
	o, err := l.BidiStreamingClient.Recv()
	l.welcomed = l.welcomed || o.GetWelcome() != nil
	return o, err
}

// Welcomed says that the coordinator answered the worker's hello. To be called when
// no Recv is under way.
func (l *Link) Welcomed() bool { return l.welcomed }

// Toward returns this machine's address on the way to HOST:PORT: where the other end
// can reach it. Nothing is sent.
func Toward(address string) (host string, err error) {
	c, err := net.Dial("udp", address)
	if err != nil {
		return "", err
	}
	defer c.Close()
	host, _, err = net.SplitHostPort(c.LocalAddr().String())
	return host, err
}
