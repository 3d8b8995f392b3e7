package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"net"
	"os"
	"runtime"
	"sync"
	"time"

	"github.com/spf13/cobra"
	"google.golang.org/grpc"

	"pairloom/proto/line"
	pb "pairloom/proto/pairloomv1"
	"pairloom/sparse/exit"
	"pairloom/worker/server"
	"pairloom/worker/wire"
)

type workFlags struct {
	coordinator, listen, name string
	threads                   int
	patience                  time.Duration
	json                      bool
}

func workCommand() *cobra.Command {
	var f workFlags
	c := &cobra.Command{
		Use:   "work --coordinator HOST:PORT",
		Short: "Join a coordinator and work for it",
		Long: `Work joins a coordinator and does its share of every job until it is told to stop
or gets SIGINT or SIGTERM (exit code 0). Other workers reach it at the address it
listens on: by default this machine's own, on the way to the coordinator. A lost
coordinator is looked for again for --patience (exit code 69).`,
		Example: `  pairloom work --coordinator head:7440`,
		Args:    cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			ctx, stop := untilSignal(c.Context())
			defer stop()
			return work(ctx, f, logger(c.ErrOrStderr(), f.json))
		},
	}
	coordinatorFlag(c, &f.coordinator)
	c.Flags().StringVar(&f.listen, "listen", "", "HOST:PORT for other workers; port 0 picks a free one")
	c.Flags().StringVar(&f.name, "name", "", "name of the worker in results (default HOST-PROCESS)")
	c.Flags().IntVar(&f.threads, "threads", runtime.GOMAXPROCS(0), "tasks and goroutines at once")
	c.Flags().DurationVar(&f.patience, "patience", time.Minute, "how long a coordinator is looked for")
	c.Flags().BoolVar(&f.json, "json", false, "log in JSON")
	return c
}

// station is a worker's process: it joins as often as it must.
type station struct {
	cfg     server.Config
	conn    *grpc.ClientConn
	peers   *wire.Server
	log     *slog.Logger
	address string
}

// work joins the coordinator and works until it is told to stop.
func work(ctx context.Context, f workFlags, log *slog.Logger) error {
	if err := needCoordinator(f.coordinator); err != nil {
		return err
	}
	if f.threads < 1 {
		return exit.With(exit.Usage, errors.New("--threads must be at least 1"))
	}
	conn, err := line.Dial(f.coordinator)
	if err != nil {
		return err
	}
	defer conn.Close()
	l, address, err := listen(f)
	if err != nil {
		return err
	}
	carrier := wire.NewCarrier()
	defer carrier.Close()
	if f.name == "" {
		host, _ := os.Hostname()
		f.name = fmt.Sprintf("%s-%d", host, os.Getpid())
	}
	s := &station{conn: conn, peers: wire.NewServer(), log: log.With("worker", f.name), address: f.coordinator,
		cfg: server.Config{Name: f.name, Version: version(), Address: address, Threads: f.threads, Carrier: carrier}}
	peers := line.NewServer()
	pb.RegisterPeersServer(peers, s.peers)
	var wg sync.WaitGroup
	wg.Go(func() { _ = peers.Serve(l) })
	defer wg.Wait()
	defer peers.Stop()
	s.log.Info("worker listens", "address", address, "threads", f.threads)
	return s.keep(ctx, f.patience)
}

// listen opens the port for peers and says how they can reach it.
func listen(f workFlags) (net.Listener, string, error) {
	at := f.listen
	if at == "" {
		at = ":0"
	}
	host, port, err := net.SplitHostPort(at)
	if err != nil {
		return nil, "", exit.With(exit.Usage, fmt.Errorf("--listen %q: HOST:PORT is expected", f.listen))
	}
	known := host
	if ip := net.ParseIP(host); host == "" || ip != nil && ip.IsUnspecified() {
		if known, err = wire.Toward(f.coordinator); err != nil {
			return nil, "", exit.With(exit.NoPeer, fmt.Errorf("no way to %s: %w", f.coordinator, err))
		}
	}
	if f.listen == "" {
		host = known
	}
	l, err := net.Listen("tcp", net.JoinHostPort(host, port))
	if err != nil {
		return nil, "", exit.With(exit.Usage, err)
	}
	_, port, err = net.SplitHostPort(l.Addr().String())
	return l, net.JoinHostPort(known, port), err
}

const (
	rejoinFirst = 100 * time.Millisecond
	rejoinMost  = 2 * time.Second
)

// keep joins and works, again after the coordinator was lost, until the coordinator
// says stop or refuses, ctx ends, or patience does.
func (s *station) keep(ctx context.Context, patience time.Duration) error {
	since, wait := time.Now(), rejoinFirst
	for {
		joined, err := s.once(ctx)
		switch {
		case ctx.Err() != nil:
			s.log.Info("worker stops")
			return nil
		case err == nil:
			s.log.Info("worker stops: the coordinator said so")
			return nil
		case joined:
			since, wait = time.Now(), rejoinFirst
			s.log.Warn("the coordinator is lost", "error", err)
		case exit.Code(err) != exit.NoPeer || errors.As(err, new(*refused)):
			return err
		}
		if time.Since(since)+wait > patience {
			return exit.With(exit.NoPeer, fmt.Errorf("the coordinator at %s cannot be reached: %w", s.address, line.Error(err)))
		}
		select {
		case <-time.After(wait):
		case <-ctx.Done():
		}
		wait = min(2*wait, rejoinMost)
	}
}

// refused is the error of a worker that was answered, and cannot join.
type refused struct{ error }

func (r *refused) Unwrap() error { return r.error }

// once joins and works until the link breaks.
func (s *station) once(ctx context.Context) (joined bool, err error) {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	link, err := wire.Join(ctx, s.conn)
	if err != nil {
		return false, line.Error(err)
	}
	w := server.New(s.cfg)
	s.peers.Serve(w)
	defer s.peers.Serve(nil)
	s.log.Info("worker joins", "coordinator", s.address)
	err = w.Serve(ctx, link)
	select {
	case <-w.Number:
		return true, err
	default:
	}
	if err != nil && !errors.Is(err, io.EOF) && link.Welcomed() {
		err = &refused{err}
	}
	return false, err
}
