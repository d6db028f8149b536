package engine_test

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/modelcheck"
)

// shifted returns readings about 100 of which all from one on are higher by a shift.
func shifted(rng *rand.Rand, n, from int, shift, r float64) []engine.Reading {
	var all []engine.Reading
	for i := range n {
		y := 100 + r*rng.NormFloat64()
		if i >= from {
			y += shift
		}
		all = append(all, reading(gapID, seconds(float64(60*i)), y, engine.ReadingID(fmt.Sprintf("%03d", i))))
	}
	return all
}

// detected returns the number of the first reading at which Page's sums of normal scores
// exceed 12.7 (k = 0.5), for a level that walks and is read with r, from the textbook's
// recursion; -1 if they don't.
func detected(readings []engine.Reading, mean, variance, walk, r float64) int {
	up, down := 0.0, 0.0
	for i := range readings {
		if i > 0 {
			variance += walk * walk
		}
		s := math.Sqrt(variance + r*r)
		z := (readings[i].Value - mean) / s
		up, down = math.Max(0, up+z-0.5), math.Max(0, down-z-0.5)
		if math.Max(up, down) > 12.7 {
			return i
		}
		gain := variance / (variance + r*r)
		mean, variance = mean+gain*(readings[i].Value-mean), gain*r*r
	}
	return -1
}

// stepRows are declarations of a quantity that is read with r = 0.5.
func stepRows() map[string]engine.Declaration {
	d := engine.Declaration{
		Unit: "mm", Prior: engine.Prior{Form: engine.PriorNormal, Mean: 100, StandardDeviation: 1},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.5},
	}
	walks := func(d *engine.Declaration) {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.02, Per: time.Minute}
	}
	learns := func(d *engine.Declaration) {
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.5, Worth: 10}
	}
	return map[string]engine.Declaration{
		"constant":         d,
		"constant learned": with(d, learns),
		"walk":             with(d, walks),
		"walk learned":     with(d, func(d *engine.Declaration) { walks(d); learns(d) }),
		"outliers": with(d, func(d *engine.Declaration) {
			walks(d)
			d.Outliers = engine.Outliers{Probability: 0.001, Inflation: 3}
		}),
	}
}

func (r *rig) steps() []engine.RecordedStep {
	r.t.Helper()
	all, err := r.keeper.Steps(gapID)
	if err != nil {
		r.t.Fatal(err)
	}
	return all
}

// awaitSteps returns the published steps once there are as many; a step is recorded soon after
// the readings that show it.
func (r *rig) awaitSteps(n int) []engine.RecordedStep {
	r.t.Helper()
	for range 10_000_000 {
		if all := r.steps(); len(all) >= n {
			return all
		}
		r.keeper.Stats()
	}
	r.t.Fatalf("%v are published, want %d", r.steps(), n)
	return nil
}

// A backlog that shifts up and later down publishes both steps, as readings one by one do.
func TestEveryStepOfABacklogIsPublished(t *testing.T) {
	d := stepRows()["walk"]
	d.StepDetection.Widen = 1
	readings := shifted(rand.New(rand.NewPCG(*seed+3, 6)), 120, 40, 3, 0.5)
	for i := 80; i < len(readings); i++ {
		readings[i].Value -= 3
	}
	var found [2][]engine.RecordedStep
	for k, batch := range [...]int{1, len(readings)} {
		r := newRig(t, engine.Options{})
		r.declare(gapID, d)
		for chunk := range slices.Chunk(readings, batch) {
			r.post(seconds(1e5), chunk...)
		}
		b := r.settled(gapID, engine.BeliefQuery{Now: seconds(1e5)})
		found[k] = r.awaitSteps(1)
		if batch == 1 {
			found[k] = r.awaitSteps(2)
		}
		if b.Check.Steps != 2 {
			t.Errorf("-seed %d: in batches of %d there are %d steps, want 2", *seed, batch, b.Check.Steps)
		}
	}
	if len(found[1]) != len(found[0]) {
		t.Errorf("-seed %d: of a backlog %d steps are published, of the same readings one by one %d", *seed, len(found[1]), len(found[0]))
	}
}

// A shift of three r is published once, by the reading at which it is detected, and stays
// published: through restarts, a kill between detection and record, and late readings.
func TestStepIsPublishedOnce(t *testing.T) {
	for name, d := range stepRows() {
		t.Run(name, func(t *testing.T) {
			for _, s := range seeds(2) {
				rng := rand.New(rand.NewPCG(s, 5))
				readings := shifted(rng, 68, 60, 1.5, 0.5)
				r := newRig(t, engine.Options{CheckpointRecords: 10})
				r.declare(gapID, d)
				r.ledger.SetFault(func(_ int, g *engine.Group) error {
					for i := range g.Records {
						if g.Records[i].Kind == engine.KindStep {
							return engine.ErrStorageFailed
						}
					}
					return nil
				})
				for len(readings) > 0 && r.keeper.Health() == nil {
					if _, err := r.keeper.Post(context.Background(), engine.Batch{Readings: readings[:1], Receive: seconds(1e5)}); err != nil {
						break
					}
					readings = readings[1:]
				}
				for len(readings) == 0 && r.keeper.Health() == nil {
					r.keeper.Stats() // the record is on its way
				}
				r.ledger.SetFault(nil)
				r.restart(false)
				if len(readings) > 0 {
					r.post(seconds(1e5), readings...)
				}
				first := r.awaitSteps(1)
				if x := first[0]; len(first) != 1 || !x.Up || x.Time < seconds(60*60) || x.Since < seconds(50*60) || x.Since > seconds(60*60) {
					t.Errorf("-seed %d: published is %+v, want one step up from the reading after %v on", s, first, seconds(59*60))
				}
				if known := d.Repeatability.Form == engine.RepeatabilityKnown && d.Outliers == (engine.Outliers{}); known {
					want := detected(shifted(rand.New(rand.NewPCG(s, 5)), 68, 60, 1.5, 0.5), 100, 1, d.Dynamics.StandardDeviation, 0.5)
					if first[0].Time != seconds(float64(60*want)) {
						t.Errorf("-seed %d: the step is detected at %v, want that of reading %d, %v", s, first[0].Time, want, seconds(float64(60*want)))
					}
				}
				r.restart(true)
				late := reading(gapID, seconds(60*60+30), 101.5, "late")
				early := reading(gapID, seconds(30), 100, "early")
				r.post(seconds(1e5), late, early)
				r.settled(gapID, engine.BeliefQuery{Now: seconds(1e5)})
				for _, clean := range []bool{false, true} {
					r.restart(clean)
					if all := r.awaitSteps(1); all[0] != first[0] {
						t.Errorf("-seed %d: after late readings and a restart %+v is published, was %+v", s, all, first)
					}
				}
			}
		})
	}
}

// With on_step.widen the belief recovers: from the detecting reading on it is that of a level
// that may have moved then, and without, it is far behind.
func TestWideningAtAStepIsPartOfTheFold(t *testing.T) {
	for name, d := range stepRows() {
		if name == "constant" || name == "constant learned" {
			continue // the oracle of a level that stays has no widening
		}
		t.Run(name, func(t *testing.T) {
			d.StepDetection.Widen = 2
			for _, s := range seeds(2) {
				rng := rand.New(rand.NewPCG(s, 5))
				readings := shifted(rng, 40, 24, 2, 0.5)
				r := newRig(t, engine.Options{CheckpointRecords: 7})
				r.declare(gapID, d)
				sent := slices.Clone(readings)
				rng.Shuffle(30, func(i, j int) { sent[i], sent[j] = sent[j], sent[i] })
				r.post(seconds(1e5), sent[:35]...)
				r.restart(false)
				r.post(seconds(1e5), sent[35:]...)
				at := readings[len(readings)-1].Time
				b := r.settled(gapID, engine.BeliefQuery{HasTime: true, Time: at})
				if b.Check.Steps != 1 || b.Check.LastStep.Direction != modelcheck.StepUp {
					t.Fatalf("-seed %d: %d steps are found, want one up", s, b.Check.Steps)
				}
				o := &dense{d: d, readings: readings}
				o.widened = 1 + slices.IndexFunc(readings, func(x engine.Reading) bool { return int64(x.Time) == b.Check.LastStep.At })
				if _, err := o.belief(at).compare(b.Level, o); err != nil {
					t.Errorf("-seed %d: %s: %v", s, b.Method, err)
				}
				if m, _ := b.Level.Mean(); math.Abs(m-102) > 1 {
					t.Errorf("-seed %d: the mean is %v after a step to 102", s, m)
				}
			}
		})
	}
}
