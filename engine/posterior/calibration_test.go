package posterior_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"leadline.example/engine/posterior"
)

// rounds is the number of simulated truths; -short takes a tenth.
func rounds() int {
	if testing.Short() {
		return 600
	}
	return 6000
}

// calibrated complains unless the probabilities that the beliefs gave to what
// lies below the truths are uniform: by coverage of the central 95 % within four
// standard errors, and by Kolmogorov's distance, whose scaled value passes 2.2
// with probability 1.2e-4 (Kolmogorov 1933: 2 exp(-2 d^2)).
func calibrated(t *testing.T, name string, below []float64) {
	t.Helper()
	n := float64(len(below))
	inside := 0.0
	slices.Sort(below)
	distance := 0.0
	for i, p := range below {
		if p >= 0.025 && p <= 0.975 {
			inside++
		}
		distance = max(distance, math.Abs(p-float64(i)/n), math.Abs(p-float64(i+1)/n))
	}
	off := (inside/n - 0.95) / math.Sqrt(0.95*0.05/n)
	t.Logf("%-34s coverage %.4f (%+.1f standard errors), distance %.2f", name, inside/n, off, distance*math.Sqrt(n))
	if math.Abs(off) > 4 || distance*math.Sqrt(n) > 2.2 {
		t.Errorf("%s: not calibrated", name)
	}
}

// simulate runs one model; draw returns P(below the truth) of one simulated truth.
func simulate(t *testing.T, random *rand.Rand, name string, draw func(*rand.Rand) float64) {
	t.Helper()
	below := make([]float64, rounds())
	for i := range below {
		below[i] = draw(random)
	}
	calibrated(t, name, below)
}

// drawR draws r from scaled inverse chi-squared with worth degrees of freedom.
func drawR(random *rand.Rand, guess float64, worth int) float64 {
	chi := 0.0
	for range worth {
		z := random.NormFloat64()
		chi += z * z
	}
	return guess * math.Sqrt(float64(worth)/chi)
}

// Truths from the declared proper prior.
func TestCalibrationOverThePrior(t *testing.T) {
	random := source(t)
	prior := posterior.Prior{Mean: 4, SD: 0.5}
	level := func(random *rand.Rand) float64 { return prior.Mean + prior.SD*random.NormFloat64() }

	simulate(t, random, "constant, known r", func(random *rand.Rand) float64 {
		theta, r := level(random), 0.7
		var k posterior.Constant
		for range 1 + random.IntN(5) {
			k.AddKnown(theta+r*random.NormFloat64(), r)
		}
		return k.Posterior(prior, knownNoise(r)).LowerTail(theta)
	})

	guess := learnedNoise(0.4, 4)
	learn := func(random *rand.Rand, n int) (*posterior.Constant, float64, float64) {
		theta, r := level(random), drawR(random, 0.4, 4)
		var k posterior.Constant
		for range n {
			k.AddLearned(theta + r*random.NormFloat64())
		}
		if random.IntN(3) == 0 {
			k.AddKnown(theta+0.3*random.NormFloat64(), 0.3)
		}
		return &k, theta, r
	}
	simulate(t, random, "constant, learned r: level", func(random *rand.Rand) float64 {
		k, theta, _ := learn(random, random.IntN(6))
		return k.Posterior(prior, guess).LowerTail(theta)
	})
	simulate(t, random, "constant, learned r: next reading", func(random *rand.Rand) float64 {
		k, theta, r := learn(random, random.IntN(6))
		return k.Predictive(prior, guess).LowerTail(theta + r*random.NormFloat64())
	})
	simulate(t, random, "walk", func(random *rand.Rand) float64 {
		theta := level(random)
		w := posterior.NewWalk(prior)
		for range 1 + random.IntN(8) {
			v := random.ExpFloat64()
			theta += math.Sqrt(v) * random.NormFloat64()
			w.Predict(v)
			if u := 0.2 + random.Float64(); random.IntN(3) > 0 {
				w.Update(theta+u*random.NormFloat64(), u)
			}
		}
		return w.Posterior().LowerTail(theta)
	})
}

// The interval of r itself, truths from its prior.
func TestCalibrationOfRepeatability(t *testing.T) {
	random := source(t)
	prior, guess := posterior.Prior{Mean: 4, SD: 0.5}, learnedNoise(0.4, 4)
	n := rounds() / 2
	below, inside := 0.0, 0.0
	for range n {
		theta, r := 4+0.5*random.NormFloat64(), drawR(random, 0.4, 4)
		var k posterior.Constant
		for range random.IntN(6) {
			k.AddLearned(theta + r*random.NormFloat64())
		}
		got := k.Repeatability(prior, guess, 0.8)
		if r < got.Median {
			below++
		}
		if got.Lower < r && r < got.Upper {
			inside++
		}
	}
	within(t, "share below the median", below/float64(n), 0.5, 4*0.5/math.Sqrt(float64(n)))
	within(t, "share in the 80 % interval", inside/float64(n), 0.8, 4*0.4/math.Sqrt(float64(n)))
}

// Vague priors at a fixed truth: Student's coverage is exact, whatever r is.
func TestCoverageAtAFixedTruth(t *testing.T) {
	random := source(t)
	const theta, r = -30.0, 4.0
	reference, vague := learnedNoise(0, 0), vaguePrior()
	for _, n := range []int{2, 3, 10} {
		simulate(t, random, fmt.Sprint("level from ", n, " readings"), func(random *rand.Rand) float64 {
			var k posterior.Constant
			for range n {
				k.AddLearned(theta + r*random.NormFloat64())
			}
			return k.Posterior(vague, reference).LowerTail(theta)
		})
	}
	simulate(t, random, "next reading from 4", func(random *rand.Rand) float64 {
		var k posterior.Constant
		for range 4 {
			k.AddLearned(theta + r*random.NormFloat64())
		}
		return k.Predictive(vague, reference).LowerTail(theta + r*random.NormFloat64())
	})
	simulate(t, random, "own standard deviations", func(random *rand.Rand) float64 {
		var k posterior.Constant
		for range 4 {
			u := math.Exp(random.NormFloat64())
			k.AddKnown(theta+u*random.NormFloat64(), u)
		}
		return k.Posterior(vague, absentNoise()).LowerTail(theta)
	})
	simulate(t, random, "walk from nothing", func(random *rand.Rand) float64 {
		var w posterior.Walk
		level := theta
		for range 5 {
			level += 2 * random.NormFloat64()
			w.Predict(4)
			w.Update(level+r*random.NormFloat64(), r)
		}
		return w.Posterior().LowerTail(level)
	})
}

// A wrong model must fail the check: here r is taken for 20 % less than it is.
func TestCalibrationCheckCanFail(t *testing.T) {
	random := source(t)
	prior := posterior.Prior{Mean: 0, SD: 1}
	inside := 0
	const n = 6000
	for range n {
		theta := random.NormFloat64()
		var k posterior.Constant
		k.AddKnown(theta+random.NormFloat64(), 0.8)
		if p := k.Posterior(prior, absentNoise()).LowerTail(theta); p > 0.025 && p < 0.975 {
			inside++
		}
	}
	if e := (float64(inside)/n - 0.95) / math.Sqrt(0.95*0.05/n); math.Abs(e) < 4 {
		t.Errorf("a repeatability 20 %% off passed: %.1f standard errors", e)
	}
}
