// Package line is what both ends of a connection agree on: keepalive and limits,
// and how an error keeps its exit code across the wire.
//
// Messages stay below gRPC's default limit of 4 MiB; what is larger goes in parts.
// A peer that is silent for Silence plus Silence is taken for gone. Connections are
// not encrypted: run them inside a trusted network.
package line

import (
	"context"
	"errors"
	"fmt"
	"net"
	"strconv"
	"time"

	"google.golang.org/genproto/googleapis/rpc/errdetails"
	"google.golang.org/grpc"
	"google.golang.org/grpc/backoff"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/credentials/insecure"
	"google.golang.org/grpc/keepalive"
	"google.golang.org/grpc/status"

	"pairloom/sparse/exit"
)

const (
	// Silence is how long a connection may be quiet before it is probed, and how
	// long the answer may take.
	Silence = 10 * time.Second
	// ChunkBytes is the most that one message carries of anything large.
	ChunkBytes = 1 << 20

	handshakeMost = 10 * time.Second // for a new connection to speak
	streamsMost   = 256              // open calls a connection
	retryFirst    = 50 * time.Millisecond
	retryMost     = time.Second
)

// NewServer returns a gRPC server with the common limits; its Stop waits for calls
// to end.
func NewServer() *grpc.Server {
	return grpc.NewServer(
		grpc.KeepaliveParams(keepalive.ServerParameters{Time: Silence, Timeout: Silence}),
		grpc.KeepaliveEnforcementPolicy(keepalive.EnforcementPolicy{MinTime: Silence / 2, PermitWithoutStream: true}),
		grpc.ConnectionTimeout(handshakeMost),
		grpc.MaxConcurrentStreams(streamsMost),
		grpc.WaitForHandlers(true),
	)
}

// Dial makes a connection to HOST:PORT. It is established when first used, and again
// after it broke; no proxy is asked.
func Dial(address string) (*grpc.ClientConn, error) {
	if _, _, err := net.SplitHostPort(address); err != nil {
		return nil, exit.With(exit.Usage, fmt.Errorf("%q is not an address: HOST:PORT is expected", address))
	}
	again := backoff.Config{BaseDelay: retryFirst, Multiplier: 1.6, Jitter: 0.2, MaxDelay: retryMost}
	return grpc.NewClient("passthrough:///"+address,
		grpc.WithTransportCredentials(insecure.NewCredentials()),
		grpc.WithNoProxy(),
		grpc.WithKeepaliveParams(keepalive.ClientParameters{Time: Silence, Timeout: Silence, PermitWithoutStream: true}),
		grpc.WithConnectParams(grpc.ConnectParams{Backoff: again, MinConnectTimeout: handshakeMost}),
	)
}

const domain = "pairloom"

// toCode says which gRPC code goes with an exit code; others are Unknown.
var toCode = map[int]codes.Code{
	exit.Usage:      codes.InvalidArgument,
	exit.BadInput:   codes.InvalidArgument,
	exit.NoInput:    codes.NotFound,
	exit.NoPeer:     codes.Unavailable,
	exit.Internal:   codes.Internal,
	exit.TooBig:     codes.ResourceExhausted,
	exit.CannotOut:  codes.AlreadyExists,
	exit.Stopped:    codes.Aborted,
	exit.Version:    codes.FailedPrecondition,
	exit.NotAllowed: codes.PermissionDenied,
}

// fromCode says which exit code goes with a gRPC code that gRPC itself raised.
var fromCode = map[codes.Code]int{
	codes.Unavailable:      exit.NoPeer,
	codes.Canceled:         exit.Stopped,
	codes.DeadlineExceeded: exit.Stopped,
	codes.Unimplemented:    exit.Version,
	codes.NotFound:         exit.NoInput,
	codes.InvalidArgument:  exit.Usage,
}

// Status turns an error into one that crosses the wire with its exit code; nil stays
// nil, and an error that is a status already stays as it is.
func Status(err error) error {
	if err == nil {
		return nil
	}
	if _, ok := status.FromError(err); ok {
		return err
	}
	n := exit.Code(err)
	code, ok := toCode[n]
	if !ok {
		code = codes.Unknown
	}
	s := status.New(code, err.Error())
	info := &errdetails.ErrorInfo{Reason: "EXIT", Domain: domain, Metadata: map[string]string{"code": strconv.Itoa(n)}}
	if with, err := s.WithDetails(info); err == nil {
		s = with
	}
	return s.Err()
}

// Error turns what a call returned into an error with the exit code that it was
// sent with, or the one that fits what gRPC says; nil stays nil.
func Error(err error) error {
	if err == nil {
		return nil
	}
	s, ok := status.FromError(err)
	if !ok {
		return err
	}
	for _, d := range s.Details() {
		if info, ok := d.(*errdetails.ErrorInfo); ok && info.Domain == domain {
			if n, err := strconv.Atoi(info.Metadata["code"]); err == nil {
				return exit.With(n, errors.New(s.Message()))
			}
		}
	}
	if n, ok := fromCode[s.Code()]; ok {
		return exit.With(n, errors.New(s.Message()))
	}
	return exit.With(exit.Internal, errors.New(s.Message()))
}

// Stop ends a server: calls under way get the time until ctx ends, then they are cut.
func Stop(ctx context.Context, s *grpc.Server) {
	defer context.AfterFunc(ctx, s.Stop)()
	s.GracefulStop()
}
