//go:build services

package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/persist"
)

// step is one end of a call.
type step struct {
	line int
	run  func()
}

// cutPower tries one image for each of the chosen moments, and returns what
// went wrong and how many there were.
func (r *recording) cutPower(t *testing.T, random *rand.Rand, cuts int) (losses []error, tried int) {
	t.Helper()
	d := newDisk(r.root)
	promised := map[identity]bool{}
	var steps []step
	for _, e := range r.events {
		steps = append(steps, step{e.begun, func() { d.begin(e) }}, step{e.ended, func() { d.end(e) }})
	}
	for line, keys := range r.answered {
		steps = append(steps, step{line, func() {
			for _, k := range keys {
				promised[k] = true
			}
		}})
	}
	slices.SortStableFunc(steps, func(a, b step) int { return a.line - b.line })
	at := r.chooseCuts(random, steps, cuts)
	done := 0
	for i, cut := range at {
		for ; done < cut; done++ {
			steps[done].run()
		}
		if err := r.tryImage(t, d, random, promised, i%10 == 0); err != nil {
			losses = append(losses, fmt.Errorf("cut %d, before step %d of %d: %w", i+1, cut+1, len(steps), err))
		}
	}
	return losses, len(at)
}

// chooseCuts returns in order, as numbers of steps, every moment until the
// first answer, so that the making of the ledger is covered, and cuts others.
func (r *recording) chooseCuts(random *rand.Rand, steps []step, cuts int) []int {
	first := slices.Min(slices.Collect(maps.Keys(r.answered)))
	var at []int
	for i, s := range steps {
		if s.line <= first {
			at = append(at, i)
		}
	}
	for range cuts {
		at = append(at, random.IntN(len(steps)+1))
	}
	slices.Sort(at)
	return at
}

func (r *recording) tryImage(t *testing.T, d *disk, random *rand.Rand, promised map[identity]bool, believe bool) error {
	dir, err := os.MkdirTemp(t.TempDir(), "image")
	if err != nil {
		t.Fatal(err)
	}
	defer os.RemoveAll(dir)
	if err := d.image(dir, random); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, "data", persist.FileName)
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) && len(promised) == 0 {
		return nil // cut before there was a ledger
	}
	found, err := readImage(path)
	if err != nil {
		return err
	}
	for _, e := range found {
		key := identity{e.quantity, e.id}
		if r.sent[key] != sentAs(e) {
			return fmt.Errorf("the image holds %+v, sent was %+v", e, r.sent[key])
		}
	}
	for key := range promised {
		if _, ok := found[key]; !ok {
			return fmt.Errorf("reading %s was acknowledged and is lost (%d of %d are there)", key.id, len(found), len(promised))
		}
	}
	if believe {
		return checkImageBeliefs(t.Context(), path, found)
	}
	return nil
}

// sentAs is an entry read back as its client remembers it.
func sentAs(e entry) entry {
	e.answered = true
	return e
}

// readImage opens a ledger and returns its applied readings.
func readImage(path string) (map[identity]entry, error) {
	ledger, err := persist.Open(persist.Options{Path: path, Now: time.Now})
	if err != nil {
		return nil, fmt.Errorf("open the image: %w", err)
	}
	found := map[identity]entry{}
	names := map[engine.QuantityNumber]engine.QuantityID{}
	err = ledger.Replay(1, func(rec *engine.Record) error {
		switch rec.Kind {
		case engine.KindDeclaration:
			names[rec.Number] = rec.Quantity
		case engine.KindReading:
			key := identity{names[rec.Number], rec.Reading.ID}
			if _, ok := found[key]; ok {
				return fmt.Errorf("reading %s is there twice", key.id)
			}
			found[key] = entry{quantity: key.quantity, id: key.id, time: rec.Reading.Time, value: rec.Reading.Value}
		default:
			return fmt.Errorf("the image holds a record of kind %d, which nobody asked for", rec.Kind)
		}
		return nil
	})
	return found, errors.Join(err, ledger.Close())
}

// checkImageBeliefs starts a keeper on the image and one afresh on the same
// readings; their beliefs must be the same to the bit. Then the image must
// take a further reading.
func checkImageBeliefs(ctx context.Context, path string, found map[identity]entry) error {
	j := &journal{}
	for _, e := range found {
		j.entries = append(j.entries, e)
	}
	at := engine.InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	fresh, err := freshKeeper(ctx, []*journal{j}, at, rand.New(rand.NewPCG(1, 1)))
	if err != nil {
		return err
	}
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) {
		return persist.Open(persist.Options{Path: path, Now: time.Now})
	}})
	if err != nil {
		return fmt.Errorf("start on the image: %w", err)
	}
	for _, item := range crashPlan {
		if _, err := keeper.Quantity(item.id); err != nil {
			continue // cut before it was declared
		}
		got, err := freshBelief(ctx, keeper, item.id, at)
		if err != nil {
			return err
		}
		want, err := freshBelief(ctx, fresh, item.id, at)
		if err != nil {
			return err
		}
		if got != want {
			return fmt.Errorf("%s: belief from the image %+v, afresh %+v", item.id, got, want)
		}
	}
	return errors.Join(takeOneMore(ctx, keeper, at), keeper.Close(), fresh.Close())
}

func takeOneMore(ctx context.Context, keeper *engine.Keeper, at engine.Instant) error {
	item := crashPlan[0]
	if _, _, err := keeper.Declare(ctx, item.id, item.declaration, engine.Condition{}, at); err != nil {
		return err
	}
	results, err := keeper.Post(ctx, engine.Batch{Receive: at, Readings: []engine.Reading{
		{Quantity: item.id, ID: "one-more", Value: item.level},
	}})
	if err != nil {
		return err
	}
	if results[0].Status != engine.Applied {
		return fmt.Errorf("one more reading is %v %s", results[0].Status, results[0].Detail)
	}
	return nil
}
