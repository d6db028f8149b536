package engine_test

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"leadline.example/engine"
)

// What a reading was worth: its tail probability under what those before it foretold, and
// the probabilities that it is an outlier given those, and given all, are what
// integration gives.
func TestAssessmentsEqualIntegration(t *testing.T) {
	limit := 6
	if *indicationCases > 0 {
		limit = engine.MaxHindsight
	}
	for n, of := range combinations() {
		if of.by == byCalibrated || !of.outlying() || *indicationCases == 0 && (of.learned || of.log) {
			continue
		}
		t.Run(of.String(), func(t *testing.T) {
			t.Parallel()
			for _, s := range seeds(max(1, *indicationCases/10)) {
				rng := rand.New(rand.NewPCG(s, uint64(n)+500))
				c := randomIndicated(rng, of)
				if len(c.renewals) > 0 {
					continue // with which the oracle's evidence isn't of one life
				}
				r := newRig(t, engine.Options{})
				c.send(r, rng)
				r.settled(gapID, engine.BeliefQuery{Now: c.last})
				page, _, err := r.keeper.Assess(context.Background(), gapID, engine.AssessQuery{Hindsight: true, Limit: limit})
				if err != nil {
					t.Fatal(err)
				}
				for _, a := range page {
					if err := c.assess(&a); err != nil {
						t.Errorf("-seed %d: reading %s: %v\n%+v", s, a.Reading.ID, err, c)
						break
					}
				}
			}
		})
	}
}

// assess compares with the oracle.
func (c *indicated) assess(a *engine.Assessment) error {
	o := c.exact()
	i := slices.IndexFunc(o.readings, func(x engine.Reading) bool { return x.ID == a.Reading.ID })
	at := o.readings[i].Time
	y := o.says(i)
	before := *o
	before.readings = o.readings[:i]
	if i > 0 {
		if level := before.belief(at); (level != nil) != a.HasTail {
			return fmt.Errorf("has a tail probability: %v", a.HasTail)
		} else if level != nil {
			below, above := level.foretold(&y)
			tail := math.Min(1, 2*math.Min(1-below, 1-above))
			if got, want := score(a.TailProbability/2, 1-a.TailProbability/2), score(tail/2, 1-tail/2); tail > 1e-9 && !(math.Abs(got-want) <= 0.03) {
				return fmt.Errorf("tail probability %v, want %v", a.TailProbability, tail)
			}
		}
	}
	for _, given := range []struct {
		what string
		got  float64
		n    int
	}{{"at its time", a.Outlier, i + 1}, {"in hindsight", a.Hindsight, len(o.readings)}} {
		if given.n == i+1 && !a.HasOutlier && !a.HasTail {
			continue // nothing was foretold that it could differ from
		}
		all := *o
		all.readings = o.readings[:given.n]
		usual := all.belief(all.readings[given.n-1].Time)
		if usual == nil {
			continue
		}
		all.outlier = i + 1
		outlying := all.belief(all.readings[given.n-1].Time)
		want := o.d.Outliers.Probability * math.Exp(outlying.log-usual.log)
		if !(math.Abs(given.got-want) <= 0.005) {
			return fmt.Errorf("is an outlier with probability %v %s, want %v", given.got, given.what, want)
		}
	}
	return nil
}
