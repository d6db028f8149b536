package main

import (
	"errors"
	"fmt"
	"path/filepath"
	"testing"

	"leadline.example/engine/posterior"
)

// update compares one update of a constant belief with the bare
// precision-weighted mean.
func (b *bench) update() error {
	var ours, bare series
	var allocations int64
	for range b.rounds {
		result := testing.Benchmark(func(t *testing.B) {
			var c posterior.Constant
			for i := range t.N {
				c.AddKnown(20+float64(i&7), 0.5)
			}
			if c.Count() != t.N {
				t.Fatal(c.Count())
			}
		})
		allocations += result.AllocsPerOp()
		ours = append(ours, float64(result.T.Nanoseconds())/float64(result.N))
		result = testing.Benchmark(func(t *testing.B) {
			var mean, weight float64
			for i := range t.N {
				u := 0.5
				w := 1 / (u * u)
				weight += w
				mean += w / weight * (20 + float64(i&7) - mean)
			}
			if !(mean > 0) && t.N > 0 {
				t.Fatal(mean)
			}
		})
		bare = append(bare, float64(result.T.Nanoseconds())/float64(result.N))
	}
	fmt.Printf("one update: %.1f ns; bare precision-weighted mean: %.1f ns; allocations %d\n", ours.median(), bare.median(), allocations)
	b.figure("update of a constant belief / bare weighted mean", ours.over(bare).median(), 5, true)
	b.figure("allocations of an update", float64(allocations), 0, true)
	return nil
}

// stream compares the gRPC stream with a bare loop over the storage library
// and with a handler that only decodes and answers.
func (b *bench) stream() (err error) {
	service, err := b.serve("stream")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, service.stop()) }()
	if err := declareAll(b.ctx, service, quantities); err != nil {
		return err
	}
	stock, err := b.standIn("stock")
	if err != nil {
		return err
	}
	defer stock.kill()
	nothing, err := b.standIn("nothing")
	if err != nil {
		return err
	}
	defer nothing.kill()
	loop, err := openBoltLoop(filepath.Join(b.tmp, "bare.db"))
	if err != nil {
		return err
	}
	defer loop.db.Close()

	contenders := []contender{{"bare bbolt loop, 64-byte records, groups of 1,000", loop.run, nil}}
	for _, c := range []struct {
		name string
		at   *process
	}{
		{"gRPC stream to the service", service},
		{"gRPC stream to a handler that decodes and answers", stock},
		{"gRPC stream to the server with nothing behind it", nothing},
	} {
		load, err := newStreamLoad(c.at.GRPC, "s", quantities)
		if err != nil {
			return err
		}
		defer load.close()
		if c.at == service {
			if err := b.age(load); err != nil {
				return err
			}
		}
		contenders = append(contenders, contender{c.name, load.run, c.at})
	}
	r, err := b.alternate(contenders...)
	if err != nil {
		return err
	}
	b.ratio("gRPC stream / bare bbolt loop", r[1], r[0], 0.8)
	b.ratio("gRPC stream / handler that decodes and answers", r[1], r[2], 0)
	b.ratio("gRPC stream / same server with nothing behind it", r[1], r[3], 0)
	return nil
}

// age fills the service with twice the readings whose IDs it remembers, so
// that what is measured is its steady state and not its youth.
func (b *bench) age(load *streamLoad) error {
	if b.quick {
		return nil
	}
	const remembered = 1_000_000
	_, err := load.runCount(2 * remembered)
	return err
}

// restContenders starts the service and stand-ins and a load for each.
func (b *bench) restContenders(connections, batch int, standIns ...string) (loads []*restLoad, servers []*process, stop func() error, err error) {
	stop = func() error {
		for _, l := range loads {
			l.close()
		}
		var errs []error
		for _, s := range servers {
			errs = append(errs, s.stop())
		}
		return errors.Join(errs...)
	}
	for i, name := range append([]string{""}, standIns...) {
		var s *process
		if i == 0 {
			s, err = b.serve(fmt.Sprintf("rest-%d-%d", connections, batch))
		} else {
			s, err = b.standIn(name)
		}
		if err != nil {
			return nil, nil, nil, errors.Join(err, stop())
		}
		servers = append(servers, s)
		if name == "" || name == "unledgered" {
			err = declareAll(b.ctx, s, quantities)
		}
		var l *restLoad
		if err == nil {
			l, err = newRESTLoad(s.HTTP, "r", connections, batch)
		}
		if err != nil {
			return nil, nil, nil, errors.Join(err, stop())
		}
		loads = append(loads, l)
	}
	return loads, servers, stop, nil
}

// batch compares batches over REST with the same endpoint that has nothing
// behind it, and that with the stock gateway.
func (b *bench) batch() (err error) {
	loads, servers, stop, err := b.restContenders(4, perMessage, "nothing", "stock")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, stop()) }()
	r, err := b.alternate(
		contender{"REST batches of 1,000 to the service, 4 connections", loads[0].run, servers[0]},
		contender{"  to the same endpoint with nothing behind it", loads[1].run, servers[1]},
		contender{"  to the stock gateway with nothing behind it", loads[2].run, servers[2]},
	)
	if err != nil {
		return err
	}
	b.ratio("REST batch / endpoint with nothing behind it", r[0], r[1], 0.35)
	b.ratio("endpoint with nothing behind it / stock gateway", r[1], r[2], 3)
	return nil
}

// single compares single posts over REST with the same handler without ledger.
func (b *bench) single() error {
	for _, connections := range []int{64, 1} {
		if err := b.singleFrom(connections); err != nil {
			return err
		}
	}
	return nil
}

func (b *bench) singleFrom(connections int) (err error) {
	loads, servers, stop, err := b.restContenders(connections, 0, "nothing", "unledgered")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, stop()) }()
	r, err := b.alternate(
		contender{fmt.Sprintf("single REST posts to the service, connections: %d", connections), loads[0].run, servers[0]},
		contender{"  to the same handler without engine and ledger", loads[1].run, servers[1]},
		contender{"  to the same handler with engine, without ledger", loads[2].run, servers[2]},
	)
	if err != nil {
		return err
	}
	for i, name := range []string{"service", "nothing behind it", "engine, no ledger"} {
		fmt.Printf("  %-30s %v (last turn)\n", name, quantilesOf(loads[i].took))
	}
	bound := 0.45
	if connections == 1 {
		bound = 0 // a lone client waits for the disk each time
	}
	b.ratio(fmt.Sprintf("single posts, connections %d / no engine, no ledger", connections), r[0], r[1], bound)
	b.ratio(fmt.Sprintf("single posts, connections %d / engine without ledger", connections), r[0], r[2], bound)
	return nil
}
