package engine_test

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

const gapID = engine.QuantityID("brine-pump-3.gap")

// randomInstrument draws an instrument with some of what one can have. Relative
// parts, which are linearised, are left to a test of their own.
func randomInstrument(rng *rand.Rand) engine.InstrumentDeclaration {
	maybe := func(x float64) float64 {
		if rng.IntN(3) == 0 {
			return x * (0.3 + rng.Float64())
		}
		return 0
	}
	d := engine.InstrumentDeclaration{Unit: "mm", Resolution: maybe(0.02)}
	d.Repeatability.StandardDeviation = maybe(0.1)
	d.Repeatability.BetweenOccasions = maybe(0.2)
	if s := maybe(0.2); s > 0 {
		d.Repeatability.Correlated = engine.Correlated{StandardDeviation: s, Time: time.Duration(1+rng.IntN(300)) * time.Second}
	}
	for i := range rng.IntN(4) {
		c := engine.Calibration{
			ValidFrom: start + engine.Instant(time.Duration(i*400+rng.IntN(300)-200)*time.Second),
			Bias:      rng.NormFloat64(), BiasStandardUncertainty: 0.1 + rng.Float64(),
		}
		if rng.IntN(2) == 0 {
			c.Reference, c.CommonStandardUncertainty = fmt.Sprint("block-", rng.IntN(2)), c.BiasStandardUncertainty*rng.Float64()
		}
		if rng.IntN(3) == 0 {
			c.DriftStandardDeviation, c.DriftPer = 0.1+rng.Float64(), 10*time.Minute
		}
		d.Calibrations = append(d.Calibrations, c)
	}
	return d
}

// randomMotion draws a declaration with dynamics of a form.
func randomMotion(rng *rand.Rand, form engine.DynamicsForm) engine.Declaration {
	d := engine.Declaration{Unit: "mm", Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.05 + rng.Float64()}}
	if rng.IntN(2) == 0 {
		d.Prior = engine.Prior{Form: engine.PriorNormal, Mean: 100 + rng.NormFloat64(), StandardDeviation: 0.1 + 3*rng.Float64()}
	}
	if rng.IntN(3) == 0 {
		d.Prior.HasTime, d.Prior.Time = true, start-engine.Instant(time.Hour)
	}
	y := engine.Dynamics{Form: form}
	switch form {
	case engine.DynamicsLinearTrend:
		y.Slope = engine.Slope{Mean: rng.NormFloat64(), StandardDeviation: 0.1 + rng.Float64(), Per: time.Hour}
		if rng.IntN(2) == 0 {
			y.Wander = engine.Wander{StandardDeviation: 0.5, Per: time.Hour}
		}
		if rng.IntN(2) == 0 {
			break
		}
		fallthrough
	case engine.DynamicsRandomWalk:
		y.StandardDeviation, y.Per = 0.1+rng.Float64(), 10*time.Minute
	case engine.DynamicsMeanReverting:
		y.Mean, y.StandardDeviation, y.HalfLife = 100, 0.5+rng.Float64(), time.Duration(1+rng.IntN(1000))*time.Second
	}
	d.Dynamics = y
	return d
}

// randomReadings draws readings in canonical order, of which some share
// their time and occasion.
func randomReadings(rng *rand.Rand, n int, instruments []engine.InstrumentID) []engine.Reading {
	var all []engine.Reading
	at := start
	for i := range n {
		if rng.IntN(5) > 0 {
			at += engine.Instant(time.Duration(rng.IntN(120)) * time.Second)
		}
		r := engine.Reading{Quantity: gapID, HasTime: true, Time: at, Value: 100 + 2*rng.NormFloat64(), ID: engine.ReadingID(fmt.Sprint(i))}
		if k := rng.IntN(len(instruments) + 1); k < len(instruments) {
			r.Instrument = instruments[k]
			if rng.IntN(2) == 0 {
				r.Occasion = fmt.Sprint("visit ", i/6)
			}
		}
		if rng.IntN(6) == 0 {
			r.HasUncertainty, r.RandomStandardUncertainty = true, 0.1+rng.Float64()
		}
		all = append(all, r)
	}
	slices.SortFunc(all, func(a, b engine.Reading) int {
		return cmp.Or(cmp.Compare(a.Time, b.Time), cmp.Compare(a.Instrument, b.Instrument), cmp.Compare(a.ID, b.ID))
	})
	return all
}

func (r *rig) declareInstrument(id engine.InstrumentID, d engine.InstrumentDeclaration) {
	r.t.Helper()
	if _, _, err := r.keeper.DeclareInstrument(context.Background(), id, d, engine.Condition{}, start); err != nil {
		r.t.Fatalf("declare %s as %+v: %v", id, d, err)
	}
}

// jointCase is one random case: what is declared, and its traffic.
type jointCase struct {
	oracle
	ids  []engine.InstrumentID
	last engine.Instant
}

func randomCase(rng *rand.Rand, form engine.DynamicsForm) *jointCase {
	c := &jointCase{oracle: oracle{d: randomMotion(rng, form), instruments: map[engine.InstrumentID]engine.InstrumentDeclaration{}}}
	for i := range 1 + rng.IntN(3) {
		id := engine.InstrumentID(fmt.Sprint("gauge-", i))
		c.ids = append(c.ids, id)
		c.instruments[id] = randomInstrument(rng)
	}
	c.readings = randomReadings(rng, 1+rng.IntN(22), c.ids)
	c.last = c.readings[len(c.readings)-1].Time
	for i := range rng.IntN(3) {
		r := engine.Renewal{
			RequestID: fmt.Sprint("new part ", i), Time: start + engine.Instant(time.Duration(rng.IntN(1200)-100+1200*i)*time.Second),
			Prior: engine.Prior{Form: engine.PriorNormal, Mean: 100, StandardDeviation: 1 + rng.Float64()},
		}
		if rng.IntN(3) == 0 {
			r.Prior = engine.Prior{}
		}
		c.renewals = append(c.renewals, r)
	}
	return c
}

// send brings the case to the keeper: instruments, declaration, readings and
// renewals in an order of its own, with repeats and restarts.
func (c *jointCase) send(r *rig, rng *rand.Rand) {
	r.t.Helper()
	now := c.last + engine.Instant(time.Hour)
	for _, id := range c.ids {
		r.declareInstrument(id, c.instruments[id])
	}
	r.declare(gapID, c.d)
	renewals := slices.Clone(c.renewals)
	traffic := slices.Clone(c.readings)
	rng.Shuffle(len(traffic), func(i, j int) { traffic[i], traffic[j] = traffic[j], traffic[i] })
	for len(traffic) > 0 || len(renewals) > 0 {
		switch n := rng.IntN(6); {
		case n == 0:
			r.restart(rng.IntN(2) == 0)
		case n == 1 && len(renewals) > 0:
			if _, err := r.keeper.Renew(context.Background(), gapID, renewals[0], now); err != nil {
				r.t.Fatal(err)
			}
			renewals = renewals[1:]
		default:
			k := min(len(traffic), 1+rng.IntN(8))
			for i, res := range r.post(now, traffic[:k]...) {
				if res.Status != engine.Applied {
					r.t.Fatalf("%+v is %v: %s", traffic[i], res.Status, res.Detail)
				}
			}
			traffic = traffic[k:]
		}
	}
}

// check compares level, with the oracle's.
func (c *jointCase) check(r *rig, at engine.Instant) error {
	b := r.settled(gapID, engine.BeliefQuery{HasTime: true, Time: at})
	mean, sd := c.level(at)
	if sd > 1e10 {
		if b.Level.Form() != posterior.FormNone {
			return fmt.Errorf("form %v, want none: nothing is known of the level", b.Level.Form())
		}
		return nil
	}
	if b.Level.Form() != posterior.FormNormal {
		return fmt.Errorf("form %v, want normal with sd %v", b.Level.Form(), sd)
	}
	got := b.Level.Location()
	off, _ := minus(num(got), mean).Float64()
	if s := b.Level.Scale(); math.Abs(off) > 1e-9*sd || math.Abs(s-sd) > 1e-9*sd {
		m, _ := mean.Float64()
		return fmt.Errorf("mean %v, sd %v; want %v, %v (off by %.2g and %.2g sd)", got, s, m, sd, off/sd, (s-sd)/sd)
	}
	return nil
}

// Late, shuffled and renewed, read by instruments with all that they can share:
// the belief is the joint normal conditioned on the whole history.
func TestKeeperEqualsJointNormal(t *testing.T) {
	forms := map[string]engine.DynamicsForm{
		"constant": engine.DynamicsConstant, "random_walk": engine.DynamicsRandomWalk,
		"linear_trend": engine.DynamicsLinearTrend, "mean_reverting": engine.DynamicsMeanReverting,
	}
	for name, form := range forms {
		t.Run(name, func(t *testing.T) {
			cases := uint64(200)
			if testing.Short() {
				cases = 20
			}
			for _, s := range seeds(cases) {
				rng := rand.New(rand.NewPCG(s, uint64(form)))
				c := randomCase(rng, form)
				r := newRig(t, engine.Options{CheckpointRecords: 1 + rng.IntN(20)})
				c.send(r, rng)
				for _, after := range []time.Duration{0, 10 * time.Minute} {
					if err := c.check(r, c.last+engine.Instant(after)); err != nil {
						t.Fatalf("-seed %d: %v after the last reading: %v\n%+v", s, after, err, c)
					}
				}
			}
		})
	}
}
