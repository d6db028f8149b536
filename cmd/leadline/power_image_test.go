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
	"os/exec"
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

// cutting says how the images of a recording are tried.
type cutting struct {
	cuts    int    // moments, besides those before the first answer
	birth   bool   // try every moment before the first answer too
	enough  int    // losses after which no more images are tried
	verify  int    // every how many images the command verify looks at one, before it is opened
	believe int    // every how many images a keeper starts on one
	binary  string // that verifies
}

// cutPower makes one image for each of the chosen moments and returns what is
// wrong with them and how many there were.
func (r *recording) cutPower(t *testing.T, random *rand.Rand, c cutting) (losses []error, tried int) {
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
	at := r.chooseCuts(random, steps, c)
	done := 0
	for i, cut := range at {
		for ; done < cut; done++ {
			steps[done].run()
		}
		tried++
		if err := r.tryImage(t, d, random, promised, c, i); err != nil {
			losses = append(losses, fmt.Errorf("cut %d, before step %d of %d: %w", i+1, cut+1, len(steps), err))
		}
		if len(losses) >= c.enough {
			break
		}
	}
	return losses, tried
}

// chooseCuts returns moments in order, as numbers of steps.
func (r *recording) chooseCuts(random *rand.Rand, steps []step, c cutting) []int {
	first := slices.Min(slices.Collect(maps.Keys(r.answered)))
	var at []int
	answered := 0
	for i, s := range steps {
		if s.line > first {
			answered = i
			break
		}
		if c.birth {
			at = append(at, i)
		}
	}
	for range c.cuts {
		at = append(at, answered+random.IntN(len(steps)+1-answered))
	}
	slices.Sort(at)
	return at
}

func (r *recording) tryImage(t *testing.T, d *disk, random *rand.Rand, promised map[identity]bool, c cutting, i int) error {
	t.Helper()
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
	if i%c.verify == 0 {
		if err := verifyImage(t, c.binary, path); err != nil {
			return err
		}
	}
	found, err := readImage(path)
	if err != nil {
		return err
	}
	if err := r.compare(promised, found); err != nil {
		return err
	}
	if i%c.believe == 0 {
		return checkImageBeliefs(t.Context(), path, found)
	}
	return nil
}

// verifyImage lets the command look at an image, in a process of its own. A
// file that was never synced may hold anything, and the command must come to
// a verdict on that too.
func verifyImage(t *testing.T, binary, path string) error {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	defer cancel()
	cmd := exec.CommandContext(ctx, binary, "verify", path)
	out, err := cmd.CombinedOutput()
	if err == nil {
		return nil
	}
	if code := cmd.ProcessState.ExitCode(); code != exitLedger {
		t.Errorf("verify ends with %d on a damaged image, want %d: %.2000s", code, exitLedger, out)
	}
	return fmt.Errorf("verify the image: %w: %.200s", err, out)
}

// compare tells whether an image holds what was promised and nothing that was
// never sent.
func (r *recording) compare(promised map[identity]bool, found map[identity]entry) error {
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
		case engine.KindInstrument: // those of the plan, which name no reading
		case engine.KindStep: // found in the readings
			if names[rec.Number] == "" {
				return fmt.Errorf("a step of quantity number %d, which isn't declared", rec.Number)
			}
		case engine.KindReading:
			key := identity{names[rec.Number], rec.Reading.ID}
			if _, ok := found[key]; ok {
				return fmt.Errorf("reading %s is there twice", key.id)
			}
			found[key] = entry{quantity: key.quantity, id: key.id, time: rec.Reading.Time, value: rec.Reading.Value,
				by: rec.Reading.Instrument, occasion: rec.Reading.Occasion}
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
