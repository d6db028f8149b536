package main

import (
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"io"
	"log/slog"
	"net"
	"os"
	"path/filepath"
	"runtime/debug"
	"sync"
	"time"

	"leadline.example/engine"
	"leadline.example/persist"
	"leadline.example/server"
)

// runServe serves until ctx ends.
func runServe(ctx context.Context, args []string, p process) error {
	var s settings
	flags := flag.NewFlagSet("serve", flag.ContinueOnError)
	declareFlags(flags, &s, p.env)
	flags.StringVar(&s.dataDir, "data-dir", p.env("LEADLINE_DATA_DIR"),
		"`directory` of the ledger, made if absent (environment LEADLINE_DATA_DIR)")
	if err := parseFlags(flags, args, p.stdout); err != nil {
		return err
	}
	if s.dataDir == "" {
		return usagef("--data-dir is missing; give the directory in which the ledger is to be kept")
	}
	if err := s.validate(); err != nil {
		return err
	}
	if p.env("GOGC") == "" {
		debug.SetGCPercent(gcPercent)
	}
	svc, err := startService(&s, s.newLogger(p.stderr))
	if err != nil {
		return err
	}
	if err := svc.announce(p.stdout); err != nil {
		return errors.Join(err, svc.close())
	}
	return errors.Join(svc.serve(ctx), svc.close())
}

// gcPercent lets garbage grow to twice what lives before it is collected, for
// what lives is small beside what a stream of readings leaves behind. GOGC in
// the environment overrides it, GOMEMLIMIT bounds it.
const gcPercent = 200

// service is everything that serves: sockets in front, ledger at the back.
type service struct {
	logger       *slog.Logger
	observations *server.Observations
	keeper       *engine.Keeper
	server       *server.Server
	http         net.Listener
	grpc         net.Listener
}

// startService opens the ledger first, so that a second process is told who
// holds it and not which port is taken, and binds both sockets. Clients that
// connect before serve runs wait in the sockets' queues.
func startService(s *settings, logger *slog.Logger) (*service, error) {
	svc := &service{logger: logger, observations: server.NewObservations()}
	if err := svc.openKeeper(s); err != nil {
		return nil, err
	}
	if err := svc.listen(s); err != nil {
		return nil, errors.Join(err, svc.close())
	}
	if err := svc.openServer(s); err != nil {
		return nil, errors.Join(fmt.Errorf("start the server: %w", err), svc.close())
	}
	return svc, nil
}

func (svc *service) openKeeper(s *settings) error {
	if err := makeDataDir(s.dataDir); err != nil {
		return err
	}
	path := filepath.Join(s.dataDir, persist.FileName)
	keeper, err := engine.New(engine.Options{
		Open:              func() (engine.Ledger, error) { return svc.openLedger(path) },
		MaxClockSkew:      s.maxClockSkew,
		DuplicateWindow:   s.duplicateWindow,
		RefusedLog:        s.refusedLog,
		CheckpointRecords: s.checkpointEvery,
		OnFault: func(err error) {
			svc.observations.Fault(err)
			svc.logger.Error(faultMessage(err), "error", err)
		},
	})
	if err != nil {
		return fmt.Errorf("start on the ledger: %w", err)
	}
	svc.keeper = keeper
	return nil
}

// faultMessage tells what a fault of the storage means for readings. One that is
// not about writing, such as a belief that could not be rebuilt, stops none.
func faultMessage(err error) string {
	if errors.Is(err, engine.ErrStorageFailed) || errors.Is(err, engine.ErrDiskFull) {
		return "storage fault: nothing is acknowledged until it is mended"
	}
	return "storage fault: a part of the ledger could not be read; whether readings are taken is told by /readyz"
}

func (svc *service) openLedger(path string) (engine.Ledger, error) {
	l, err := persist.Open(persist.Options{
		Path: path,
		Now:  time.Now,
		OnCommit: func(took time.Duration, records, _, _ int) {
			svc.observations.Commit(took, records)
		},
		OnSalvage: func(path string, err error) {
			if err != nil {
				svc.logger.Error("the ledger could not be copied to fresh blocks; back it up before the next start", "error", err)
				return
			}
			svc.logger.Warn("copied the acknowledged part of the ledger to fresh blocks; restart the service", "file", path)
		},
	})
	if err != nil {
		return nil, err // and not l, which would be a nil inside an interface
	}
	return l, nil
}

func (svc *service) openServer(s *settings) error {
	path := filepath.Join(s.dataDir, persist.FileName)
	metrics, err := server.NewMetrics(server.MetricsOptions{
		Keeper:        svc.keeper,
		Observations:  svc.observations,
		Now:           time.Now,
		MaxQuantities: s.maxQuantities,
		LedgerBytes:   func() int64 { return fileSize(path) },
		Ready:         func() error { return svc.server.Ready() }, // no scrape comes before there is a server
		Logger:        svc.logger,
	})
	if err != nil {
		return err
	}
	svc.server, err = server.New(server.Options{
		Keeper:       svc.keeper,
		Now:          time.Now,
		Logger:       svc.logger,
		Metrics:      metrics,
		Observations: svc.observations,
		AnyHost:      s.listenAnywhere,
	})
	return err
}

// fileSize returns 0 for a file that isn't there.
func fileSize(path string) int64 {
	info, err := os.Stat(path)
	if err != nil {
		return 0
	}
	return info.Size()
}

func (svc *service) listen(s *settings) error {
	var err error
	if svc.http, err = net.Listen("tcp", s.http); err != nil {
		return fmt.Errorf("listen on --http %s: %w; give another address if this one is in use", s.http, err)
	}
	if svc.grpc, err = net.Listen("tcp", s.grpc); err != nil {
		return fmt.Errorf("listen on --grpc %s: %w; give another address if this one is in use", s.grpc, err)
	}
	return nil
}

// announce writes the one line that tells whoever started the process where it
// listens.
func (svc *service) announce(w io.Writer) error {
	return json.NewEncoder(w).Encode(struct {
		HTTP string `json:"http"`
		GRPC string `json:"grpc"`
	}{svc.http.Addr().String(), svc.grpc.Addr().String()})
}

// serve answers clients until ctx ends, then lets the requests under way
// finish.
func (svc *service) serve(ctx context.Context) error {
	svc.logger.Info("serving", "http", svc.http.Addr().String(), "grpc", svc.grpc.Addr().String())
	ctx, stop := context.WithCancel(ctx)
	var resuming sync.WaitGroup
	resuming.Go(func() { svc.resume(ctx) })
	defer resuming.Wait()
	defer stop()
	if err := svc.server.Serve(ctx, svc.http, svc.grpc); err != nil {
		return fmt.Errorf("serve: %w", err)
	}
	svc.logger.Info("stopped taking requests")
	return nil
}

// resumeInterval is how often a service on a full disk tries to write again.
const resumeInterval = 5 * time.Second

// resume takes up writing when a full disk has room again, until ctx ends.
func (svc *service) resume(ctx context.Context) {
	ticker := time.NewTicker(resumeInterval)
	defer ticker.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case <-ticker.C:
		}
		if !errors.Is(svc.keeper.Health(), engine.ErrDiskFull) {
			continue
		}
		if err := svc.keeper.Resume(); err != nil {
			svc.logger.Warn("the disk is still full", "error", err)
			continue
		}
		svc.logger.Info("the disk has room again: resumed writing")
	}
}

// close commits what was taken and closes the ledger. Sockets that serve has
// already closed are no error.
func (svc *service) close() error {
	var errs []error
	for _, l := range []net.Listener{svc.http, svc.grpc} {
		if l == nil {
			continue
		}
		if err := l.Close(); err != nil && !errors.Is(err, net.ErrClosed) {
			errs = append(errs, fmt.Errorf("close %s: %w", l.Addr(), err))
		}
	}
	if err := svc.keeper.Close(); err != nil {
		errs = append(errs, fmt.Errorf("close the ledger: %w", err))
	} else {
		svc.logger.Info("closed the ledger")
	}
	return errors.Join(errs...)
}

// isLedgerError tells whether err is about the ledger's file as such.
func isLedgerError(err error) bool {
	for _, target := range []error{persist.ErrHeld, persist.ErrDamaged, persist.ErrForeign, persist.ErrNewer} {
		if errors.Is(err, target) {
			return true
		}
	}
	return false
}
