package engine_test

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

// Lists hold only quantities that have something to show, also while others
// are declared.
func TestListsWhileDeclaring(t *testing.T) {
	r := newRig(t, engine.Options{})
	done := make(chan struct{})
	var listing sync.WaitGroup
	listing.Go(func() {
		for {
			select {
			case <-done:
				return
			default:
			}
			r.keeper.Quantities("", "", 1000, true)
			if _, _, err := r.keeper.Beliefs(context.Background(), "", "", 1000, engine.BeliefQuery{Now: start}); err != nil {
				t.Error(err)
			}
		}
	})
	for i := range 300 {
		r.declare(engine.QuantityID(fmt.Sprint("store/", i)), gap())
	}
	close(done)
	listing.Wait()
}

// A full disk takes nothing away from what is published, and what was decided
// but not recorded is decided anew.
func TestFullDiskForgetsOnlyWhatWasNotDurable(t *testing.T) {
	r := newRig(t, engine.Options{CheckpointRecords: 3})
	ctx := context.Background()
	r.declare("gap", gap())
	for i := range 9 {
		r.post(start, reading("gap", seconds(float64(i)), 100, engine.ReadingID(fmt.Sprint(i))))
	}
	before, counts := r.belief("gap", engine.BeliefQuery{Now: start}), r.keeper.Stats().Counts
	r.ledger.SetFault(func(int, *engine.Group) error { return engine.ErrDiskFull })
	if _, _, err := r.keeper.Declare(ctx, "lost", gap(), engine.Condition{}, start); !errors.Is(err, engine.ErrDiskFull) {
		t.Fatalf("declare on a full disk: %v", err)
	}
	for range 2 { // each attempt finds the disk still full
		if err := r.keeper.Resume(); !errors.Is(err, engine.ErrDiskFull) {
			t.Fatalf("resume: %v", err)
		}
		after := r.belief("gap", engine.BeliefQuery{Now: start})
		if after.Level != before.Level || r.keeper.Stats().Counts[engine.Outcome{Status: engine.Applied}] != counts[engine.Outcome{Status: engine.Applied}] {
			t.Errorf("on a full disk the belief is %+v, want %+v", after.Level, before.Level)
		}
	}
	r.ledger.SetFault(nil)
	if err := r.keeper.Resume(); err != nil {
		t.Fatal(err)
	}
	if _, err := r.keeper.Quantity("lost"); err == nil {
		t.Error("a declaration that was never durable is there")
	}
	if res := r.post(start, reading("gap", start, 100, "0"), reading("lost", start, 100, "")); res[0].Status != engine.Duplicate || res[1].Reason != engine.UnknownQuantity {
		t.Errorf("got %v and %v, want DUPLICATE and UNKNOWN_QUANTITY", res[0].Status, res[1].Reason)
	}
	q := r.declare("lost", gap())
	r.post(start, reading("lost", start, 101, "x"))
	r.restart(false)
	if got, err := r.keeper.Quantity("lost"); err != nil || !cmp.Equal(got, q) {
		t.Errorf("after a restart %+v (%v), want %+v", got, err, q)
	}
	if b := r.belief("gap", engine.BeliefQuery{Now: start}); b.Level != before.Level {
		t.Errorf("after a restart the belief is %+v, want %+v", b.Level, before.Level)
	}
}

// One receipt by a clock that ran days ahead must not make the retries of the
// corrected clock's readings new.
func TestRetryAfterTheClockSteppedBack(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("gap", gap())
	r.post(start+engine.Instant(48*time.Hour), engine.Reading{Quantity: "gap", Value: 100, ID: "ahead"})
	for i, want := range []engine.Status{engine.Applied, engine.Duplicate} {
		if got := r.post(seconds(float64(i)), engine.Reading{Quantity: "gap", Value: 101, ID: "a"})[0]; got.Status != want {
			t.Errorf("sending %d: %v, want %v", i+1, got.Status, want)
		}
	}
}

// A scrape a moment before the latest reading of a constant quantity reads
// nothing from storage.
func TestRecentPastComesFromMemory(t *testing.T) {
	for name, d := range map[string]engine.Declaration{"constant": gap(), "walk": walking()} {
		var passes atomic.Int64
		ledger := ledgertest.NewMemory(nil)
		k, err := engine.New(engine.Options{
			Open:              func() (engine.Ledger, error) { return countingLedger{ledger, &passes}, nil },
			CheckpointRecords: 200,
		})
		if err != nil {
			t.Fatal(err)
		}
		r := &rig{t: t, keeper: k}
		t.Cleanup(func() { k.Close() })
		r.declare("gap", d)
		for i := range 3_000 {
			r.post(seconds(4e3), reading("gap", seconds(float64(i)), 100, ""))
		}
		b := r.belief("gap", engine.BeliefQuery{HasTime: true, Time: seconds(2998.5)})
		if b.ReadingCount != 2_999 || passes.Load() != 0 {
			t.Errorf("%s: %d readings from %d passes over stored rows, want 2999 from none", name, b.ReadingCount, passes.Load())
		}
	}
}

// What a rebuild leaves in memory keeps its place among equal times.
func TestEqualTimesKeepTheirOrderAfterARebuild(t *testing.T) {
	belief := func(rebuild bool) engine.Belief {
		r := newRig(t, engine.Options{CheckpointRecords: 5})
		d := walking()
		r.declare("gap", d)
		for i := range 20 {
			r.post(seconds(1e3), reading("gap", seconds(float64(i)), float64(100+i%7), engine.ReadingID(fmt.Sprint("z", i))))
		}
		if rebuild {
			r.restart(true)
			d.Repeatability.StandardDeviation = 2
			r.declare("gap", d)
			d.Repeatability.StandardDeviation = 1
			r.declare("gap", d)
			r.settled("gap", engine.BeliefQuery{Now: start})
		}
		for i := 15; i < 20; i++ {
			r.post(seconds(1e3), reading("gap", seconds(float64(i)), 90.5, engine.ReadingID(fmt.Sprint("a", i))))
		}
		return r.settled("gap", engine.BeliefQuery{Now: start})
	}
	if want, got := belief(false), belief(true); got.Level != want.Level {
		t.Errorf("after a rebuild %+v, without %+v", got.Level, want.Level)
	}
}
