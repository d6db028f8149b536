package engine_test

import (
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

var bankCases = flag.Uint64("bankcases", 12, "random cases for each dynamics, with instruments and without, in the tests of learned repeatabilities")

// check compares the level with the exact one: normal scores to 1e-3 between tails of
// 1e-9, and the moments.
func (c *learnedCase) check(r *rig, rng *rand.Rand, at engine.Instant) (worst float64, err error) {
	level := r.settled(gapID, engine.BeliefQuery{HasTime: true, Time: at}).Level
	b := c.exact().belief(at)
	if b.nothing || c.unpublished() {
		if level.Form() != posterior.FormNone {
			return 0, fmt.Errorf("form %v, want none: the belief is improper", level.Form())
		}
		return 0, nil
	}
	if level.Form() == posterior.FormNone {
		return 0, fmt.Errorf("no belief, want mean %v and sd %v", b.mean, b.sd)
	}
	for i := range 10 {
		p := math.Exp(math.Log(1.05e-9) + rng.Float64()*(math.Log(0.5)-math.Log(1.05e-9)))
		if i == 0 {
			p = 1.05e-9
		}
		if i%2 == 1 {
			p = 1 - p
		}
		x := level.Quantile(p)
		got, want := score(level.LowerTail(x), level.UpperTail(x)), score(b.tail(x, -1), b.tail(x, 1))
		if !(math.Abs(got-want) <= 1e-3) {
			return 0, fmt.Errorf("P(level < %v) = %v, want z = %v, not %v", x, p, want, got)
		}
		worst = max(worst, math.Abs(got-want))
	}
	return worst, b.compareMoments(level)
}

// Late, shuffled, renewed, read by instruments or none: under a learned
// repeatability the belief is the integral over it.
func TestBankEqualsIntegration(t *testing.T) {
	forms := map[string]engine.DynamicsForm{
		"constant": engine.DynamicsConstant, "random_walk": engine.DynamicsRandomWalk,
		"linear_trend": engine.DynamicsLinearTrend, "mean_reverting": engine.DynamicsMeanReverting,
	}
	for name, form := range forms {
		for by, instruments := range map[string]bool{"direct": false, "instruments": true} {
			t.Run(name+"/"+by, func(t *testing.T) {
				t.Parallel()
				worst := 0.0
				for _, s := range seeds(*bankCases) {
					rng := rand.New(rand.NewPCG(s, uint64(form)))
					c := randomLearnedCase(rng, form, instruments)
					r := newRig(t, engine.Options{CheckpointRecords: 1 + rng.IntN(20)})
					c.send(r, rng)
					for _, after := range []time.Duration{0, 10 * time.Minute} {
						off, err := c.check(r, rng, c.last+engine.Instant(after))
						if err != nil {
							t.Fatalf("-seed %d: %v after the last reading: %v\n%+v", s, after, err, c)
						}
						worst = max(worst, off)
					}
				}
				t.Logf("normal scores are off by %.2g at most", worst)
			})
		}
	}
}
