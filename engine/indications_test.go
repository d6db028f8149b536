package engine_test

import (
	"cmp"
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

var indicationCases = flag.Uint64("cases", 0, "random cases for each combination in the tests of displayed, censored and outlying readings; 0: one, of a learned repeatability for a quarter of them")

// cases returns how many cases to try of combination number n.
func (c combination) cases(n int) uint64 {
	switch {
	case *indicationCases > 0:
		return *indicationCases
	case c.learned && uint64(n)%4 != *seed%4:
		return 0
	}
	return 1
}

// indicated is one random case: what is declared, and its traffic.
type indicated struct {
	jointCase
}

func (c *indicated) exact() *dense {
	o := &dense{d: c.d, renewals: c.renewals, readings: slices.Clone(c.readings)}
	for _, i := range c.instruments {
		o.by = &i
	}
	slices.SortStableFunc(o.readings, func(a, b engine.Reading) int {
		return cmp.Or(cmp.Compare(a.Time, b.Time), cmp.Compare(a.ID, b.ID))
	})
	return o
}

// off is how far a belief is off: in normal scores, of the mean in exact standard deviations,
// of the standard deviation in parts of itself.
type off struct{ z, mean, sd float64 }

func (o *off) widen(p off) {
	o.z, o.mean, o.sd = math.Max(o.z, p.z), math.Max(o.mean, p.mean), math.Max(o.sd, p.sd)
}

// check compares the level with the exact one: normal scores to the bound of SupportTable between
// tails of 1e-9, mean and standard deviation to 1 and 3 % of the latter.
func (c *indicated) check(r *rig, at engine.Instant) (off, error) {
	b := r.settled(gapID, engine.BeliefQuery{HasTime: true, Time: at})
	o := c.exact()
	if b.Level.Form() == posterior.FormNone && o.unpublished() {
		return off{}, nil
	}
	e := o.belief(at)
	if e == nil || b.Level.Form() == posterior.FormNone {
		if (e == nil) != (b.Level.Form() == posterior.FormNone) {
			return off{}, fmt.Errorf("%s gives form %v, and the oracle %v", b.Method, b.Level.Form(), e)
		}
		return off{}, nil
	}
	worst, err := e.compare(b.Level, o)
	if err != nil {
		err = fmt.Errorf("%s: %w", b.Method, err)
	}
	return worst, err
}

// unpublished tells whether fewer than two readings bound a repeatability of which nothing was known.
func (o *dense) unpublished() bool {
	if _, known := o.learned(); known.Form != engine.RepeatabilityLearnedReference {
		return false
	}
	n := 0
	for i := range o.readings {
		if y := o.says(i); y.sd == 0 && !math.IsInf(y.lower, 0) && !math.IsInf(y.upper, 0) {
			n++
		}
	}
	return n < 2
}

func (m *mixed) compare(level posterior.Posterior, o *dense) (worst off, err error) {
	for _, z := range []float64{-5.9, -5, -4, -3, -2, -1, 0, 1, 2, 3, 4, 5, 5.9} {
		p := math.Erfc(-z/math.Sqrt2) / 2
		if z > 0 {
			p = 1 - math.Erfc(z/math.Sqrt2)/2
		}
		x := level.Quantile(p)
		got, want := score(level.LowerTail(x), level.UpperTail(x)), score(m.tail(o.scaled(x), -1), m.tail(o.scaled(x), 1))
		if d := math.Abs(got - want); !(d <= worst.z) {
			worst.z = d
		}
		bound := 0.03
		if o.by != nil && len(o.by.Calibrations) > 1 { // as SupportTable says of several
			if bound = 0.1; math.Abs(z) > 4.1 {
				bound = 0.3
			}
		}
		if !(math.Abs(got-want) <= bound) && err == nil {
			err = fmt.Errorf("P(level < %v) has z = %v, want %v", x, got, want)
		}
	}
	mean, sd := m.moments()
	gotMean, hasMean := level.Mean()
	gotSD, hasSD := level.StandardDeviation()
	if o.d.Scale == engine.ScaleLog {
		gotMean, hasMean = level.GeometricMean()
		gotSD, hasSD = level.GeometricStandardDeviation()
		gotMean, gotSD = math.Log(gotMean), math.Log(gotSD)
	}
	worst.mean, worst.sd = math.Abs(gotMean-mean)/sd, math.Abs(gotSD/sd-1)
	if !hasMean || !hasSD || !(worst.mean <= 0.01) || !(worst.sd <= 0.03) {
		err = cmp.Or(err, fmt.Errorf("mean %v (%v), sd %v (%v); want %v and %v", gotMean, hasMean, gotSD, hasSD, mean, sd))
	}
	return worst, err
}

// Late, shuffled, in batches, restarted, read by instruments or none: beliefs from
// displayed, censored and outlying readings are what integration gives.
func TestIndicationsEqualIntegration(t *testing.T) {
	for n, of := range combinations() {
		cases := of.cases(n)
		if cases == 0 {
			continue
		}
		t.Run(of.String(), func(t *testing.T) {
			t.Parallel()
			var worst off
			for _, s := range seeds(cases) {
				rng := rand.New(rand.NewPCG(s, uint64(n)))
				c := randomIndicated(rng, of)
				r := newRig(t, engine.Options{CheckpointRecords: 1 + rng.IntN(20)})
				c.send(r, rng)
				after := time.Duration(rng.IntN(2)) * 10 * time.Minute
				d, err := c.check(r, c.last+engine.Instant(after))
				if err != nil {
					t.Errorf("-seed %d: %v after the last reading: %v\n%+v", s, after, err, c)
				}
				worst.widen(d)
			}
			t.Logf("z off by %.2g, mean by %.2g sd, sd by %.2g of itself at most", worst.z, worst.mean, worst.sd)
		})
	}
}
