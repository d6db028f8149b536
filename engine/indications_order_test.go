package engine_test

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine"
)

// numbers are what an answer shows of a belief, to the last bit.
func numbers(b *engine.Belief) string {
	mean, _ := b.Level.Mean()
	sd, _ := b.Level.StandardDeviation()
	tails := [...]float64{b.Level.LowerTail(99.9), b.Level.UpperTail(100.3), b.Level.LowerTail(1), b.Level.UpperTail(2.5), b.Predictive.LowerTail(100)}
	return fmt.Sprint(mean, sd, tails, b.Lower, b.Upper, b.PredictiveLower, b.Repeatability, b.Outlier, b.Biases, b.Check)
}

// Shuffled, in batches, retried and restarted, traffic gives the belief of tidy traffic and
// the same check of the model; a restart, clean or not, gives the same bits.
func TestIndicationsInAnyOrder(t *testing.T) {
	for n, of := range combinations() {
		if *indicationCases == 0 && (uint64(n)%6 != *seed%6 || of.learned && of.by == byCalibrated) {
			continue
		}
		t.Run(of.String(), func(t *testing.T) {
			t.Parallel()
			rng := rand.New(rand.NewPCG(*seed+1000, uint64(n)))
			c := randomIndicated(rng, of)
			q := engine.BeliefQuery{HasTime: true, Time: c.last}
			tidy := newRig(t, engine.Options{})
			for _, id := range c.ids {
				tidy.declareInstrument(id, c.instruments[id])
			}
			tidy.declare(gapID, c.d)
			for _, x := range c.renewals {
				if _, err := tidy.keeper.Renew(context.Background(), gapID, x, c.last+engine.Instant(time.Hour)); err != nil {
					t.Fatal(err)
				}
			}
			for _, x := range c.exact().readings {
				tidy.post(c.last, x)
			}
			want := tidy.settled(gapID, q)
			r := newRig(t, engine.Options{CheckpointRecords: 1 + rng.IntN(20)})
			c.send(r, rng)
			for _, x := range c.readings {
				if res := r.post(c.last, x)[0]; res.Status != engine.Duplicate {
					t.Errorf("a retry is %v", res.Status)
				}
			}
			got := r.settled(gapID, q)
			if err := sameBelief(got.Level, want.Level); err != nil {
				t.Errorf("-seed %d: %s: %v\n%+v", *seed, got.Method, err, c)
			}
			a, b := got.Check, want.Check
			if a.Result != b.Result || a.Total.Readings != b.Total.Readings || a.Steps != b.Steps || a.Outlying != b.Outlying ||
				math.Abs(a.Total.Within50-b.Total.Within50) > 1e-9 || math.Abs(a.Total.Within95-b.Total.Within95) > 1e-9 {
				t.Errorf("-seed %d: the model check is %+v, want %+v", *seed, a, b)
			}
			before := numbers(&got)
			for _, clean := range []bool{true, false} {
				r.restart(clean)
				again := r.settled(gapID, q)
				if after := numbers(&again); after != before {
					t.Errorf("-seed %d: a restart (clean: %v) changes\n%s to\n%s", *seed, clean, before, after)
				}
			}
		})
	}
}
