package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"os"
	"sync"
	"time"
)

// runDemo serves a throw-away ledger that an invented plant feeds, until ctx
// ends, and removes it.
func runDemo(ctx context.Context, args []string, p process) (err error) {
	var s settings
	flags := flag.NewFlagSet("demo", flag.ContinueOnError)
	declareFlags(flags, &s, p.env)
	seed := flags.Uint64("seed", 1, "of the random numbers that make up the readings")
	if err := parseFlags(flags, args, p.stdout); err != nil {
		return err
	}
	if err := s.validate(); err != nil {
		return err
	}
	if s.dataDir, err = os.MkdirTemp("", "leadline-demo-"); err != nil {
		return fmt.Errorf("make a throw-away data directory: %w", err)
	}
	defer func() { err = errors.Join(err, os.RemoveAll(s.dataDir)) }()
	svc, err := startService(&s, s.newLogger(p.stderr))
	if err != nil {
		return err
	}
	return errors.Join(svc.demonstrate(ctx, *seed, p.stdout), svc.close())
}

// demonstrate declares the plant, gives it a past, and serves while it goes on
// reporting.
func (svc *service) demonstrate(ctx context.Context, seed uint64, stdout io.Writer) error {
	f := newFeed(plant(), seed, time.Now())
	if err := f.declare(ctx, svc.keeper); err != nil {
		return err
	}
	if err := f.postPast(ctx, svc.keeper); err != nil {
		return err
	}
	if err := svc.announce(stdout); err != nil {
		return err
	}
	printTour(stdout, "http://"+svc.http.Addr().String())

	ctx, stop := context.WithCancel(ctx)
	var feeding sync.WaitGroup
	feeding.Go(func() { svc.feedLive(ctx, f) })
	err := svc.serve(ctx)
	stop()
	feeding.Wait()
	return err
}

// feedLive posts what the plant reports, each second, until ctx ends.
func (svc *service) feedLive(ctx context.Context, f *feed) {
	ticker := time.NewTicker(time.Second)
	defer ticker.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case now := <-ticker.C:
			if err := f.postNow(ctx, svc.keeper, now); err != nil && ctx.Err() == nil {
				svc.logger.Warn("the plant's readings were not taken", "error", err)
			}
		}
	}
}

// printTour names the calls worth trying, in the order in which they tell
// something.
func printTour(w io.Writer, base string) {
	gap := base + "/v1/quantities/" + string(driftingID)
	dead := base + "/v1/quantities/" + string(silentID)
	fmt.Fprintf(w, `
An invented harbour ice plant and cold store reports %d quantities, most of them each second.

All beliefs, for people and for programs:
  curl -s -H 'Accept: text/plain' %[2]s/v1/beliefs
  curl -s %[2]s/v1/beliefs
A coupling gap that drifts out of its tolerance within two minutes; watch its verdict change:
  curl -s -H 'Accept: text/plain' %[3]s/belief
  curl -sN '%[2]s/v1/beliefs:watch?prefix=%[5]s'
An instrument that dies after half a minute; the belief widens until nobody can say:
  curl -s -H 'Accept: text/plain' %[4]s/belief
A bearing that wears; when will its play reach the limit?
  curl -s -H 'Accept: text/plain' '%[6]s/forecast?horizon=1800s&steps=6'
Two probes that disagree: what is believed of their biases, and what makes up the uncertainty:
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/store-4.temperature/belief
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/store-4.temperature/belief:budget
A gauge past its due date, and a transmitter that is read faster than it settles:
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/ice-crusher.blade-gap/belief
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/brine-pump-1.delivery-pressure/belief:budget
  curl -s -H 'Accept: text/plain' %[2]s/v1/instruments
A display coarser than the noise, readings some of which are interference, a residual on a logarithmic scale:
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/compressor-1.oil-temperature/belief
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/machine-room.ammonia/belief
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/dosing.chlorine-residual/belief
Do readings fall where they were foretold?
  curl -s -H 'Accept: text/plain' %[2]s/v1/quantities/store-1.temperature/model_check
The bearing is replaced; its play starts anew, as its gauge's bias does not:
  curl -s -d '{"reason":"new bearing","prior":{"mean":0.15,"standard_deviation":0.03}}' %[6]s:renew
How probable is it that the gap is below 0.85 mm?
  curl -s '%[3]s/belief?threshold=0.85'
Post a reading of your own:
  curl -s -d '{"value":0.83,"reading_id":"by-hand-1"}' %[3]s/readings
What Prometheus scrapes:
  curl -s %[2]s/metrics | grep breach_probability

Leadline informs; it is not a safety system. Keep the interlocks, relief valves and gas
detectors that act by themselves. Ctrl-C stops the demo and removes its data.
`, len(plant()), base, gap, dead, string(driftingID), base+"/v1/quantities/"+string(bearingID))
}
