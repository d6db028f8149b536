package engine_test

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine"
)

// The budget's parts sum to the variance of the belief, for every random case.
func TestBudgetSumsToTheBelief(t *testing.T) {
	for _, s := range seeds(60) {
		rng := rand.New(rand.NewPCG(s, 9))
		c := randomCase(rng, engine.DynamicsForm(s%4))
		r := newRig(t, engine.Options{CheckpointRecords: 1 + rng.IntN(20)})
		c.send(r, rng)
		at := c.last + engine.Instant(rng.IntN(1000))*1e9
		b := r.settled(gapID, engine.BeliefQuery{HasTime: true, Time: at})
		budget, err := r.keeper.Budget(context.Background(), gapID, engine.BudgetQuery{HasTime: true, Time: at})
		if err != nil {
			t.Fatal(err)
		}
		sd, known := b.Level.StandardDeviation()
		if !known {
			if len(budget.Undetermined) == 0 {
				t.Errorf("-seed %d: a budget of a belief that isn't there: %+v", s, budget)
			}
			continue
		}
		sum := 0.0
		for _, p := range budget.Parts {
			sum += p.Variance
		}
		if math.Abs(sum-sd*sd) > 1e-8*sd*sd || math.Abs(budget.Variance-sd*sd) > 1e-8*sd*sd {
			t.Errorf("-seed %d: parts sum to %v, variance %v, want %v: %+v", s, sum, budget.Variance, sd*sd, budget.Parts)
		}
	}
}

// Two instruments with equal weights, one of them calibrated twice against the same
// reference: worked out by hand. The estimate is the mean of what each says, so
// white noise and own biases count by a quarter, the common part in full.
func TestBudgetByHand(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, with(gap(), func(d *engine.Declaration) { d.Prior = engine.Prior{} }))
	for i := range 2 {
		r.declareInstrument(engine.InstrumentID(fmt.Sprint("gauge-", i)), engine.InstrumentDeclaration{
			Unit: "mm", Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.6},
			Calibrations: []engine.Calibration{{ValidFrom: seconds(-10), BiasStandardUncertainty: 0.5, Reference: "block", CommonStandardUncertainty: 0.3}},
		})
		for range 4 {
			r.post(start, engine.Reading{Quantity: gapID, Value: 100, Instrument: engine.InstrumentID(fmt.Sprint("gauge-", i))})
		}
	}
	b, err := r.keeper.Budget(context.Background(), gapID, engine.BudgetQuery{Now: start})
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range b.Parts {
		want := map[engine.BudgetSource]float64{
			engine.RepeatabilityNoise: 0.36 / 4 / 4, engine.Bias: (0.25 - 0.09) / 4, engine.CommonReference: 0.09,
		}[p.Source]
		if math.Abs(p.Variance-want) > 1e-12 {
			t.Errorf("%v %s %s contributes %v, want %v", p.Source, p.Instrument, p.Reference, p.Variance, want)
		}
	}
	if len(b.Parts) != 5 {
		t.Errorf("%d parts, want white noise and bias of each instrument and the reference: %+v", len(b.Parts), b.Parts)
	}
}

func TestBudgetIsRefusedWhereItIsNotSupported(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("learned", with(gap(), func(d *engine.Declaration) {
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	}))
	for _, id := range []engine.QuantityID{"learned", "stranger"} {
		if _, err := r.keeper.Budget(context.Background(), id, engine.BudgetQuery{Now: start}); err == nil {
			t.Errorf("%s has a budget", id)
		}
	}
}
