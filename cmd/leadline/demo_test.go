package main

import (
	"context"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/decide"
	"leadline.example/engine/ledgertest"
)

// demoStart is when the plant of these tests starts; no clock is read.
var demoStart = time.Date(2026, 3, 1, 6, 0, 0, 0, time.UTC)

// runPlant lets the plant report for some seconds and calls look after each.
func runPlant(t *testing.T, seconds int, look func(second int, belief func(engine.QuantityID) engine.Belief)) {
	t.Helper()
	memory := ledgertest.NewMemory(func() time.Time { return demoStart })
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) { return memory, nil }})
	if err != nil {
		t.Fatal(err)
	}
	f := newFeed(plant(), 1, demoStart)
	if err := f.declare(t.Context(), keeper); err != nil {
		t.Fatal(err)
	}
	if err := f.postPast(t.Context(), keeper); err != nil {
		t.Fatal(err)
	}
	for second := 1; second <= seconds; second++ {
		now := demoStart.Add(time.Duration(second) * time.Second)
		if err := f.postNow(t.Context(), keeper, now); err != nil {
			t.Fatal(err)
		}
		look(second, func(id engine.QuantityID) engine.Belief {
			b, err := keeper.Belief(t.Context(), id, engine.BeliefQuery{Now: engine.InstantOf(now)})
			if err != nil {
				t.Fatal(err)
			}
			return b
		})
	}
	if err := keeper.Close(); err != nil {
		t.Fatal(err)
	}
}

// TestDemoTellsItsStory holds the demo to what its tour says.
func TestDemoTellsItsStory(t *testing.T) {
	var breach, undecided, unsettled int
	runPlant(t, 240, func(second int, belief func(engine.QuantityID) engine.Belief) {
		if breach == 0 && belief(driftingID).Verdict == decide.Breaches {
			breach = second
		}
		if undecided == 0 && belief(silentID).Verdict == decide.Inconclusive {
			undecided = second
		}
		for _, id := range []engine.QuantityID{"brine-pump-3.flow", "compressor-1.oil-temperature", "machine-room.ammonia"} {
			if belief(id).Verdict != decide.Conforms {
				unsettled++
			}
		}
	})
	if breach < 60 || breach > 120 {
		t.Errorf("the drifting gap breaches after %d s, want 60 to 120: time to see it coming, within two minutes", breach)
	}
	if undecided < 60 || undecided > 240 {
		t.Errorf("the silent store is inconclusive after %d s, want 60 to 240: after its last reading, before anyone gives up", undecided)
	}
	if unsettled > 0 {
		t.Errorf("healthy quantities are not CONFORMS %d times; noise and coarse displays must not cry wolf", unsettled)
	}
}

// TestDemoFlowHasReadingsOutside shows why the noisy quantity is in the demo:
// comparing each of its readings with the limits would cry wolf.
func TestDemoFlowHasReadingsOutside(t *testing.T) {
	f := newFeed(plant(), 1, demoStart)
	var p recorder
	for second := 1; second <= 240; second++ {
		if err := f.postNow(t.Context(), &p, demoStart.Add(time.Duration(second)*time.Second)); err != nil {
			t.Fatal(err)
		}
	}
	outside := 0
	for _, r := range p.readings {
		if r.Quantity == "brine-pump-3.flow" && (r.Value < 32 || r.Value > 50) {
			outside++
		}
	}
	if outside < 3 {
		t.Errorf("%d readings of the flow lie outside its tolerance, want some", outside)
	}
}

// TestDemoRepeatsItself wants the same readings from the same seed.
func TestDemoRepeatsItself(t *testing.T) {
	var a, b recorder
	for _, p := range []*recorder{&a, &b} {
		f := newFeed(plant(), 7, demoStart)
		if err := f.postPast(t.Context(), p); err != nil {
			t.Fatal(err)
		}
	}
	if len(a.readings) == 0 || len(a.readings) != len(b.readings) {
		t.Fatalf("%d and %d readings", len(a.readings), len(b.readings))
	}
	for i := range a.readings {
		if a.readings[i] != b.readings[i] {
			t.Fatalf("reading %d is %+v, then %+v", i, a.readings[i], b.readings[i])
		}
	}
}

// recorder is a poster that applies everything and remembers it.
type recorder struct{ readings []engine.Reading }

func (r *recorder) Post(_ context.Context, b engine.Batch) ([]engine.Result, error) {
	r.readings = append(r.readings, b.Readings...)
	results := make([]engine.Result, len(b.Readings))
	for i := range results {
		results[i].Status = engine.Applied
	}
	return results, nil
}
