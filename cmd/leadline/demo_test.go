package main

import (
	"context"
	"errors"
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

// TestDemoInstrumentsTellTheirStory holds the demo's instruments to what the tour and
// their descriptions say.
func TestDemoInstrumentsTellTheirStory(t *testing.T) {
	memory := ledgertest.NewMemory(func() time.Time { return demoStart })
	keeper, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) { return memory, nil }})
	if err != nil {
		t.Fatal(err)
	}
	defer keeper.Close()
	f := newFeed(plant(), 1, demoStart)
	if err := errors.Join(f.declare(t.Context(), keeper), f.postPast(t.Context(), keeper)); err != nil {
		t.Fatal(err)
	}
	now := demoStart
	for range 180 {
		now = now.Add(time.Second)
		if err := f.postNow(t.Context(), keeper, now); err != nil {
			t.Fatal(err)
		}
	}
	belief := func(id engine.QuantityID) engine.Belief {
		b, err := keeper.Belief(t.Context(), id, engine.BeliefQuery{Now: engine.InstantOf(now)})
		if err != nil {
			t.Fatal(err)
		}
		return b
	}
	if b := belief("ice-crusher.blade-gap"); b.Flagged[engine.CalibrationOverdue] == 0 || b.Flagged[engine.CalibrationOverdue] != b.ReadingCount {
		t.Errorf("%d of %d readings of the blade gap are overdue, want all", b.Flagged[engine.CalibrationOverdue], b.ReadingCount)
	}
	b := belief("store-4.temperature")
	if len(b.Biases) != 2 {
		t.Fatalf("biases %+v, want two", b.Biases)
	}
	// returnProbe comes before wallProbe; they really differ by 0.65.
	if apart := b.Biases[1].Mean - b.Biases[0].Mean; apart < 0.6 || apart > 0.7 {
		t.Errorf("the probes are believed to differ by %v, want about 0.65", apart)
	}
	if b.Biases[0].StandardDeviation > 0.2 || b.Level.Scale() < 0.1 {
		t.Errorf("bias known to %v, level to %v: want less than the certificates' 0.25 each, and no better than their common part 0.1", b.Biases[0].StandardDeviation, b.Level.Scale())
	}
	if b := belief("brine-pump-1.delivery-pressure"); b.Level.Scale() < 0.01 {
		t.Errorf("the pressure is known to %v, better than its transmitter's bias", b.Level.Scale())
	}
	ahead, err := keeper.Forecast(t.Context(), bearingID, engine.ForecastQuery{Now: engine.InstantOf(now)})
	if err != nil || ahead.Median < 5*time.Minute || ahead.Median > 15*time.Minute {
		t.Errorf("the bearing reaches its limit after %v (%v), want some 9 minutes", ahead.Median, err)
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
