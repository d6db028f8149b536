package engine_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

// displayed is an instrument that shows whole millimetres, and no less.
func displayed(change func(*engine.InstrumentDeclaration)) engine.InstrumentDeclaration {
	return with(engine.InstrumentDeclaration{Unit: "mm", Resolution: 1}, change)
}

// believedAs declares r, the instrument's or learned, and has readings taken.
func believedAs(t *testing.T, d engine.Declaration, i engine.InstrumentDeclaration, readings []engine.Reading) (*rig, *indicated) {
	t.Helper()
	c := &indicated{jointCase: jointCase{
		oracle: oracle{d: d, instruments: map[engine.InstrumentID]engine.InstrumentDeclaration{"gauge": i}, readings: readings},
		ids:    []engine.InstrumentID{"gauge"}, last: readings[len(readings)-1].Time,
	}}
	r := newRig(t, engine.Options{CheckpointRecords: 200})
	r.declareInstrument("gauge", i)
	r.declare(gapID, d)
	for chunk := range slices.Chunk(readings, 64) {
		for _, res := range r.post(c.last+engine.Instant(time.Hour), chunk...) {
			if res.Status != engine.Applied {
				t.Fatalf("%v: %s", res.Reason, res.Detail)
			}
		}
	}
	return r, c
}

func (c *indicated) mustEqual(r *rig, what string) {
	r.t.Helper()
	worst, err := c.check(r, c.last)
	if err != nil {
		r.t.Errorf("%s: %v", what, err)
	}
	r.t.Logf("%s: z off by %.2g, mean by %.2g sd, sd by %.2g of itself", what, worst.z, worst.mean, worst.sd)
}

// A hundred identical readings make the belief no surer than the display allows, however sharp
// the noise is beside the display.
func TestIdenticalDisplayedReadings(t *testing.T) {
	stays := engine.Declaration{Unit: "mm", Prior: engine.Prior{Form: engine.PriorNormal, Mean: 20, StandardDeviation: 3}}
	walks := with(stays, func(d *engine.Declaration) {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.05, Per: time.Minute}
	})
	for _, ratio := range []float64{0.02, 0.1, 0.3, 0.6, 1} {
		for name, d := range map[string]engine.Declaration{"constant": stays, "random_walk": walks} {
			for _, learned := range []bool{false, true} {
				if learned && (name == "random_walk" || ratio == 0.1 || ratio == 0.6) && *indicationCases == 0 {
					continue
				}
				known := engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: ratio}
				if learned {
					known = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: ratio, Worth: 8}
				}
				d.Repeatability = known
				var readings []engine.Reading
				for i := range 100 {
					readings = append(readings, engine.Reading{Quantity: gapID, Instrument: "gauge", HasTime: true, Time: seconds(float64(60 * i)), Value: 20, ID: engine.ReadingID(fmt.Sprint(i))})
				}
				r, c := believedAs(t, d, displayed(func(*engine.InstrumentDeclaration) {}), readings)
				c.mustEqual(r, fmt.Sprintf("%s, r/d = %v, learned: %v", name, ratio, learned))
			}
		}
	}
}

// thousandMixed returns readings of a level about 20.3, with r = 0.4: as whole numbers, below
// or above one, or within two.
func thousandMixed(rng *rand.Rand, d *engine.Declaration) []engine.Reading {
	level := 20.3
	var readings []engine.Reading
	for n := range 1_000 {
		if d.Dynamics.Form == engine.DynamicsRandomWalk {
			level += 0.2 * rng.NormFloat64()
		}
		y := level + 0.4*rng.NormFloat64()
		r := engine.Reading{Quantity: gapID, Instrument: "gauge", HasTime: true, Time: seconds(float64(60 * n)), Value: math.Round(y), ID: engine.ReadingID(fmt.Sprintf("%04d", n))}
		switch end := math.Round(y) + float64(rng.IntN(2)); {
		case n%5 == 1 && y < end:
			r.Value, r.Extent = end, engine.ExtentBelow
		case n%5 == 1:
			r.Value, r.Extent = end, engine.ExtentAbove
		case n%5 == 2:
			r.Value, r.Upper, r.Extent = end-1.5, end+0.5, engine.ExtentBetween
		}
		readings = append(readings, r)
	}
	return readings
}

// A thousand readings, displayed, beyond the range and censored.
func TestThousandMixedReadings(t *testing.T) {
	for _, s := range seeds(1) {
		for _, form := range []engine.DynamicsForm{engine.DynamicsConstant, engine.DynamicsRandomWalk} {
			for _, learned := range []bool{false, true} {
				if learned && *indicationCases == 0 {
					continue
				}
				rng := rand.New(rand.NewPCG(s, uint64(form)))
				d := engine.Declaration{
					Unit: "mm", Prior: engine.Prior{Form: engine.PriorNormal, Mean: 20, StandardDeviation: 3},
					Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.4},
				}
				if learned {
					d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.3, Worth: 4}
				}
				if d.Dynamics.Form = form; form == engine.DynamicsRandomWalk {
					d.Dynamics.StandardDeviation, d.Dynamics.Per = 0.2, time.Minute
				}
				i := displayed(func(i *engine.InstrumentDeclaration) {
					i.MeasuringInterval = engine.MeasuringInterval{HasUpper: true, Upper: 21}
				})
				readings := thousandMixed(rng, &d)
				r, c := believedAs(t, d, i, readings)
				c.mustEqual(r, fmt.Sprintf("-seed %d: dynamics %d, learned: %v", s, form, learned))
			}
		}
	}
}

// Of a level of which nothing was known, readings that bound it on one side alone say nothing
// that could be published; with one from the other side there is a belief.
func TestOneSidedReadingsOfAVagueLevel(t *testing.T) {
	vague := engine.Declaration{
		Unit: "mm", Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.5},
		Tolerance: engine.Tolerance{HasUpper: true, Upper: 30},
	}
	learned := engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.5, Worth: 6}
	walk := engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.4, Per: time.Minute}
	for name, change := range map[string]func(*engine.Declaration){
		"constant":         func(*engine.Declaration) {},
		"constant learned": func(d *engine.Declaration) { d.Repeatability = learned },
		"walk":             func(d *engine.Declaration) { d.Dynamics = walk },
		"walk learned":     func(d *engine.Declaration) { d.Dynamics, d.Repeatability = walk, learned },
		"outliers":         func(d *engine.Declaration) { d.Outliers = engine.Outliers{Probability: 0.05, Inflation: 6} },
	} {
		t.Run(name, func(t *testing.T) {
			c := &indicated{jointCase: jointCase{oracle: oracle{d: with(vague, change)}}}
			r := newRig(t, engine.Options{CheckpointRecords: 2})
			r.declare(gapID, c.d)
			add := func(n int, extent engine.Extent, y float64) {
				x := engine.Reading{Quantity: gapID, HasTime: true, Time: seconds(float64(60 * n)), Value: y, Extent: extent, ID: engine.ReadingID(fmt.Sprint(n))}
				if res := r.post(seconds(1e4), x)[0]; res.Status != engine.Applied {
					t.Fatalf("%+v: %s", x, res.Detail)
				}
				c.readings, c.last = append(c.readings, x), x.Time
			}
			for n, y := range []float64{20, 22, 21} {
				add(n, engine.ExtentAbove, y)
				b := r.settled(gapID, engine.BeliefQuery{HasTime: true, Time: c.last, HasThreshold: true, Threshold: 25})
				if b.Level.Form() != posterior.FormNone || b.HasBreach || b.HasThreshold || b.Predictive.Form() != posterior.FormNone {
					t.Errorf("after %d readings above something the belief is %+v", n+1, b)
				}
				for _, field := range []string{"mean", "standard_deviation", "interval", "breach", "conformance_probability", "threshold", "predictive"} {
					if !slices.Contains(b.Undetermined, field) {
						t.Errorf("%s isn't among what is undetermined: %v", field, b.Undetermined)
					}
				}
			}
			r.restart(false)
			add(3, engine.ExtentBelow, 23)
			c.mustEqual(r, "bounded")
			if b := r.belief(gapID, engine.BeliefQuery{HasTime: true, Time: c.last}); !b.HasBreach || len(b.Undetermined) > 0 {
				t.Errorf("of a level that is bounded %v are undetermined", b.Undetermined)
			}
		})
	}
}
