package engine_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"gonum.org/v1/gonum/stat/distuv"

	"leadline.example/engine"
)

// honestWorld declares a quantity and an instrument whose truths are drawn as declared.
type honestWorld struct {
	name   string
	d      engine.Declaration
	i      engine.InstrumentDeclaration // without a unit: there is none
	censor bool                         // half of the readings tell a side of a random limit alone
}

// honestWorlds lists worlds for every method by which beliefs that aren't normal are held.
func honestWorlds() []honestWorld {
	d := engine.Declaration{
		Unit: "mm", Prior: engine.Prior{Form: engine.PriorInterval, Low: 18, High: 22, Probability: 0.9},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.3},
		Tolerance:     engine.Tolerance{HasUpper: true, Upper: 20.3},
		ModelCheck:    engine.ModelCheck{Window: 16, ObjectionsPerYear: 1000},
	}
	learned := with(d, func(d *engine.Declaration) {
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.4, Worth: 5}
	})
	walks := func(d engine.Declaration) engine.Declaration {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.2, Per: time.Minute}
		return d
	}
	reverts := func(d engine.Declaration) engine.Declaration {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsMeanReverting, Mean: 20, StandardDeviation: 1, HalfLife: 5 * time.Minute}
		return d
	}
	outlying := func(d engine.Declaration) engine.Declaration {
		d.Outliers = engine.Outliers{Probability: 0.1, Inflation: 6}
		return d
	}
	logarithmic := func(d engine.Declaration) engine.Declaration {
		d.Scale, d.Prior.Low, d.Prior.High, d.Tolerance.Upper = engine.ScaleLog, 2, 20, 7
		return d
	}
	plain := engine.InstrumentDeclaration{}
	shows := displayed(func(*engine.InstrumentDeclaration) {})
	biased := displayed(func(i *engine.InstrumentDeclaration) {
		i.Calibrations = []engine.Calibration{{ValidFrom: start, Bias: 0.2, BiasStandardUncertainty: 0.4}}
	})
	return []honestWorld{
		{"BANK: walk, learned", walks(learned), plain, false},
		{"BANK: reverting, learned", reverts(learned), plain, false},
		{"COUNTS: displayed", d, shows, false},
		{"COUNTS: learned, displayed, biased", learned, biased, false},
		{"COUNTS: learned, censored", learned, plain, true},
		{"GRID: outliers", outlying(d), plain, false},
		{"GRID: walk, displayed", walks(d), shows, false},
		{"GRID: walk, displayed, biased, censored", walks(d), biased, true},
		{"GRID: reverting, learned, displayed, outliers", reverts(outlying(learned)), shows, false},
		{"LOG, SUMS: learned", logarithmic(learned), plain, false},
		{"LOG, GRID: walk, censored", logarithmic(walks(d)), plain, true},
		{"LOG, COUNTS: displayed", logarithmic(d), shows, false},
	}
}

// truth draws a level and its r from what is declared, has the level read n times a minute
// apart, and returns it as it was at the last reading.
func (w *honestWorld) truth(rng *rand.Rand, id engine.QuantityID, by engine.InstrumentID, n int) (level float64, readings []engine.Reading) {
	o := &dense{d: w.d}
	if w.i.Unit != "" {
		o.by = &w.i
	}
	mean, sd, _ := o.start(w.d.Prior)
	level = mean + sd*rng.NormFloat64()
	r := w.d.Repeatability.StandardDeviation
	if known := w.d.Repeatability; known.Learned() {
		r = known.Guess * math.Sqrt(known.Worth/distuv.ChiSquared{K: known.Worth, Src: rng}.Rand())
	}
	_, bias, u := o.bias(start)
	bias += u * rng.NormFloat64()
	for i := range n {
		x := engine.Reading{Quantity: id, Instrument: by, HasTime: true, Time: seconds(float64(60 * i)), ID: engine.ReadingID(fmt.Sprint(i))}
		if i > 0 {
			left, about, sd := o.motion(seconds(float64(60*i-60)), x.Time)
			level = about + left*(level-about) + sd*rng.NormFloat64()
		}
		s := r
		if rng.Float64() < w.d.Outliers.Probability {
			s *= w.d.Outliers.Inflation
		}
		y := level + bias + s*rng.NormFloat64()
		limit := mean + sd*rng.NormFloat64() // which must not depend on the truth
		if w.d.Scale == engine.ScaleLog {
			y, limit = math.Exp(y), math.Exp(limit)
		}
		switch {
		case w.censor && rng.IntN(2) == 0 && y > limit:
			x.Value, x.Extent = limit, engine.ExtentAbove
		case w.censor && y <= limit && rng.IntN(2) == 0:
			x.Value, x.Extent = limit, engine.ExtentBelow
		case o.by != nil && w.d.Scale == engine.ScaleLog:
			x.Value, x.Extent = math.Max(0.25, math.Round(y)), engine.ExtentValue
			if x.Value == 0.25 { // it showed 0, which the logarithmic scale hasn't
				x.Value, x.Extent = 0.5, engine.ExtentBelow
			}
		case o.by != nil:
			x.Value = math.Round(y)
		default:
			x.Value = y
		}
		readings = append(readings, x)
	}
	if w.d.Scale == engine.ScaleLog {
		level = math.Exp(level)
	}
	return level, readings
}

// run has worlds believed in and returns what the beliefs gave to what lies below the
// truths and to the breaches, which of these there were, and objections of the model check.
func (w *honestWorld) run(t *testing.T, rng *rand.Rand, worlds, n int) (below, breach []float64, breached []bool, objections int) {
	r := newRig(t, engine.Options{})
	for k := range worlds {
		id, by := engine.QuantityID(fmt.Sprint("q", k)), engine.InstrumentID("")
		r.declare(id, w.d)
		if w.i.Unit != "" {
			by = engine.InstrumentID(fmt.Sprint("i", k))
			r.declareInstrument(by, w.i)
		}
		level, readings := w.truth(rng, id, by, n)
		at, limit := readings[n-1].Time, readings[0].Value // as good a limit as any, and often in doubt
		rng.Shuffle(n-n/2, func(i, j int) { i, j = i+n/2, j+n/2; readings[i], readings[j] = readings[j], readings[i] })
		for _, res := range r.post(at, readings...) {
			if res.Status != engine.Applied {
				t.Fatal(res.Detail)
			}
		}
		r.declare(id, with(w.d, func(d *engine.Declaration) { d.Tolerance.Upper = limit }))
		b := r.settled(id, engine.BeliefQuery{HasTime: true, Time: at})
		if got := string(b.Method); k == 0 && !slices.Contains([]string{w.name[:len(got)], w.name[min(5, len(w.name)-len(got)):][:len(got)]}, got) {
			t.Errorf("%s is held by %s", w.name, got)
		}
		below, breach = append(below, b.Level.LowerTail(level)), append(breach, b.Above)
		breached = append(breached, level > limit)
		objections += b.Check.Raised
	}
	return below, breach, breached, objections
}

// reliable complains of breach probabilities that aren't met by as many breaches, in each of ten
// bins: the number of breaches has tails no wider than those of the binomial with the
// mean probability (Hoeffding 1956, from memory). A correct engine fails in one of
// 1 / alpha runs at most.
func reliable(t *testing.T, name string, breach []float64, breached []bool, alpha float64) {
	t.Helper()
	var got, want, n [10]float64
	for i, p := range breach {
		bin := min(9, int(10*p))
		want[bin], n[bin] = want[bin]+p, n[bin]+1
		if breached[i] {
			got[bin]++
		}
	}
	for i := range got {
		if n[i] == 0 {
			continue
		}
		expected := distuv.Binomial{N: n[i], P: want[i] / n[i]}
		if tail := 2 * min(expected.CDF(got[i]), 1-expected.CDF(got[i]-1)); tail < alpha/10 {
			t.Errorf("%s: of %v breach probabilities from %.1f to %.1f, which sum to %.1f, %v came true: probability %.2g", name, n[i], float64(i)/10, float64(i+1)/10, want[i], got[i], tail)
		}
	}
	t.Logf("%s: breaches %v of %.1f expected", name, got, want)
}

// Averaged over truths as declared, intervals of beliefs that aren't normal cover what they
// say, breaches are as frequent as their probabilities, and the model check leaves correct models alone.
func TestBeliefsFromIndicationsAreHonest(t *testing.T) {
	worlds, n := 30, 18
	if *indicationCases > 0 {
		worlds = 10 * int(*indicationCases)
	}
	all := honestWorlds()
	alpha := 1e-3 / float64(7*len(all)) // all together fail a correct engine once in 1,000 runs
	for _, s := range seeds(1) {
		for k, w := range all {
			t.Run(w.name, func(t *testing.T) {
				t.Parallel()
				rng := rand.New(rand.NewPCG(s, uint64(k)))
				worlds := worlds
				if w.d.Repeatability.Learned() && w.name[:4] != "BANK" {
					worlds /= 3 // which take as long as ten others
				}
				below, breach, breached, objections := w.run(t, rng, worlds, n)
				uniform(t, fmt.Sprintf("-seed %d: %s", s, w.name), below, alpha)
				reliable(t, fmt.Sprintf("-seed %d: %s", s, w.name), breach, breached, alpha)
				// A window of three tests and two looks at the prior, each at 0.01 / 4 at most.
				expected := float64(worlds) * 5 * 0.01 / 4
				if tail := 1 - (distuv.Poisson{Lambda: expected}).CDF(float64(objections)-1); tail < alpha {
					t.Errorf("-seed %d: %s: %d objections to correct models, at most %.1f expected: probability %.2g", s, w.name, objections, expected, tail)
				}
				t.Logf("%d objections, at most %.1f expected", objections, expected)
			})
		}
	}
}
