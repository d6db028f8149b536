package posterior_test

import (
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// What is published with how much knowledge.
func TestForms(t *testing.T) {
	vague, proper := vaguePrior(), posterior.Prior{Mean: 1, SD: 0.5}
	known, absent := knownNoise(0.1), absentNoise()
	reference, guess := learnedNoise(0, 0), learnedNoise(0.1, 4)
	const none, normal, student, mixture = posterior.FormNone, posterior.FormNormal, posterior.FormStudent, posterior.FormMixture
	one, same, two := []added{{1, 0}}, []added{{1, 0}, {1, 0}, {1, 0}}, []added{{1, 0}, {1.1, 0}}
	own := []added{{1, 0.2}}
	for _, c := range []struct {
		name        string
		readings    []added
		prior       posterior.Prior
		noise       posterior.Noise
		level, next posterior.Form
		why         string
	}{
		{"known, nothing", nil, vague, known, none, none, "flat level"},
		{"known, prior", nil, proper, known, normal, normal, "the prior"},
		{"known, reading", own, vague, known, normal, normal, "its reading"},
		{"absent, prior", nil, proper, absent, normal, none, "no r for a next reading"},
		{"absent, own", own, vague, absent, normal, none, "no r for a next reading"},
		{"reference, nothing", nil, vague, reference, none, none, "nothing"},
		{"reference, prior", nil, proper, reference, none, none, "nothing before two distinct readings"},
		{"reference, own", own, vague, reference, normal, none, "the level doesn't involve r"},
		{"reference, own and prior", own, proper, reference, normal, none, "the level doesn't involve r"},
		{"reference, one", one, vague, reference, none, none, "improper in r"},
		{"reference, equal ones", same, proper, reference, none, none, "improper at r = 0"},
		{"reference, two", two, vague, reference, student, student, "proper"},
		{"reference, two and prior", two, proper, reference, mixture, mixture, "proper"},
		{"reference, two and own", append(two, own...), vague, reference, mixture, mixture, "own readings act as a prior"},
		{"guess, nothing", nil, vague, guess, none, none, "flat level"},
		{"guess, prior", nil, proper, guess, normal, mixture, "r from its prior"},
		{"guess, one", one, vague, guess, student, student, "r from its prior"},
		{"guess, equal ones", same, vague, guess, student, student, "r from its prior"},
		{"guess, one and prior", one, proper, guess, mixture, mixture, "r from its prior"},
	} {
		var k posterior.Constant
		for _, a := range c.readings {
			a.to(&k)
		}
		level, next := k.Posterior(c.prior, c.noise), k.Predictive(c.prior, c.noise)
		if level.Form() != c.level || next.Form() != c.next {
			t.Errorf("%s: %v and %v, want %v and %v: %s", c.name, level.Form(), next.Form(), c.level, c.next, c.why)
		}
		if k.Count() != len(c.readings) {
			t.Errorf("%s: counted %d", c.name, k.Count())
		}
	}
}

// Which moments exist (JCGM 101:2008, 6.4.9.4; for the mixture's next reading E
// r and E r^2, whose density falls as r^-(worth + n + 1)).
func TestMoments(t *testing.T) {
	two, proper := learnedAll([]float64{1, 1.1}), posterior.Prior{Mean: 1, SD: 0.5}
	three := learnedAll([]float64{1, 1.1, 1.3})
	var nothing posterior.Constant
	reference := learnedNoise(0, 0)
	for _, c := range []struct {
		name     string
		p        posterior.Posterior
		mean, sd bool
	}{
		{"none", posterior.Posterior{}, false, false},
		{"t_1", two.Posterior(vaguePrior(), reference), false, false},
		{"t_2", three.Posterior(vaguePrior(), reference), true, false},
		{"t_1.5", two.Posterior(vaguePrior(), learnedNoise(1, 0.5)), true, false},
		{"t_2.5", two.Posterior(vaguePrior(), learnedNoise(1, 1.5)), true, true},
		{"mixture", two.Posterior(proper, reference), true, true},
		{"next of two", two.Predictive(proper, reference), true, false},
		{"next of three", three.Predictive(proper, reference), true, true},
		{"next of none, worth 1", nothing.Predictive(proper, learnedNoise(1, 1)), false, false},
		{"next of none, worth 2", nothing.Predictive(proper, learnedNoise(1, 2)), true, false},
		{"next of none, worth 3", nothing.Predictive(proper, learnedNoise(1, 3)), true, true},
	} {
		_, mean := c.p.Mean()
		_, sd := c.p.StandardDeviation()
		if mean != c.mean || sd != c.sd {
			t.Errorf("%s: mean %v, sd %v; want %v, %v", c.name, mean, sd, c.mean, c.sd)
		}
		if math.IsNaN(c.p.Quantile(0.9)) != (c.p.Form() == posterior.FormNone) {
			t.Errorf("%s: quantile %v", c.name, c.p.Quantile(0.9))
		}
	}
	// Without readings the next one is N(mean, SD^2 + r^2), E r^2 = guess^2 worth / (worth - 2).
	sd, _ := nothing.Predictive(proper, learnedNoise(1, 6)).StandardDeviation()
	near(t, "sd of the next of none", sd, math.Sqrt(0.25+6.0/4), 1e-12)
}

// A known r that turns out to be needed after readings were kept as informing
// one, and repeatability in each state.
func TestRepeatabilityStates(t *testing.T) {
	k := learnedAll([]float64{0.95, 1.00, 0.93})
	if r := k.Repeatability(vaguePrior(), knownNoise(0.3), 0.95); r != (posterior.Repeatability{Known: true, StandardDeviation: 0.3}) {
		t.Errorf("known: %+v", r)
	}
	if r := k.Repeatability(vaguePrior(), absentNoise(), 0.95); r != (posterior.Repeatability{}) {
		t.Errorf("absent: %+v", r)
	}
	r := k.Repeatability(vaguePrior(), learnedNoise(0, 0), 0.95)
	// s sqrt(2 / chi-squared_2 quantile), chi-squared with 2 degrees of freedom being exponential
	s := math.Sqrt(0.0013) // of the three readings, by hand
	near(t, "estimate", r.Estimate, s, 1e-12)
	near(t, "median", r.Median, s*math.Sqrt(1/math.Ln2), 1e-12)
	near(t, "lower", r.Lower, s*math.Sqrt(1/-math.Log(0.025)), 1e-12)
	near(t, "upper", r.Upper, s*math.Sqrt(1/-math.Log(0.975)), 1e-12)

	same := learnedAll([]float64{2, 2})
	r = same.Repeatability(vaguePrior(), learnedNoise(0, 0), 0.95)
	if r.HasMedian || !r.HasEstimate || r.Estimate != 0 {
		t.Errorf("equal readings: %+v", r)
	}
	var nothing posterior.Constant
	r = nothing.Repeatability(vaguePrior(), learnedNoise(3, 2), 0.9)
	if r.HasEstimate || !r.HasMedian {
		t.Errorf("no reading: %+v", r)
	}
	near(t, "median of the prior", r.Median, 3*math.Sqrt(1/math.Ln2), 1e-12)
}

// JCGM 100:2008, 4.3.4: 95 % within +-1.96 u, and so on.
func TestIntervalPrior(t *testing.T) {
	for _, c := range []struct{ low, high, probability, mean, sd float64 }{
		{0.7, 0.9, 0.95, 0.8, 0.1 / 1.959963984540054},
		{-3, 5, 0.5, 1, 4 / 0.6744897501960817},
		{10, 10.2, 0.99, 10.1, 0.1 / 2.575829303548901},
		{-1e100, 1e100, 0.9, 0, 1e100 / 1.644853626951473},
	} {
		p := posterior.IntervalPrior(c.low, c.high, c.probability)
		within(t, "mean", p.Mean, c.mean, 1e-15*(math.Abs(c.low)+math.Abs(c.high)))
		near(t, "sd", p.SD, c.sd, 2e-14)
		n := posterior.Normal(posterior.LevelOf(p.Mean), p.SD)
		near(t, "probability", n.Between(c.low, c.high), c.probability, 1e-13)
	}
}

// A long series of quantised readings about a large value: exact arithmetic says
// what mean and S must be.
func TestLongSeries(t *testing.T) {
	rounds := 12_500_000
	if testing.Short() {
		rounds = 12_500
	}
	steps := [8]float64{0, 0.0625, 0, 0.125, -0.0625, 0.0625, 0, 0} // sum 0.1875, sum of squares 0.02734375
	const base = 1e9
	var known, learned posterior.Constant
	walk := posterior.NewWalk(posterior.Prior{Mean: base, SD: 1})
	for range rounds {
		for _, d := range steps {
			known.AddKnown(base+d, 0.1)
			learned.AddLearned(base + d)
			walk.Update(base+d, 0.1)
		}
	}
	n := float64(8 * rounds)
	mean := 0.1875 / 8
	spread := math.Sqrt((0.02734375 - 0.1875*mean) / 8)
	at := func(name string, p posterior.Posterior, mean, sd, tolerance float64) {
		// The upper tail at a point half a sd above the exact mean tells the mean
		// to better than a double of the value itself could.
		x := base + math.Round((mean+sd/2)*0x1p20)/0x1p20
		z := ((x - base) - mean) / sd
		within(t, name, p.UpperTail(x), math.Erfc(z/math.Sqrt2)/2, tolerance)
	}
	at("known", known.Posterior(vaguePrior(), knownNoise(0.1)), mean, 0.1/math.Sqrt(n), 1e-9)
	at("learned", learned.Posterior(vaguePrior(), learnedNoise(0, 0)), mean, spread/math.Sqrt(n-1), 1/n)
	at("walk", walk.Posterior(), mean/(1+0.01/n), 1/math.Sqrt(1+n/0.01), 1e-7)
	r := learned.Repeatability(vaguePrior(), learnedNoise(0, 0), 0.95)
	near(t, "estimate", r.Estimate, spread*math.Sqrt(n/(n-1)), 1e-14)
}

// At the ends of the permitted range everything stays finite.
func TestConstantAtTheEndsOfTheRange(t *testing.T) {
	sizes := []float64{1e-100, 1e-40, 1, 1e100}
	for _, y1 := range append(sizes, 0) {
		for _, y2 := range sizes {
			for _, u := range sizes {
				if y1 > 1e150*u || y2 > 1e150*u {
					continue
				}
				var k posterior.Constant
				k.AddKnown(y1, u)
				k.AddLearned(y2)
				k.AddLearned(-y2)
				for _, noise := range []posterior.Noise{learnedNoise(0, 0), learnedNoise(u, 1), learnedNoise(u, 1e6)} {
					for _, p := range []posterior.Posterior{k.Posterior(vaguePrior(), noise), k.Predictive(vaguePrior(), noise)} {
						checkFinite(t, p, []float64{y1, y2, u}, noise)
					}
				}
			}
		}
	}
}

func checkFinite(t *testing.T, p posterior.Posterior, what []float64, noise posterior.Noise) {
	t.Helper()
	mean, _ := p.Mean()
	lo, hi := p.Interval(0.95)
	for i, v := range []float64{mean, lo, hi} {
		if math.IsNaN(v) || math.IsInf(v, 0) || !(lo <= hi) {
			t.Fatalf("%v %v: number %d of %v is %v (%v, %v)", what, noise, i, p.Form(), v, lo, hi)
		}
	}
	a, b := p.LowerTail(lo), p.UpperTail(hi)
	if !(a <= 0.5+1e-10 && b <= 0.5+1e-10) { // they are 0.5 where no double is nearer
		t.Fatalf("%v %v: tails %v and %v", what, noise, a, b)
	}
}

func TestUpdatesAllocateNothing(t *testing.T) {
	var k posterior.Constant
	w := posterior.NewWalk(posterior.Prior{SD: 1})
	vague, noise, known := vaguePrior(), learnedNoise(0.1, 3), knownNoise(0.1)
	var sum float64
	allocations := testing.AllocsPerRun(100, func() {
		k.AddKnown(1, 0.1)
		k.AddLearned(2)
		w.Predict(0.1)
		w.Update(1, 0.1)
	})
	var l posterior.Constant
	allocations += testing.AllocsPerRun(100, func() {
		l.AddLearned(2)
		for _, p := range [...]posterior.Posterior{l.Posterior(vague, noise), l.Predictive(vague, noise), l.Posterior(vague, known), w.Posterior()} {
			lo, hi := p.Interval(0.95)
			sum += lo + hi + p.UpperTail(3) + p.LowerTail(3) + p.Between(1, 2)
		}
	})
	if allocations != 0 || math.IsNaN(sum) {
		t.Errorf("%v allocations, sum %v", allocations, sum)
	}
}
