package engine_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"time"

	"leadline.example/engine"
)

// means is by what readings are taken.
type means int

const (
	directly means = iota
	byInstrument
	byCalibrated
)

// combination is a row of what is tested.
type combination struct {
	form    engine.DynamicsForm
	learned bool
	by      means
	kind    string // display, censored, outliers, mixed or values
	log     bool
}

func (c combination) String() string {
	name := []string{"constant", "random_walk", "linear_trend", "mean_reverting"}[c.form] + "/" + map[bool]string{true: "learned", false: "known"}[c.learned]
	name += "/" + [...]string{"direct", "instrument", "calibrated"}[c.by] + "/" + c.kind
	if c.log {
		name += "/log"
	}
	return name
}

// combinations lists what is supported.
func combinations() (all []combination) {
	for _, form := range []engine.DynamicsForm{engine.DynamicsConstant, engine.DynamicsRandomWalk, engine.DynamicsMeanReverting} {
		for _, learned := range []bool{false, true} {
			for _, by := range []means{directly, byInstrument, byCalibrated} {
				for _, kind := range []string{"display", "censored", "outliers", "mixed", "values"} {
					c := combination{form, learned, by, kind, false}
					switch {
					case by == directly && kind == "display", by == byCalibrated && form == engine.DynamicsMeanReverting,
						by == byCalibrated && form == engine.DynamicsRandomWalk && learned:
						continue
					case kind != "values":
						all = append(all, c)
					}
					if c.log = true; by != byCalibrated && !(by == byInstrument && kind == "values") {
						all = append(all, c)
					}
				}
			}
		}
	}
	return all
}

func (c combination) displays() bool {
	return c.by != directly && (c.kind == "display" || c.kind == "mixed")
}
func (c combination) censors() bool                    { return c.kind == "censored" || c.kind == "mixed" }
func (c combination) outlying() bool                   { return c.kind == "outliers" || c.kind == "mixed" }
func uniformly(rng *rand.Rand, lo, hi float64) float64 { return lo + (hi-lo)*rng.Float64() }

// drawn is a world in the making.
type drawn struct {
	combination
	*indicated
	rng   *rand.Rand
	r, d  float64 // repeatability and, on the scale of the level, resolution
	scale float64 // the wider of them
	base  float64 // about which the level lies, on its scale
	by    *engine.InstrumentDeclaration
}

// randomIndicated draws a case.
func randomIndicated(rng *rand.Rand, of combination) *indicated {
	w := &drawn{combination: of, indicated: &indicated{}, rng: rng, base: 100}
	if of.log {
		w.base = 1
	}
	w.d = uniformly(rng, 0.2, 1.2)
	least := 0.02
	switch moves := of.form != engine.DynamicsConstant; {
	case of.by == byCalibrated && moves:
		least = 0.3
	case of.learned:
		least = 0.2
	}
	w.r = w.d * math.Exp(uniformly(rng, math.Log(least), 0))
	w.scale = w.r
	if w.displays() {
		w.scale = w.d
	}
	w.instruments = map[engine.InstrumentID]engine.InstrumentDeclaration{}
	w.declareQuantity()
	w.declareGauge()
	w.declareNoise()
	w.draw()
	return w.indicated
}

// unit returns a value of the level's scale in the quantity's unit.
func (w *drawn) unit(x float64) float64 {
	if w.log {
		return math.Exp(x)
	}
	return x
}

func (w *drawn) declareQuantity() {
	rng := w.rng
	w.indicated.d = engine.Declaration{Unit: "mm"}
	d := &w.indicated.d
	if w.log {
		d.Scale = engine.ScaleLog
	}
	s := w.scale * math.Exp(uniformly(rng, -0.7, 1.4))
	switch middle := w.base + s*rng.NormFloat64(); {
	case rng.IntN(3) == 0:
	case w.log:
		d.Prior = engine.Prior{Form: engine.PriorInterval, Low: math.Exp(middle - 1.5*s), High: math.Exp(middle + 1.5*s), Probability: 0.9}
	default:
		d.Prior = engine.Prior{Form: engine.PriorNormal, Mean: middle, StandardDeviation: s}
	}
	if rng.IntN(3) == 0 && w.form != engine.DynamicsConstant {
		d.Prior.HasTime, d.Prior.Time = true, start-engine.Instant(20*(1+rng.IntN(30)))*engine.Instant(time.Second)
	}
	d.Dynamics.Form = w.form
	moved := w.scale * math.Exp(uniformly(rng, -1.2, 0.3))
	switch w.form {
	case engine.DynamicsRandomWalk:
		d.Dynamics.StandardDeviation, d.Dynamics.Per = moved, 20*time.Second
	case engine.DynamicsMeanReverting:
		d.Dynamics.Mean, d.Dynamics.StandardDeviation = w.unit(w.base), w.scale*uniformly(rng, 0.7, 4)
		d.Dynamics.HalfLife = time.Duration(60+rng.IntN(1000)) * time.Second
	}
	if w.outlying() {
		d.Outliers = engine.Outliers{Probability: math.Exp(uniformly(rng, math.Log(0.005), math.Log(0.2))), Inflation: uniformly(rng, 2, 12)}
	}
}

func (w *drawn) declareGauge() {
	if w.combination.by == directly {
		return
	}
	rng := w.rng
	i := engine.InstrumentDeclaration{Unit: "mm"}
	if w.displays() {
		i.Resolution = w.d
		if w.log {
			i.Resolution = w.d * w.unit(w.base)
		}
	}
	if w.censors() && rng.IntN(2) == 0 {
		i.MeasuringInterval.HasUpper, i.MeasuringInterval.Upper = true, w.unit(w.base+w.scale*uniformly(rng, 0, 2))
	}
	if w.combination.by == byCalibrated {
		u := w.scale * math.Exp(uniformly(rng, -1.2, 0.4))
		calibrations := 1 + rng.IntN(3)
		if *indicationCases == 0 {
			calibrations = 1
		}
		for k := range calibrations {
			i.Calibrations = append(i.Calibrations, engine.Calibration{
				ValidFrom: start + engine.Instant(200*k-10)*engine.Instant(time.Second), Bias: u * rng.NormFloat64(), BiasStandardUncertainty: u * uniformly(rng, 0.7, 1.3),
			})
		}
	}
	w.by = &i
}

// declareNoise declares r, of the quantity or of the instrument.
func (w *drawn) declareNoise() {
	rng := w.rng
	known := engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: w.r}
	if w.combination.learned {
		known = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: w.r * math.Exp(0.4*rng.NormFloat64()), Worth: uniformly(rng, 2, 20)}
		if w.displays() {
			known.Guess = math.Max(known.Guess, 0.15*w.d)
		}
		switch rng.IntN(4) {
		case 0:
			known.Floor = w.r * uniformly(rng, 0.4, 0.9)
		case 1:
			known = engine.Repeatability{Form: engine.RepeatabilityLearnedReference, Floor: w.r * uniformly(rng, 0.4, 0.9)}
		}
	}
	w.indicated.d.Repeatability = known
	if w.by == nil {
		return
	}
	if rng.IntN(2) == 0 && !w.log {
		w.indicated.d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 1}
		if known.Learned() {
			w.by.Repeatability.Learned = known
		} else {
			w.by.Repeatability.StandardDeviation = w.r
		}
	}
	w.ids = []engine.InstrumentID{"gauge"}
	w.instruments["gauge"] = *w.by
}

// draw lets the world go on and be read.
func (w *drawn) draw() {
	rng, d := w.rng, &w.indicated.d
	most := 40
	switch moves := w.form != engine.DynamicsConstant; {
	case moves && (w.combination.learned || w.combination.by == byCalibrated):
		most = 10
	case moves:
		most = 20
	}
	n := 4 + rng.IntN(most-3)
	exact := w.exact()
	level := w.base
	if mean, sd, flat := exact.start(d.Prior); !flat {
		level = mean + sd*rng.NormFloat64()
	}
	var biases []float64
	if w.by != nil {
		for _, c := range w.by.Calibrations {
			biases = append(biases, c.Bias+c.BiasStandardUncertainty*rng.NormFloat64())
		}
	}
	at, renewed := start, -1
	if rng.IntN(5) == 0 && (w.form != engine.DynamicsConstant || w.combination.by != byCalibrated) {
		renewed = 1 + rng.IntN(n-1)
	}
	for i := range n {
		if i > 0 && rng.IntN(4) > 0 {
			to := at + engine.Instant(20*(1+rng.IntN(4)))*engine.Instant(time.Second)
			left, about, sd := exact.motion(at, to)
			level, at = about+left*(level-about)+sd*rng.NormFloat64(), to
		}
		if renewed >= 0 && i >= renewed && at > start && len(w.renewals) == 0 && at > w.readings[i-1].Time {
			level = w.renew(at)
		}
		eta := level
		if n, _, _ := exact.bias(at); n >= 0 {
			eta += biases[n]
		}
		r := w.read(at, eta, i < 4)
		r.ID = engine.ReadingID(fmt.Sprint(i))
		w.readings = append(w.readings, r)
	}
	w.last = at
}

// renew replaces what is measured, and returns the level of what takes its place.
func (w *drawn) renew(at engine.Instant) float64 {
	p := engine.Prior{Form: engine.PriorInterval, Low: w.unit(w.base - w.scale), High: w.unit(w.base + 2*w.scale), Probability: 0.5}
	w.renewals = []engine.Renewal{{RequestID: "new part", Time: at, Prior: p}}
	mean, sd, _ := w.exact().start(p)
	return mean + sd*w.rng.NormFloat64()
}

// read draws what is read of eta; plainly, if asked for, that is in a way that bounds it.
func (w *drawn) read(at engine.Instant, eta float64, plainly bool) engine.Reading {
	rng := w.rng
	r := engine.Reading{Quantity: gapID, HasTime: true, Time: at}
	sd := w.r
	if rng.IntN(8) == 0 {
		r.HasUncertainty, r.RandomStandardUncertainty = true, w.r*uniformly(rng, 0.7, 2)
		sd = r.RandomStandardUncertainty
	} else if rng.IntN(6) == 0 {
		r.Samples = uint32(1 + rng.IntN(4))
		sd /= math.Sqrt(float64(r.Samples))
	}
	if plainly && w.combination.learned {
		r.HasUncertainty, r.RandomStandardUncertainty = false, 0
	}
	if o := w.indicated.d.Outliers; rng.Float64() < o.Probability {
		sd *= o.Inflation
	}
	y := eta + sd*rng.NormFloat64()
	if w.by != nil {
		r.Instrument = "gauge"
	}
	if w.censors() && !plainly && rng.IntN(2) == 0 {
		w.censor(&r, y)
		return r
	}
	r.Value = w.unit(y)
	if w.by == nil {
		return r
	}
	if d := w.by.Resolution; d > 0 {
		r.Value = d * math.Round(r.Value/d)
		if w.log && r.Value == 0 {
			r.Value, r.Extent = d/2, engine.ExtentBelow
		}
	}
	if in := &w.by.MeasuringInterval; plainly && in.HasUpper && r.Value > in.Upper {
		w.censor(&r, y)
	}
	return r
}

// censor lets a reading say between or beyond what the indication was.
func (w *drawn) censor(r *engine.Reading, y float64) {
	end := y + 1.5*w.scale*w.rng.NormFloat64()
	r.Value = w.unit(end)
	r.Extent = engine.ExtentAbove
	if y < end {
		r.Extent = engine.ExtentBelow
	}
	if w.rng.IntN(3) == 0 {
		r.Extent = engine.ExtentBetween
		r.Value, r.Upper = w.unit(y-w.scale*uniformly(w.rng, 0.02, 1.5)), w.unit(y+w.scale*uniformly(w.rng, 0.02, 1.5))
	}
}
