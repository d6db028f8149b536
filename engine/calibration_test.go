package engine_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"gonum.org/v1/gonum/stat/distuv"

	"leadline.example/engine"
)

// world simulates one quantity and its instrument, from what is declared of them:
// it draws the truth from the prior and lets everything move and err as stated.
type world struct {
	rng    *rand.Rand
	d      engine.Declaration
	i      engine.InstrumentDeclaration
	at     engine.Instant
	level  float64
	slope  float64 // per second
	biases []float64
	noise  float64 // correlated
	visit  float64
}

func newWorld(rng *rand.Rand, d engine.Declaration, i engine.InstrumentDeclaration) *world {
	w := &world{rng: rng, d: d, i: i, at: start, level: d.Prior.Mean + d.Prior.StandardDeviation*rng.NormFloat64()}
	if s := d.Dynamics.Slope; s.Per > 0 {
		w.slope = (s.Mean + s.StandardDeviation*rng.NormFloat64()) / s.Per.Seconds()
	}
	w.noise = i.Repeatability.Correlated.StandardDeviation * rng.NormFloat64()
	common := map[string]float64{}
	for _, c := range i.Calibrations {
		if _, met := common[c.Reference]; !met {
			common[c.Reference] = rng.NormFloat64()
		}
		own := math.Sqrt(c.BiasStandardUncertainty*c.BiasStandardUncertainty - c.CommonStandardUncertainty*c.CommonStandardUncertainty)
		w.biases = append(w.biases, c.Bias+common[c.Reference]*c.CommonStandardUncertainty+own*rng.NormFloat64())
	}
	return w
}

// move goes on in steps of at most a second, within which a slope counts as
// constant; the other movements are exact in any step.
func (w *world) move(seconds float64) {
	const longest = 1.0
	for ; seconds > 0; seconds -= longest {
		h := min(seconds, longest)
		y := w.d.Dynamics
		w.level += w.slope * h
		if y.Per > 0 {
			w.level += y.StandardDeviation * math.Sqrt(h/y.Per.Seconds()) * w.rng.NormFloat64()
		}
		if y.Wander.Per > 0 {
			w.slope += y.Wander.StandardDeviation / y.Slope.Per.Seconds() * math.Sqrt(h/y.Wander.Per.Seconds()) * w.rng.NormFloat64()
		}
		if y.Form == engine.DynamicsMeanReverting {
			left := math.Exp2(-h / y.HalfLife.Seconds())
			w.level = y.Mean + left*(w.level-y.Mean) + y.StandardDeviation*math.Sqrt(1-left*left)*w.rng.NormFloat64()
		}
		if c := w.i.Repeatability.Correlated; c.Time > 0 {
			left := math.Exp(-h / c.Time.Seconds())
			w.noise = left*w.noise + c.StandardDeviation*math.Sqrt(1-left*left)*w.rng.NormFloat64()
		}
		w.at += engine.Instant(h * 1e9)
	}
}

// read returns an indication, by the instrument if that is named.
func (w *world) read(by engine.InstrumentID, visit int) engine.Reading {
	r := engine.Reading{HasTime: true, Time: w.at, Instrument: by}
	if by == "" {
		r.Value = w.level + w.d.Repeatability.StandardDeviation*w.rng.NormFloat64()
		return r
	}
	r.Occasion = fmt.Sprint("visit ", visit)
	r.Value = w.level + w.noise + w.visit + w.i.Repeatability.StandardDeviation*w.rng.NormFloat64()
	if n := calibration(w.i, w.at); n >= 0 {
		r.Value += w.biases[n]
	}
	return r
}

// simulated runs so many worlds through a keeper and returns the probabilities
// that the beliefs gave to what lies below the truths.
func simulated(t *testing.T, rng *rand.Rand, worlds int, d engine.Declaration, i engine.InstrumentDeclaration) []float64 {
	r := newRig(t, engine.Options{})
	var all []*world
	for n := range worlds {
		w := newWorld(rng, d, i)
		all = append(all, w)
		id, by := engine.QuantityID(fmt.Sprint("q", n)), engine.InstrumentID("")
		r.declare(id, d)
		if i.Unit != "" { // its own: across quantities the service takes biases as independent
			by = engine.InstrumentID(fmt.Sprint("i", n))
			r.declareInstrument(by, i)
		}
		var readings []engine.Reading
		for visit := range 1 + rng.IntN(3) {
			w.visit = i.Repeatability.BetweenOccasions * rng.NormFloat64()
			for range 1 + rng.IntN(3) {
				w.move(float64(rng.IntN(20)))
				reading := w.read(by, visit)
				reading.Quantity = id
				readings = append(readings, reading)
			}
		}
		rng.Shuffle(len(readings), func(a, b int) { readings[a], readings[b] = readings[b], readings[a] })
		r.post(w.at, readings...)
		w.move(float64(rng.IntN(20)))
	}
	var below []float64
	for n, w := range all {
		b := r.settled(engine.QuantityID(fmt.Sprint("q", n)), engine.BeliefQuery{HasTime: true, Time: w.at})
		below = append(below, b.Level.LowerTail(w.level))
	}
	return below
}

// uniform complains of probabilities that aren't uniform: of coverage at 50, 90,
// 95 and 99 %, and of the numbers in twenty bins. Each of the five comparisons
// fails a correct engine with probability alpha.
func uniform(t *testing.T, name string, below []float64, alpha float64) {
	t.Helper()
	n := float64(len(below))
	for _, p := range []float64{0.5, 0.9, 0.95, 0.99} {
		inside := 0.0
		for _, b := range below {
			if math.Abs(b-0.5) <= p/2 {
				inside++
			}
		}
		covered := distuv.Binomial{N: n, P: p}
		tail := 2 * min(covered.CDF(inside), 1-covered.CDF(inside-1))
		t.Logf("%-38s %2.0f %% intervals cover %.2f %%", name, 100*p, 100*inside/n)
		if tail < alpha {
			t.Errorf("%s: %v %% intervals cover %v of %v truths: probability %.2g", name, 100*p, inside, n, tail)
		}
	}
	const bins = 20
	var counts [bins]float64
	for _, b := range below {
		counts[min(bins-1, int(b*bins))]++
	}
	chi := 0.0
	for _, c := range counts {
		chi += (c - n/bins) * (c - n/bins) / (n / bins)
	}
	if tail := (distuv.ChiSquared{K: bins - 1}).Survival(chi); tail < alpha {
		t.Errorf("%s: ranks aren't uniform: chi-squared %.1f of %d degrees of freedom, probability %.2g", name, chi, bins-1, tail)
	}
}

// Averaged over truths from the declared priors the beliefs cover what they say,
// under every dynamics, with and without what instruments add.
func TestBeliefsAreCalibrated(t *testing.T) {
	motions := map[string]engine.Dynamics{
		"constant":       {},
		"random_walk":    {Form: engine.DynamicsRandomWalk, StandardDeviation: 0.5, Per: 20 * time.Second},
		"linear_trend":   {Form: engine.DynamicsLinearTrend, Slope: engine.Slope{Mean: 1, StandardDeviation: 2, Per: time.Minute}},
		"trend and walk": {Form: engine.DynamicsLinearTrend, StandardDeviation: 0.3, Per: 20 * time.Second, Slope: engine.Slope{StandardDeviation: 2, Per: time.Minute}},
		"mean_reverting": {Form: engine.DynamicsMeanReverting, Mean: 101, StandardDeviation: 1, HalfLife: 30 * time.Second},
		"wandering trend": {
			Form: engine.DynamicsLinearTrend, Slope: engine.Slope{StandardDeviation: 1, Per: time.Minute},
			Wander: engine.Wander{StandardDeviation: 1, Per: 20 * time.Second},
		},
	}
	plain := engine.InstrumentDeclaration{}
	biased := engine.InstrumentDeclaration{
		Unit: "mm", Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.3},
		Calibrations: []engine.Calibration{{ValidFrom: start, Bias: 0.5, BiasStandardUncertainty: 0.6}},
	}
	recalibrated := biased
	recalibrated.Calibrations = []engine.Calibration{
		{ValidFrom: start, BiasStandardUncertainty: 0.6, Reference: "block", CommonStandardUncertainty: 0.4},
		{ValidFrom: seconds(15), BiasStandardUncertainty: 0.5, Reference: "block", CommonStandardUncertainty: 0.4},
	}
	shared := biased
	shared.Repeatability.Correlated = engine.Correlated{StandardDeviation: 0.5, Time: 15 * time.Second}
	shared.Repeatability.BetweenOccasions = 0.4
	instruments := map[string]engine.InstrumentDeclaration{"no instrument": plain, "bias": biased, "two calibrations": recalibrated, "correlated, occasions": shared}

	worlds := 2_000
	if testing.Short() {
		worlds = 200
	}
	alpha := 1e-3 / float64(5*len(motions)*len(instruments)) // all together fail a correct engine once in 1,000 runs
	for _, s := range seeds(1) {
		for motion, y := range motions {
			for instrument, i := range instruments {
				name := motion + ", " + instrument
				t.Run(name, func(t *testing.T) {
					d := gap()
					d.Repeatability.StandardDeviation, d.Dynamics = 0.4, y
					rng := rand.New(rand.NewPCG(s, uint64(len(name))))
					uniform(t, name, simulated(t, rng, worlds, d, i), alpha)
				})
			}
		}
	}
}
