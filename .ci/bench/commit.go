package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"time"

	"golang.org/x/sync/errgroup"

	"leadline.example/engine"
	"leadline.example/persist"
)

// commit measures each commit exactly: engine and ledger within this process,
// checkpoints on, under batches from four callers and singles from 64.
func (b *bench) commit() error {
	for _, n := range []int{quantities, 10 * quantities} {
		if b.quick && n > quantities {
			continue
		}
		if err := b.profiled(fmt.Sprint("commit-", n), func() error { return b.commitOf(n) }); err != nil {
			return err
		}
	}
	return nil
}

// commits notes how long each commit took.
type commits struct {
	mu      sync.Mutex // guards all below
	took    []time.Duration
	records int
	pieces  int // with a piece of checkpoint
}

func (c *commits) add(took time.Duration, records, _, checkpointBytes int) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.took = append(c.took, took)
	c.records += records
	if checkpointBytes > 0 {
		c.pieces++
	}
}

func (b *bench) commitOf(n int) (err error) {
	dir := filepath.Join(b.tmp, fmt.Sprint("commit-", n))
	if err := os.Mkdir(dir, 0o700); err != nil {
		return err
	}
	seen := new(commits)
	path := filepath.Join(dir, persist.FileName)
	k, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) {
		return persist.Open(persist.Options{Path: path, OnCommit: seen.add})
	}})
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, k.Close()) }()
	if err := declareInProcess(b.ctx, k, n); err != nil {
		return err
	}
	for _, load := range []struct{ callers, batch int }{{4, perMessage}, {64, 1}} {
		*seen = commits{}
		began := time.Now()
		if err := postInProcess(b.ctx, k, newFeeds(fmt.Sprint("c", load.batch, "-"), n, load.callers), load.batch, 3*b.window); err != nil {
			return err
		}
		seen.mu.Lock()
		fmt.Printf("commits, %6d quantities, %2d callers, %4d a batch: %v; %d commits, %.0f records each, %d with a piece of checkpoint; %.0f readings/s\n",
			n, load.callers, load.batch, quantilesOf(seen.took), len(seen.took), float64(seen.records)/float64(len(seen.took)), seen.pieces,
			float64(seen.records)/time.Since(began).Seconds())
		seen.mu.Unlock()
	}
	return nil
}

func declareInProcess(ctx context.Context, k *engine.Keeper, n int) error {
	group, ctx := errgroup.WithContext(ctx)
	for c := range callers {
		group.Go(func() error {
			for i := c; i < n; i += callers {
				_, _, err := k.Declare(ctx, engine.QuantityID(quantityID(i)), engineDeclaration(i), engine.Condition{}, engine.InstantOf(time.Now()))
				if err != nil {
					return err
				}
			}
			return nil
		})
	}
	return group.Wait()
}

// engineDeclaration is declaration for the engine.
func engineDeclaration(i int) engine.Declaration {
	d := engine.Declaration{
		Unit: "Cel", Description: fmt.Sprintf("temperature at point %d", i),
		Tolerance:     engine.Tolerance{HasLower: true, Lower: -26, HasUpper: true, Upper: -18},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityLearnedReference},
	}
	if walks(i) {
		d.Prior = engine.Prior{Form: engine.PriorNormal, Mean: -21, StandardDeviation: 3}
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.8}
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.5, Per: time.Hour}
	}
	return d
}

func postInProcess(ctx context.Context, k *engine.Keeper, feeds []*feed, size int, d time.Duration) error {
	until := time.Now().Add(d)
	group, ctx := errgroup.WithContext(ctx)
	for _, f := range feeds {
		f.catchUp()
		group.Go(func() error {
			for time.Now().Before(until) {
				b := engine.Batch{Receive: engine.InstantOf(time.Now()), Readings: make([]engine.Reading, size)}
				for i := range b.Readings {
					f.next()
					b.Readings[i] = engine.Reading{
						Quantity: engine.QuantityID(f.quantity), Value: f.value, HasTime: true,
						Time: engine.InstantOf(f.at), ID: engine.ReadingID(f.appendID(nil)),
					}
				}
				results, err := k.Post(ctx, b)
				if err != nil {
					return err
				}
				for i := range results {
					if results[i].Status != engine.Applied {
						return fmt.Errorf("reading %s is %v: %s", results[i].ReadingID, results[i].Status, results[i].Detail)
					}
				}
			}
			return nil
		})
	}
	return group.Wait()
}
