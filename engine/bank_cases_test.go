package engine_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

// learnedCase is one random case with a repeatability to be learned.
type learnedCase struct {
	jointCase
	learned engine.Repeatability
	own     engine.InstrumentID
}

func (c *learnedCase) exact() *learnedOracle {
	return &learnedOracle{oracle: c.oracle, learned: c.learned, own: c.own}
}

// randomLearnedCase draws 2 to 60 readings, with instruments or without.
func randomLearnedCase(rng *rand.Rand, form engine.DynamicsForm, instruments bool) *learnedCase {
	c := &learnedCase{jointCase: jointCase{oracle: oracle{d: randomMotion(rng, form)}}}
	if instruments {
		c.drawInstruments(rng)
	}
	n := int(2 * math.Exp(rng.Float64()*math.Log(30.9)))
	c.readings = randomReadings(rng, n, c.ids)
	spread := math.Exp(rng.Float64()*4 - 3)
	for i := range c.readings {
		r := &c.readings[i]
		r.Value = 100 + spread*rng.NormFloat64()
		if rng.IntN(8) == 0 {
			r.Samples = uint32(1 + rng.IntN(10))
		}
	}
	c.last = c.readings[n-1].Time
	c.drawLearned(rng, form)
	if rng.IntN(4) == 0 {
		c.renewals = []engine.Renewal{{
			RequestID: "new part", Time: start + engine.Instant(time.Duration(rng.IntN(1200))*time.Second),
			Prior: engine.Prior{Form: engine.PriorNormal, Mean: 100, StandardDeviation: 1 + rng.Float64()},
		}}
		if rng.IntN(3) == 0 {
			c.renewals[0].Prior = engine.Prior{}
		}
	}
	return c
}

func (c *learnedCase) drawInstruments(rng *rand.Rand) {
	c.instruments = map[engine.InstrumentID]engine.InstrumentDeclaration{}
	for i := range 1 + rng.IntN(3) {
		id := engine.InstrumentID(fmt.Sprint("gauge-", i))
		c.ids = append(c.ids, id)
		c.instruments[id] = with(randomInstrument(rng), func(d *engine.InstrumentDeclaration) { d.Resolution = 0 })
	}
	if rng.IntN(2) == 0 {
		c.own = c.ids[rng.IntN(len(c.ids))]
	}
}

// drawLearned draws what is known of r: of the reference prior only where the
// posterior is proper whatever the readings are.
func (c *learnedCase) drawLearned(rng *rand.Rand, form engine.DynamicsForm) {
	c.learned = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: math.Exp(rng.Float64()*4 - 3), Worth: 1 + 30*math.Pow(rng.Float64(), 3)}
	if rng.IntN(3) == 0 {
		c.learned.Floor = c.learned.Guess * math.Exp(rng.NormFloat64())
	}
	if rng.IntN(4) == 0 {
		c.learned.Form, c.learned.Guess, c.learned.Worth = engine.RepeatabilityLearnedReference, 0, 0
		c.learned.Floor = 0.05 + 0.2*rng.Float64()
		if form == engine.DynamicsConstant && len(c.ids) == 0 && rng.IntN(2) == 0 {
			c.learned.Floor = 0
		}
	}
	if c.own == "" {
		c.d.Repeatability = c.learned
		return
	}
	d := c.instruments[c.own]
	d.Repeatability.StandardDeviation, d.Repeatability.Learned = 0, c.learned
	c.instruments[c.own] = d
}

// unpublished tells whether a single reading teaches a repeatability of which nothing
// was known, which takes two.
func (c *learnedCase) unpublished() bool {
	taught := 0
	for i := range c.readings {
		if c.exact().teaches(&c.readings[i]) {
			taught++
		}
	}
	return taught == 1 && c.learned.Form == engine.RepeatabilityLearnedReference
}

// compareMoments compares those of a level, mean to 1 and standard deviation to 3 % of the latter.
func (b *learnedBelief) compareMoments(level posterior.Posterior) error {
	mean, hasMean := level.Mean()
	sd, hasSD := level.StandardDeviation()
	switch {
	case hasMean != b.hasMean || hasSD != b.hasSD:
		return fmt.Errorf("has mean: %v, sd: %v; want %v, %v", hasMean, hasSD, b.hasMean, b.hasSD)
	case b.hasSD && !(math.Abs(mean-b.mean) <= 0.01*b.sd):
		return fmt.Errorf("mean %v, want %v with sd %v", mean, b.mean, b.sd)
	case b.hasSD && !(math.Abs(sd-b.sd) <= 0.03*b.sd):
		return fmt.Errorf("sd %v, want %v", sd, b.sd)
	}
	return nil
}

// The oracle itself: given r it is the joint normal of the other oracle, conditioned in 120 digits.
func TestLearnedOracleGivenR(t *testing.T) {
	for form := engine.DynamicsConstant; form <= engine.DynamicsMeanReverting; form++ {
		for _, s := range seeds(12) {
			rng := rand.New(rand.NewPCG(s, uint64(form)))
			c := randomLearnedCase(rng, form, rng.IntN(4) > 0)
			if len(c.readings) > 14 {
				c.readings = c.readings[:14]
			}
			for i := range c.readings {
				c.readings[i].Samples = 0 // of which the other oracle knows nothing
			}
			at := c.readings[len(c.readings)-1].Time + engine.Instant(rng.IntN(1e12))
			spectrum := c.exact().spectrum(at)
			for _, known := range []float64{0.03, 0.5, 20} {
				given := c.oracle
				if c.own == "" {
					given.d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: known}
				} else {
					given.instruments = map[engine.InstrumentID]engine.InstrumentDeclaration{}
					for id, d := range c.instruments {
						if id == c.own {
							d.Repeatability.StandardDeviation = known
						}
						given.instruments[id] = d
					}
				}
				mean, sd := given.level(at)
				if sd > 1e10 {
					if !spectrum.nothing {
						t.Errorf("-seed %d: form %d: sd is %v where nothing is known", s, form, sd)
					}
					continue
				}
				_, m, v := spectrum.given(known)
				off, _ := minus(num(m), mean).Float64()
				if !(math.Abs(off) < 1e-8*sd) || !(math.Abs(math.Sqrt(v)-sd) < 1e-8*sd) {
					t.Errorf("-seed %d: form %d, r = %v: mean off by %v, sd %v, want %v", s, form, known, off, math.Sqrt(v), sd)
				}
			}
		}
	}
}

// The oracle itself: of a constant read directly it is the exact belief, which
// package posterior holds against reference tables.
func TestLearnedOracleOfAConstant(t *testing.T) {
	for _, s := range seeds(60) {
		rng := rand.New(rand.NewPCG(s, 0))
		c := randomLearnedCase(rng, engine.DynamicsConstant, false)
		c.renewals, c.learned.Floor = nil, 0
		var k posterior.Constant
		for i := range c.readings {
			r := &c.readings[i]
			r.Samples = 0
			if r.HasUncertainty {
				k.AddKnown(r.Value, r.RandomStandardUncertainty)
				continue
			}
			k.AddLearned(r.Value)
		}
		prior := posterior.Prior{Vague: true}
		if c.d.Prior.Form == engine.PriorNormal {
			prior = posterior.Prior{Mean: c.d.Prior.Mean, SD: c.d.Prior.StandardDeviation}
		}
		want := k.Posterior(prior, posterior.Noise{Guess: c.learned.Guess, Worth: c.learned.Worth})
		b := c.exact().belief(c.last)
		if b.nothing || want.Form() == posterior.FormNone {
			if !b.nothing && !c.unpublished() {
				t.Errorf("-seed %d: %v, want %v", s, b, want)
			}
			continue
		}
		for _, p := range []float64{1e-9, 1e-4, 0.2, 0.5, 0.9, 1 - 1e-6} {
			x := want.Quantile(p)
			got := score(b.tail(x, -1), b.tail(x, 1))
			if z := score(want.LowerTail(x), want.UpperTail(x)); !(math.Abs(got-z) < 1e-6) {
				t.Errorf("-seed %d: z = %v, want %v", s, got, z)
			}
		}
		if err := b.compareMoments(want); err != nil {
			t.Errorf("-seed %d: %v", s, err)
		}
		if sd, has := want.StandardDeviation(); has && !(math.Abs(sd-b.sd) < 1e-6*sd) {
			t.Errorf("-seed %d: sd %v, want %v", s, b.sd, sd)
		}
	}
}
