// Package server is the outside of the service: gRPC and HTTP in front of one
// keeper. It maps the messages of the interface to the engine and back, and
// decides nothing.
//
// A request over HTTP is checked by rest and then handed by the gateway, in
// this process, to the same service methods that gRPC calls; readings and
// watches are served by hand-written twins. Errors are the engine's until the
// edge, where errors.go turns them into the answers of either protocol.
package server

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"net/http"
	"sync"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/health"

	"leadline.example/engine"
)

// Options configures a Server.
type Options struct {
	Keeper *engine.Keeper
	// Readings takes readings in place of Keeper, so that a benchmark can tell
	// what the server itself costs; nil is Keeper.
	Readings ReadingKeeper
	// Now is the clock: the receipt instant of requests.
	Now func() time.Time
	// Logger gets faults; nil is the default logger.
	Logger *slog.Logger
	// Metrics serves /metrics; nil leaves it out.
	Metrics http.Handler
	// Observations counts gRPC requests; nil counts none.
	Observations *Observations
	// BodyTime is how long an HTTP request may take to arrive, with its body; 0
	// means 30 s.
	BodyTime time.Duration
	// DrainTime is how long requests under way may take after the service was
	// told to stop; 0 means 20 s.
	DrainTime time.Duration
	// AnyHost admits HTTP requests whatever host they name. Otherwise it has to be
	// localhost or a loopback address, against DNS rebinding.
	AnyHost bool
}

func (o *Options) validate() error {
	switch {
	case o.Keeper == nil:
		return errors.New("Options.Keeper is nil; give the keeper to serve")
	case o.Now == nil:
		return errors.New("Options.Now is nil; give the service's clock")
	case o.BodyTime < 0:
		return errors.New("Options.BodyTime is below 0; give a time, or 0 for 30 s")
	case o.DrainTime < 0:
		return errors.New("Options.DrainTime is below 0; give a time, or 0 for 20 s")
	}
	if o.Readings == nil {
		o.Readings = o.Keeper
	}
	if o.Logger == nil {
		o.Logger = slog.Default()
	}
	if o.BodyTime == 0 {
		o.BodyTime = bodyTime
	}
	if o.DrainTime == 0 {
		o.DrainTime = 20 * time.Second
	}
	return nil
}

// Limits of the HTTP server. Readings are small: what takes longer is stuck.
const (
	headerTime     = 10 * time.Second
	bodyTime       = 30 * time.Second
	answerTime     = 60 * time.Second // from the end of the header
	idleTime       = 2 * time.Minute
	maxHeaderBytes = 32 << 10
)

// Server serves one keeper over HTTP and gRPC.
type Server struct {
	options  Options
	rest     *rest
	grpc     *grpc.Server
	health   *health.Server
	arrivals *arrivals
	stopping chan struct{} // closed when streams have to end
	once     sync.Once
}

// services are the implementations behind both protocols.
type services struct {
	quantities  *quantityService
	instruments *instrumentService
	readings    *readingService
	beliefs     *beliefService
}

// New returns a server that listens nowhere yet.
func New(o Options) (*Server, error) {
	if err := o.validate(); err != nil {
		return nil, fmt.Errorf("server: %w", err)
	}
	s := &Server{options: o, stopping: make(chan struct{}), health: health.NewServer(), arrivals: newArrivals()}
	implementations := &services{
		quantities:  &quantityService{keeper: o.Keeper, renewals: o.Keeper, now: o.Now},
		instruments: &instrumentService{keeper: o.Keeper, now: o.Now},
		readings:    &readingService{keeper: o.Readings, assess: o.Keeper, now: o.Now, stopping: s.stopping},
		beliefs:     &beliefService{keeper: o.Keeper, outlook: o.Keeper, checks: o.Keeper, now: o.Now, stopping: s.stopping, logger: o.Logger},
	}
	h, err := newREST(context.Background(), implementations, newOrigins(o.AnyHost), o.Logger)
	if err != nil {
		return nil, fmt.Errorf("server: register the HTTP routes: %w", err)
	}
	fast := newIngest(implementations.readings)
	h.special = map[string]specialHandler{
		"POST /v1/readings":                       fast.postReadings,
		"POST /v1/quantities/{quantity}/readings": fast.postReading,
		"GET /v1/beliefs:watch":                   implementations.beliefs.watchBeliefs,
	}
	h.pages = s.pages()
	s.rest = h
	s.grpc = s.newGRPC(implementations)
	return s, nil
}

// Handler returns the HTTP interface.
func (s *Server) Handler() http.Handler { return s.rest }

// Ready returns nil while requests are taken, else why not.
func (s *Server) Ready() error {
	select {
	case <-s.stopping:
		return errors.New("the service is stopping")
	default:
		return s.options.Keeper.Health()
	}
}

// Serve answers on both listeners until ctx ends, and then stops: it tells that
// it is not ready, ends streams after what they sent is acknowledged, cuts
// requests that are still arriving and lets those under way finish. What takes
// longer than DrainTime is broken off with a warning in the log: a slow client
// is no failure of the service. Serve closes the listeners, not the keeper, and
// returns nil unless a listener failed.
func (s *Server) Serve(ctx context.Context, httpListener, grpcListener net.Listener) error {
	web := &http.Server{
		Handler:           s.rest,
		ReadHeaderTimeout: headerTime,
		ReadTimeout:       s.options.BodyTime,
		WriteTimeout:      answerTime,
		IdleTimeout:       idleTime,
		MaxHeaderBytes:    maxHeaderBytes,
		ConnContext:       s.arrivals.inContext,
		ConnState:         s.arrivals.follow,
		ErrorLog:          slog.NewLogLogger(s.options.Logger.Handler(), slog.LevelDebug),
	}
	failed := make(chan error, 2)
	var running sync.WaitGroup
	running.Go(func() { failed <- serveError("HTTP", web.Serve(httpListener)) })
	running.Go(func() { failed <- serveError("gRPC", s.grpc.Serve(grpcListener)) })
	running.Go(func() { s.followHealth() })

	var err error
	select {
	case <-ctx.Done():
	case err = <-failed:
	}
	s.stop(web)
	running.Wait()
	return err
}

// stop ends both servers; see Serve.
func (s *Server) stop(web *http.Server) {
	s.health.Shutdown()
	s.once.Do(func() { close(s.stopping) })
	s.arrivals.cut()
	ctx, cancel := context.WithTimeout(context.Background(), s.options.DrainTime)
	defer cancel()
	drained := make(chan struct{})
	go func() {
		defer close(drained)
		s.grpc.GracefulStop()
	}()
	if web.Shutdown(ctx) != nil {
		_ = web.Close()
		s.options.Logger.Warn("HTTP requests were broken off, as they took too long to finish", "limit", s.options.DrainTime)
	}
	select {
	case <-drained:
	case <-ctx.Done():
		s.grpc.Stop()
		<-drained
		s.options.Logger.Warn("gRPC requests were broken off, as they took too long to finish", "limit", s.options.DrainTime)
	}
}

func serveError(protocol string, err error) error {
	if err == nil || errors.Is(err, http.ErrServerClosed) || errors.Is(err, grpc.ErrServerStopped) {
		return nil
	}
	return fmt.Errorf("serve %s: %w", protocol, err)
}
