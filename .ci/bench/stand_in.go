package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"runtime/pprof"
	"time"

	"github.com/grpc-ecosystem/grpc-gateway/v2/runtime"
	"google.golang.org/grpc"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/persist"
	leadlinev1 "leadline.example/proto/leadline/v1"
	"leadline.example/server"
)

// serveStandIn serves one of the stand-ins until ctx ends: each is a process
// of its own, like the service.
func serveStandIn(ctx context.Context, name string, args []string) error {
	switch name {
	case "nothing": // the server with nothing behind it
		keeper, err := engine.New(engine.Options{Open: openDiscard})
		if err != nil {
			return err
		}
		n, err := newNothing(ctx, keeper)
		if err != nil {
			return err
		}
		return serveKeeper(ctx, keeper, n)
	case "unledgered": // server and engine without a ledger
		keeper, err := engine.New(engine.Options{Open: openDiscard})
		if err != nil {
			return err
		}
		return serveKeeper(ctx, keeper, keeper)
	case "whole": // all of the service, profiled
		return serveWhole(ctx, args[0], args[1])
	case "stock": // generated code and what it comes with
		return serveStock(ctx)
	case "cached": // a file
		page, err := os.ReadFile(args[0])
		if err != nil {
			return err
		}
		return serveHTTP(ctx, http.HandlerFunc(func(w http.ResponseWriter, _ *http.Request) {
			w.Header().Set("Content-Type", "text/plain; version=0.0.4; charset=utf-8")
			_, _ = w.Write(page)
		}))
	}
	return fmt.Errorf("there is no stand-in %q", name)
}

// discard is a ledger that keeps nothing.
type discard struct {
	*ledgertest.Memory
	position engine.Position
}

func openDiscard() (engine.Ledger, error) { return &discard{Memory: ledgertest.NewMemory(nil)}, nil }

// Append stamps the records as a ledger does.
func (d *discard) Append(g *engine.Group) error {
	now := engine.InstantOf(time.Now())
	for i := range g.Records {
		d.position++
		g.Records[i].Position, g.Records[i].CommitTime = d.position, now
	}
	return nil
}

// nothing answers that every reading is applied, and always with one belief.
type nothing struct {
	*engine.Keeper
	belief engine.Belief
}

func newNothing(ctx context.Context, k *engine.Keeper) (*nothing, error) {
	now := engine.InstantOf(time.Now())
	d := engine.Declaration{
		Unit: "Cel", Description: "temperature at point 0",
		Prior:         engine.Prior{Form: engine.PriorNormal, Mean: -21, StandardDeviation: 3},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.8},
		Dynamics:      engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.5, Per: time.Hour},
		Tolerance:     engine.Tolerance{HasLower: true, Lower: -26, HasUpper: true, Upper: -18},
	}
	if _, _, err := k.Declare(ctx, "hall-00.line-000.point-00000", d, engine.Condition{}, now); err != nil {
		return nil, err
	}
	b := engine.Batch{Receive: now, Readings: []engine.Reading{{Quantity: "hall-00.line-000.point-00000", Value: -21.25, HasTime: true, Time: now, ID: "a"}}}
	if _, err := k.Post(ctx, b); err != nil {
		return nil, err
	}
	belief, err := k.Belief(ctx, "hall-00.line-000.point-00000", engine.BeliefQuery{Now: now})
	return &nothing{k, belief}, err
}

// Post implements server.ReadingKeeper.
func (n *nothing) Post(_ context.Context, b engine.Batch) ([]engine.Result, error) {
	results := make([]engine.Result, len(b.Readings))
	for i := range results {
		r := &b.Readings[i]
		results[i] = engine.Result{ReadingID: r.ID, Time: r.Time, Status: engine.Applied}
	}
	return results, nil
}

// Submit implements server.ReadingKeeper.
func (n *nothing) Submit(b engine.Batch, done func([]engine.Result, error)) error {
	done(n.Post(context.Background(), b))
	return nil
}

// Belief implements server.ReadingKeeper.
func (n *nothing) Belief(context.Context, engine.QuantityID, engine.BeliefQuery) (engine.Belief, error) {
	return n.belief, nil
}

func serveKeeper(ctx context.Context, keeper *engine.Keeper, readings server.ReadingKeeper) error {
	s, err := server.New(server.Options{Keeper: keeper, Readings: readings, Now: time.Now, Logger: slog.New(slog.DiscardHandler), Observations: server.NewObservations()})
	if err != nil {
		return err
	}
	web, remote, err := listen()
	if err != nil {
		return err
	}
	return errors.Join(s.Serve(ctx, web, remote), keeper.Close())
}

// serveWhole puts the service together as cmd/leadline does, and writes a CPU
// profile of its life.
func serveWhole(ctx context.Context, dir, profile string) error {
	if err := os.MkdirAll(dir, 0o700); err != nil {
		return err
	}
	observations := server.NewObservations()
	path := filepath.Join(dir, persist.FileName)
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) {
		return persist.Open(persist.Options{Path: path, OnCommit: func(took time.Duration, records, _, _ int) { observations.Commit(took, records) }})
	}})
	if err != nil {
		return err
	}
	metrics, err := server.NewMetrics(server.MetricsOptions{
		Keeper: keeper, Observations: observations, Now: time.Now, MaxQuantities: quantities,
		LedgerBytes: func() int64 { return 0 }, Ready: func() error { return nil }, Logger: slog.Default(),
	})
	if err != nil {
		return err
	}
	s, err := server.New(server.Options{Keeper: keeper, Now: time.Now, Metrics: metrics, Observations: observations})
	if err != nil {
		return err
	}
	web, remote, err := listen()
	if err != nil {
		return err
	}
	file, err := os.Create(profile)
	if err != nil {
		return err
	}
	defer file.Close()
	if err := pprof.StartCPUProfile(file); err != nil {
		return err
	}
	defer pprof.StopCPUProfile()
	return errors.Join(s.Serve(ctx, web, remote), keeper.Close())
}

// stock is what a service gets without handiwork: it decodes, answers that
// everything is applied, and encodes.
type stock struct {
	leadlinev1.UnimplementedReadingServiceServer
}

func results(readings []*leadlinev1.Reading) []*leadlinev1.ReadingResult {
	all := make([]*leadlinev1.ReadingResult, len(readings))
	for i, r := range readings {
		all[i] = &leadlinev1.ReadingResult{Index: uint32(i), ReadingId: r.GetReadingId(), Time: r.GetTime(), Status: leadlinev1.Reading_APPLIED}
	}
	return all
}

// PostReadings answers a batch.
func (stock) PostReadings(_ context.Context, r *leadlinev1.PostReadingsRequest) (*leadlinev1.PostReadingsResponse, error) {
	return &leadlinev1.PostReadingsResponse{Results: results(r.GetReadings()), AppliedCount: uint32(len(r.GetReadings()))}, nil
}

// StreamReadings answers each batch of a stream.
func (stock) StreamReadings(stream grpc.BidiStreamingServer[leadlinev1.StreamReadingsRequest, leadlinev1.StreamReadingsResponse]) error {
	for {
		r, err := stream.Recv()
		if errors.Is(err, io.EOF) {
			return nil
		}
		if err != nil {
			return err
		}
		a := &leadlinev1.StreamReadingsResponse{Sequence: r.GetSequence(), Results: results(r.GetReadings()), AppliedCount: uint32(len(r.GetReadings()))}
		if err := stream.Send(a); err != nil {
			return err
		}
	}
}

func serveStock(ctx context.Context) error {
	mux := runtime.NewServeMux()
	if err := leadlinev1.RegisterReadingServiceHandlerServer(ctx, mux, stock{}); err != nil {
		return err
	}
	g := grpc.NewServer()
	leadlinev1.RegisterReadingServiceServer(g, stock{})
	web, remote, err := listen()
	if err != nil {
		return err
	}
	context.AfterFunc(ctx, g.Stop)
	go func() { _ = g.Serve(remote) }() // ends with the process
	return serveOn(ctx, web, mux)
}

// listen takes two free ports and prints them as the service does.
func listen() (web, remote net.Listener, err error) {
	if web, err = net.Listen("tcp", "127.0.0.1:0"); err != nil {
		return nil, nil, err
	}
	if remote, err = net.Listen("tcp", "127.0.0.1:0"); err != nil {
		return nil, nil, err
	}
	return web, remote, json.NewEncoder(os.Stdout).Encode(map[string]string{"http": web.Addr().String(), "grpc": remote.Addr().String()})
}

func serveHTTP(ctx context.Context, handler http.Handler) error {
	web, _, err := listen()
	if err != nil {
		return err
	}
	return serveOn(ctx, web, handler)
}

func serveOn(ctx context.Context, l net.Listener, handler http.Handler) error {
	s := &http.Server{Handler: handler}
	context.AfterFunc(ctx, func() { _ = s.Close() })
	if err := s.Serve(l); !errors.Is(err, http.ErrServerClosed) {
		return err
	}
	return nil
}
