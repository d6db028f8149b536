package engine_test

import (
	"context"
	"fmt"
	"math"
	"sync"
	"testing"
	"time"

	"leadline.example/engine"
)

// sharpGauge is an instrument without a bias to speak of.
func sharpGauge(change func(*engine.InstrumentDeclaration)) engine.InstrumentDeclaration {
	return with(engine.InstrumentDeclaration{
		Unit: "mm", Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.1},
		Calibrations: []engine.Calibration{{ValidFrom: seconds(-1), BiasStandardUncertainty: 1e-6}},
	}, change)
}

func vagueGap() engine.Declaration {
	return with(gap(), func(d *engine.Declaration) { d.Prior = engine.Prior{} })
}

func byGauge(at engine.Instant, y float64) engine.Reading {
	return engine.Reading{Quantity: gapID, HasTime: true, Time: at, Value: y, Instrument: "gauge"}
}

func (r *rig) sd(at engine.Instant) float64 {
	r.t.Helper()
	return r.settled(gapID, engine.BeliefQuery{Now: at}).Level.Scale()
}

// A gain leaves its part of the level, of whatever was believed before it was well
// known, and of the next part.
func TestGainIsRelativeToTheLevelAsItIs(t *testing.T) {
	gain := func(u float64) engine.InstrumentDeclaration {
		return sharpGauge(func(d *engine.InstrumentDeclaration) { d.Calibrations[0].RelativeBiasStandardUncertainty = u })
	}
	wide := with(gap(), func(d *engine.Declaration) { d.Prior.StandardDeviation = 50 })
	for name, d := range map[string]engine.Declaration{"vague": vagueGap(), "wide prior": wide} {
		for _, u := range []float64{0.01, 0.03, 0.1} {
			r := newRig(t, engine.Options{})
			r.declare(gapID, d)
			r.declareInstrument("gauge", gain(u))
			poor := byGauge(start, 150)
			poor.HasUncertainty, poor.RandomStandardUncertainty = true, 50
			r.post(start, poor)
			for i := range 100 {
				r.post(seconds(200), byGauge(seconds(float64(i+1)), 100))
			}
			sd := r.sd(seconds(200))
			if math.Abs(sd-100*u) > 3*u {
				t.Errorf("%s: after a poor reading of 150 and a hundred of 100 the sd is %v, want %v", name, sd, 100*u)
			}
			budget, err := r.keeper.Budget(context.Background(), gapID, engine.BudgetQuery{Now: seconds(200)})
			if err != nil {
				t.Fatal(err)
			}
			sum := 0.0
			for _, p := range budget.Parts {
				sum += p.Variance
			}
			if math.Abs(sum-sd*sd) > 1e-8*sd*sd {
				t.Errorf("%s: the budget's parts sum to %v, want %v", name, sum, sd*sd)
			}
		}
	}
	r := newRig(t, engine.Options{})
	r.declare(gapID, wide)
	r.declareInstrument("gauge", gain(0.01))
	r.post(seconds(100), byGauge(seconds(1), 100))
	next := with(renewal(), func(r *engine.Renewal) { r.Time, r.Prior.Mean, r.Prior.StandardDeviation = seconds(50), 1000, 500 })
	if _, err := r.keeper.Renew(context.Background(), gapID, next, seconds(60)); err != nil {
		t.Fatal(err)
	}
	for i := range 100 {
		r.post(seconds(1000), byGauge(seconds(float64(i+60)), 1000))
	}
	if sd := r.sd(seconds(1000)); math.Abs(sd-10) > 0.3 {
		t.Errorf("of a part of 1000 the sd is %v, want 10", sd)
	}
}

// Readings without an ID that tie in time and value are in canonical order by all
// that a fold sees of them.
func TestTiesWithoutIDsFoldInOneOrder(t *testing.T) {
	var sds []float64
	for _, order := range [][]string{{"a", "b"}, {"b", "a"}} {
		r := newRig(t, engine.Options{})
		r.declare(gapID, vagueGap())
		r.declareInstrument("gauge", sharpGauge(func(d *engine.InstrumentDeclaration) { d.Repeatability.BetweenOccasions = 5 }))
		first := byGauge(start, 100)
		first.Occasion = "a"
		r.post(seconds(100), first)
		for _, occasion := range order {
			tied := byGauge(seconds(1), 100)
			tied.Occasion = occasion
			r.post(seconds(100), tied)
		}
		sds = append(sds, r.sd(seconds(100)))
	}
	if sds[0] != sds[1] {
		t.Errorf("in either order of arrival the sd is %v", sds)
	}
}

// Of a bias that drifts, an early reading doesn't change what holds at the calibration.
func TestDriftBeginsWithTheCalibration(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, with(vagueGap(), func(d *engine.Declaration) {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 1000, Per: time.Second}
	}))
	r.declareInstrument("gauge", sharpGauge(func(d *engine.InstrumentDeclaration) {
		d.Calibrations[0] = engine.Calibration{ValidFrom: seconds(1000), BiasStandardUncertainty: 0.1, DriftStandardDeviation: 1, DriftPer: 100 * time.Second}
	}))
	r.post(seconds(2000), byGauge(start, 100), byGauge(seconds(1000), 100), byGauge(seconds(1100), 100))
	for at, want := range map[float64]float64{1000: 0.1, 1100: math.Sqrt(0.01 + 1)} {
		b := r.belief(gapID, engine.BeliefQuery{HasTime: true, Time: seconds(at)})
		if got := b.Biases[0].StandardDeviation; math.Abs(got-want) > 1e-4*want {
			t.Errorf("after %v s the bias is known to %v, want %v", at, got, want)
		}
	}
}

// Fifteen references don't average away what each of them shares with itself.
func TestManyReferencesKeepTheirCommonParts(t *testing.T) {
	const references, calibrations = 15, 40
	r := newRig(t, engine.Options{})
	r.declare(gapID, vagueGap())
	var readings []engine.Reading
	r.declareInstrument("gauge", sharpGauge(func(d *engine.InstrumentDeclaration) {
		d.Repeatability.StandardDeviation, d.Calibrations = 0.001, nil
		for i := range calibrations {
			at := seconds(float64(10 * i))
			d.Calibrations = append(d.Calibrations, engine.Calibration{
				ValidFrom: at, BiasStandardUncertainty: 1, Reference: fmt.Sprint("block ", min(i, references-1)), CommonStandardUncertainty: 1,
			})
			readings = append(readings, byGauge(at, 100))
		}
	}))
	r.post(seconds(1000), readings...)
	if sd, want := r.sd(seconds(1000)), 1/math.Sqrt(references); math.Abs(sd-want) > 1e-4*want {
		t.Errorf("sd %v, want %v", sd, want)
	}
}

// The biases told are of the calibrations in force at the time asked, as the next
// indication is.
func TestBiasesAreOfTheCalibrationInForce(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	r.declareInstrument("gauge", sharpGauge(func(d *engine.InstrumentDeclaration) {
		d.Calibrations = append(d.Calibrations, engine.Calibration{ValidFrom: seconds(50), Bias: 7, BiasStandardUncertainty: 3})
	}))
	r.post(seconds(100), byGauge(seconds(1), 100))
	for at, want := range map[float64][2]float64{49: {0, 1e-6}, 50: {7, 3}} {
		b := r.belief(gapID, engine.BeliefQuery{HasTime: true, Time: seconds(at)})
		if got := b.Biases[0]; math.Abs(got.Mean-want[0]) > 1e-6 || math.Abs(got.StandardDeviation-want[1]) > 1e-6 {
			t.Errorf("after %v s the bias is %+v, want %v", at, got, want)
		}
	}
}

// A calibration's time can be put right, if all are still there.
func TestCalibrationTimeCanBeCorrected(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	r.declareInstrument("gauge", gauge())
	r.post(seconds(100), byGauge(seconds(1), 101))
	r.declareInstrument("gauge", with(gauge(), func(d *engine.InstrumentDeclaration) { d.Calibrations[0].ValidFrom = seconds(-2000) }))
	if b := r.settled(gapID, engine.BeliefQuery{Now: seconds(100)}); b.Biases[0].ValidFrom != seconds(-2000) {
		t.Errorf("the belief rests on %+v", b.Biases[0])
	}
}

// What is known only later has steps from then on, and no crossing; a renewal by a
// clock that is ahead is waited for.
func TestForecastOfWhatIsKnownLater(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, with(wearing(5*time.Minute), func(d *engine.Declaration) {
		d.Prior = engine.Prior{Form: engine.PriorNormal, Mean: 100, StandardDeviation: 1, HasTime: true, Time: seconds(60)}
	}))
	f := r.forecast(gapID, engine.ForecastQuery{Now: start})
	if last := f.Steps[len(f.Steps)-1]; f.HasCrossing || !last.HasBreach || last.HasCrossed {
		t.Errorf("got %+v", f)
	}
	r.declare("renewed", wearing(5*time.Minute))
	if _, err := r.keeper.Renew(context.Background(), "renewed", with(renewal(), func(r *engine.Renewal) { r.Time = seconds(100) }), start); err != nil {
		t.Fatal(err)
	}
	if f := r.forecast("renewed", engine.ForecastQuery{Now: start}); f.Time != seconds(100) || !f.HasCrossing {
		t.Errorf("got %+v", f)
	}
}

// A tolerance declared while a belief is rebuilt is in force after it.
func TestRebuildKeepsTheTolerance(t *testing.T) {
	r := newRig(t, engine.Options{})
	d := with(gap(), func(d *engine.Declaration) {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 1, Per: time.Second}
	})
	r.declare(gapID, d)
	r.declareInstrument("gauge", gauge())
	for k := range 3 {
		var readings []engine.Reading
		for i := range 10_000 {
			readings = append(readings, byGauge(seconds(float64(10_000*k+i+1)), 100))
		}
		r.post(seconds(1e5), readings...)
	}
	r.post(seconds(1e5), byGauge(seconds(0.5), 100))
	d.Tolerance.Lower = 7
	r.declare(gapID, d)
	r.settled(gapID, engine.BeliefQuery{Now: seconds(1e5)})
	r.post(seconds(1e5), byGauge(seconds(0.6), 100))
	if b := r.belief(gapID, engine.BeliefQuery{Now: seconds(1e5)}); b.Quantity.Declaration.Tolerance.Lower != 7 || b.Quantity.Revision != 2 {
		t.Errorf("the belief rests on revision %d with limit %v", b.Quantity.Revision, b.Quantity.Declaration.Tolerance.Lower)
	}
}

// An ID that is given to a renewal is none that a client has given.
func TestRenewalIDIsUnused(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	for _, id := range []string{"renewal-3", ""} {
		if _, err := r.keeper.Renew(context.Background(), gapID, with(renewal(), func(r *engine.Renewal) { r.RequestID = id }), seconds(200)); err != nil {
			t.Fatal(err)
		}
	}
	if all, err := r.keeper.Renewals(gapID); err != nil || len(all) != 2 {
		t.Errorf("got %+v (%v), want two", all, err)
	}
}

// A gain that readings have taught is still known after a renewal.
func TestLearnedGainOutlivesARenewal(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, with(gap(), func(d *engine.Declaration) { d.Prior.StandardDeviation = 0.001 }))
	r.declareInstrument("gauge", sharpGauge(func(d *engine.InstrumentDeclaration) { d.Calibrations[0].RelativeBiasStandardUncertainty = 0.1 }))
	for i := range 100 {
		r.post(seconds(200), byGauge(seconds(float64(i+1)), 105))
	}
	next := with(renewal(), func(r *engine.Renewal) { r.Time, r.Prior.Mean, r.Prior.StandardDeviation = seconds(150), 200, 50 })
	if _, err := r.keeper.Renew(context.Background(), gapID, next, seconds(200)); err != nil {
		t.Fatal(err)
	}
	r.post(seconds(200), byGauge(seconds(160), 210))
	b := r.settled(gapID, engine.BeliefQuery{Now: seconds(200)})
	if mean, sd := b.Level.Location(), b.Level.Scale(); math.Abs(mean-200) > 0.1 || math.Abs(sd-0.1) > 0.01 {
		t.Errorf("after a reading of 210 with 5 %% too much the next part is %v, u %v; want 200, 0.1", mean, sd)
	}
}

// Drifts begin each at its own time, whichever instrument was met first.
func TestDriftsBeginInAnyOrder(t *testing.T) {
	var sds []float64
	for _, first := range []engine.InstrumentID{"gauge", "other"} {
		r := newRig(t, engine.Options{})
		r.declare(gapID, with(vagueGap(), func(d *engine.Declaration) {
			d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 1000, Per: time.Second}
		}))
		for id, from := range map[engine.InstrumentID]float64{"gauge": 2000, "other": 1000} {
			r.declareInstrument(id, sharpGauge(func(d *engine.InstrumentDeclaration) {
				d.Calibrations[0] = engine.Calibration{ValidFrom: seconds(from), BiasStandardUncertainty: 0.1, DriftStandardDeviation: 1, DriftPer: 100 * time.Second}
			}))
		}
		for i, id := range []engine.InstrumentID{first, "gauge", "other"} {
			early := byGauge(seconds(float64(i)), 100)
			early.Instrument = id
			r.post(seconds(4000), early)
		}
		b := r.belief(gapID, engine.BeliefQuery{HasTime: true, Time: seconds(3000)})
		sds = append(sds, b.Biases[1].StandardDeviation)
	}
	if want := math.Sqrt(0.01 + 20); math.Abs(sds[0]-want) > 1e-3 || math.Abs(sds[1]-want) > 1e-3 {
		t.Errorf("2000 s after its calibration the bias is known to %v, want %v", sds, want)
	}
}

// Before any reading a forecast moves the prior on from now: a walk has crossed
// a limit with twice the probability of being beyond it (reflection).
func TestForecastBeforeAnyReading(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, engine.Declaration{
		Unit: "mm", Prior: engine.Prior{Form: engine.PriorNormal, Mean: 100, StandardDeviation: 1e-6},
		Dynamics:  engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 10, Per: time.Minute},
		Tolerance: engine.Tolerance{HasUpper: true, Upper: 120},
	})
	f := r.forecast(gapID, engine.ForecastQuery{Now: start, Horizon: 4 * time.Minute, Steps: 4})
	for i, s := range f.Steps {
		if sd := 10 * math.Sqrt(float64(i+1)); math.Abs(s.Level.Scale()-sd) > 1e-6 || math.Abs(s.Crossed.Either-2*s.Breach.Either) > 1e-6 {
			t.Errorf("after %d min: sd %v, breach %v, crossed %v", i+1, s.Level.Scale(), s.Breach.Either, s.Crossed.Either)
		}
	}
}

// A new calibration in the list doesn't hide that an old one is gone.
func TestCalibrationIsNotReplacedByAnother(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	r.declareInstrument("gauge", gauge())
	r.post(seconds(100), byGauge(seconds(1), 101))
	d := gauge()
	d.Calibrations = append(d.Calibrations[1:], engine.Calibration{ValidFrom: seconds(5000), BiasStandardUncertainty: 1})
	if _, _, err := r.keeper.DeclareInstrument(context.Background(), "gauge", d, engine.Condition{}, start); err == nil {
		t.Error("the calibration that a reading rests on could be taken away")
	}
}

// An instrument can be asked for while a quantity that it is the first to read is new.
func TestInstrumentOfANewQuantity(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declareInstrument("gauge", gauge())
	var asking sync.WaitGroup
	done := make(chan struct{})
	asking.Go(func() {
		for {
			select {
			case <-done:
				return
			default:
				r.keeper.Instrument("gauge")
			}
		}
	})
	for i := range 300 {
		id := engine.QuantityID(fmt.Sprint("q", i))
		var both sync.WaitGroup
		both.Go(func() { r.declare(id, gap()) })
		reading := byGauge(start, 100)
		reading.Quantity = id
		r.post(start, reading, reading)
		both.Wait()
	}
	close(done)
	asking.Wait()
}
