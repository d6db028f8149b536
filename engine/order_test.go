package engine_test

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
)

func walking() engine.Declaration {
	d := gap()
	d.Prior = engine.Prior{}
	d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.3, Per: time.Minute}
	return d
}

// walkReadings is an invented walk with a reading every 10 seconds, each with
// an ID; some share their time.
func walkReadings(rng *rand.Rand, n int) []engine.Reading {
	all := make([]engine.Reading, n)
	level := 100.0
	for i := range all {
		level += 0.1 * rng.NormFloat64()
		all[i] = reading("gap", seconds(float64(10*(i-i%3%2))), level+rng.NormFloat64(), engine.ReadingID(fmt.Sprintf("%03d-%d", rng.IntN(1000), i)))
	}
	return all
}

// Thousands of readings in any order, in any split, with rebuilds on the way,
// give the belief of tidy traffic.
func TestOrderAndSplitChangeNothing(t *testing.T) {
	orders := map[string]func(*rand.Rand, []engine.Reading){
		"tidy":     func(*rand.Rand, []engine.Reading) {},
		"reversed": func(_ *rand.Rand, all []engine.Reading) { slices.Reverse(all) },
		"shuffled": func(rng *rand.Rand, all []engine.Reading) {
			rng.Shuffle(len(all), func(i, j int) { all[i], all[j] = all[j], all[i] })
		},
		"first last": func(_ *rand.Rand, all []engine.Reading) { first := all[0]; copy(all, all[1:]); all[len(all)-1] = first },
	}
	for _, s := range seeds(3) {
		all := walkReadings(rand.New(rand.NewPCG(s, 1)), 5_000)
		for _, d := range []engine.Declaration{walking(), gap()} {
			var want engine.Belief
			for _, name := range []string{"tidy", "reversed", "shuffled", "first last"} {
				rng := rand.New(rand.NewPCG(s, 2))
				sent := slices.Clone(all)
				orders[name](rng, sent)
				r := newRig(t, engine.Options{CheckpointRecords: 500})
				r.declare("gap", d)
				for len(sent) > 0 {
					n := min(len(sent), 1+rng.IntN(400))
					r.post(seconds(1e5), sent[:n:n]...)
					sent = sent[n:]
				}
				got := r.settled("gap", engine.BeliefQuery{Now: seconds(1e5)})
				if name == "tidy" {
					want = got
				}
				if err := sameBelief(got.Level, want.Level); err != nil || got.ReadingCount != want.ReadingCount {
					t.Errorf("seed %d, %s, %v: %v; %d readings, want %d", s, name, d.Dynamics.Form, err, got.ReadingCount, want.ReadingCount)
				}
				if name != "reversed" {
					continue
				}
				r.restart(false)
				if again := r.settled("gap", engine.BeliefQuery{Now: seconds(1e5)}); again.Level != got.Level {
					t.Errorf("seed %d, %s: a restart changes %+v to %+v", s, name, got.Level, again.Level)
				}
			}
		}
	}
}

// While a belief is rebuilt it is the one of an earlier position, and ingest
// goes on.
func TestRebuildGoesOnBesideIngest(t *testing.T) {
	r := newRig(t, engine.Options{CheckpointRecords: 1_000})
	r.declare("gap", walking())
	all := walkReadings(rand.New(rand.NewPCG(7, 7)), 20_000)
	late, tidy := all[0], all[1:]
	for chunk := range slices.Chunk(tidy, 1_000) {
		r.post(seconds(1e6), chunk...)
	}
	before := r.belief("gap", engine.BeliefQuery{Now: start})
	r.post(seconds(1e6), late)
	during := r.belief("gap", engine.BeliefQuery{Now: start})
	if during.Rebuilding && during.Level != before.Level {
		t.Errorf("while rebuilding the belief is %+v, want the earlier %+v", during.Level, before.Level)
	}
	last := reading("gap", seconds(3e5), 100, "last")
	r.post(seconds(1e6), last)
	after := r.settled("gap", engine.BeliefQuery{Now: start})
	if after.ReadingCount != len(all)+1 || after.LastTime != last.Time {
		t.Errorf("%d readings, last at %v; want %d, %v", after.ReadingCount, after.LastTime, len(all)+1, last.Time)
	}
	q := modelQuantity{d: walking(), applied: append(slices.Clone(all), last)}
	if want, _ := q.posterior(after.Time); sameBelief(after.Level, want) != nil {
		t.Error(sameBelief(after.Level, want))
	}
}
