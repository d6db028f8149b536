package published_test

import (
	"context"
	"flag"
	"io"
	"log/slog"
	"math/rand/v2"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"sync/atomic"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/credentials/insecure"

	"leadline.example/engine"
	"leadline.example/persist"
	leadlinev1 "leadline.example/proto/leadline/v1"
	"leadline.example/server"
)

var seedFlag = flag.Uint64("seed", 0, "seed of the random tests; 0 takes the usual ones")

// seeds returns the seeds to run with: the one given, or 1 to n.
func seeds(n uint64) []uint64 {
	if *seedFlag != 0 {
		return []uint64{*seedFlag}
	}
	var all []uint64
	for s := range n {
		all = append(all, s+1)
	}
	return all
}

func newRand(seed uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, 0)) }

// noon is when the tests' clock starts.
var noon = time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC)

// clock is the service's clock, moved by tests only.
type clock struct{ nanos atomic.Int64 }

func newClock() *clock {
	c := new(clock)
	c.nanos.Store(noon.UnixNano())
	return c
}

func (c *clock) Now() time.Time          { return time.Unix(0, c.nanos.Load()).UTC() }
func (c *clock) Advance(d time.Duration) { c.nanos.Add(int64(d)) }

// service is the whole service on a ledger file, and its clients.
type service struct {
	t           testing.TB
	clock       *clock
	file        string
	address     string // of HTTP
	transport   *http.Transport
	conn        *grpc.ClientConn
	quantities  leadlinev1.QuantityServiceClient
	instruments leadlinev1.InstrumentServiceClient
	readings    leadlinev1.ReadingServiceClient
	beliefs     leadlinev1.BeliefServiceClient
	stop        func() // ends it as a signal would, once, and verifies its ledger
}

func start(t testing.TB) *service {
	t.Helper()
	return startWith(t, filepath.Join(t.TempDir(), "ledger"), newClock(), 0)
}

// startWith starts a service on a file, which is made if there is none.
func startWith(t testing.TB, file string, c *clock, bodyTime time.Duration) *service {
	t.Helper()
	observations := server.NewObservations()
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) {
		l, err := persist.Open(persist.Options{Path: file, Now: c.Now})
		if err != nil {
			return nil, err
		}
		return l, nil
	}, OnFault: func(err error) { t.Errorf("storage fault: %v", err) }})
	if err != nil {
		t.Fatal(err)
	}
	logger := slog.New(slog.NewTextHandler(t.Output(), &slog.HandlerOptions{Level: slog.LevelWarn}))
	metrics, err := server.NewMetrics(server.MetricsOptions{
		Keeper: keeper, Observations: observations, Now: c.Now, Logger: logger,
		WriteTimeout: time.Minute, // longer than patience, so that waiting for a stalled scrape is seen
	})
	if err != nil {
		t.Fatal(err)
	}
	srv, err := server.New(server.Options{
		Keeper: keeper, Now: c.Now, Logger: logger, Metrics: metrics, Observations: observations, BodyTime: bodyTime,
	})
	if err != nil {
		t.Fatal(err)
	}
	s := &service{t: t, clock: c, file: file, transport: &http.Transport{MaxIdleConnsPerHost: 8}}
	s.serve(srv, keeper)
	return s
}

func (s *service) serve(srv *server.Server, keeper *engine.Keeper) {
	web, rpc := listen(s.t), listen(s.t)
	s.address = web.Addr().String()
	var err error
	if s.conn, err = grpc.NewClient(rpc.Addr().String(), grpc.WithTransportCredentials(insecure.NewCredentials())); err != nil {
		s.t.Fatal(err)
	}
	s.quantities = leadlinev1.NewQuantityServiceClient(s.conn)
	s.instruments = leadlinev1.NewInstrumentServiceClient(s.conn)
	s.readings = leadlinev1.NewReadingServiceClient(s.conn)
	s.beliefs = leadlinev1.NewBeliefServiceClient(s.conn)

	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan error, 1)
	go func() { ended <- srv.Serve(ctx, web, rpc) }()
	stopped := false
	s.stop = func() {
		if stopped {
			return
		}
		stopped = true
		s.transport.CloseIdleConnections()
		if err := s.conn.Close(); err != nil {
			s.t.Errorf("close the gRPC client: %v", err)
		}
		cancel()
		if err := <-ended; err != nil {
			s.t.Errorf("Serve: %v", err)
		}
		if err := keeper.Close(); err != nil {
			s.t.Errorf("close the keeper: %v", err)
		}
		if err := persist.Verify(s.file, io.Discard); err != nil {
			s.t.Errorf("the ledger left behind: %v", err)
		}
	}
	s.t.Cleanup(s.stop)
}

func listen(t testing.TB) net.Listener {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// under is the same service seen by a subtest.
func (s *service) under(t testing.TB) *service {
	c := *s
	c.t = t
	return &c
}

// restart ends the service in good order and starts another on the same file.
func (s *service) restart() *service {
	s.t.Helper()
	s.stop()
	return startWith(s.t, s.file, s.clock, 0)
}

// abandon starts another service on what the file holds at this moment, as
// after a crash. No request may be under way: an idle service writes nothing,
// so the copy is that of one moment.
func (s *service) abandon() *service {
	s.t.Helper()
	content, err := os.ReadFile(s.file)
	if err != nil {
		s.t.Fatal(err)
	}
	file := filepath.Join(s.t.TempDir(), "ledger")
	if err := os.WriteFile(file, content, 0o600); err != nil {
		s.t.Fatal(err)
	}
	s.stop()
	return startWith(s.t, file, s.clock, 0)
}
