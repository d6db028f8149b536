package modelcheck_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/modelcheck"
)

// priorConflicts takes readings of a level with white noise r and the prior N(0, 1), and tells whether the
// prior is objected to.
func priorConflicts(rng *rand.Rand, law *modelcheck.Law, level, r float64, readings int) bool {
	var tally modelcheck.Tally
	sum := 0.0
	for n := 1; n <= readings; n++ {
		sum += level + r*rng.NormFloat64()
		if tally.PriorLook(n) {
			after := 1 / (1 + float64(n)/(r*r))
			tally.Prior(law, n, sum/(r*r)*after, 1, after)
		}
	}
	return tally.Result(law) == modelcheck.PriorConflict
}

// normalBeyond returns the z with P(|Z| > z) = p.
func normalBeyond(p float64) float64 {
	return root(0, 38, p, func(z float64) float64 { return math.Erfc(z / math.Sqrt2) })
}

// With the level at 4, n readings make the score N(4 sqrt(f), f r^2 / n), f = 1 / (1 + r^2/n)
// being the share of the prior's variance that they take away.
func TestPowerAgainstPriorOffBy4(t *testing.T) {
	rng := source(t)
	const priors = 4000
	law := modelcheck.LawOf(modelcheck.Settings{})
	const level = modelcheck.DefaultObjectionsPerYear / 4
	power := func(r, n, level float64) float64 {
		f := 1 / (1 + r*r/n)
		return below((4*math.Sqrt(f) - normalBeyond(level)) / (r * math.Sqrt(f/n)))
	}
	for _, test := range []struct {
		name        string
		r           float64
		least, most float64
	}{
		{"all known at once", 0.1, power(0.1, 1, level), power(0.1, 1, level)},
		{"looks at 1 and 32 readings", 1, power(1, 32, 0.8*level), power(1, 32, 0.8*level) + power(1, 1, 0.2*level)},
		{"looks at 16 and 64 readings", 3, power(3, 64, 0.8*level), power(3, 64, 0.8*level) + power(3, 16, 0.2*level)},
	} {
		share := 0.0
		for range priors {
			if priorConflicts(rng, &law, 4, test.r, 64) {
				share += 1.0 / priors
			}
		}
		t.Logf("%s: prior off by 4 found in %.4f, from %.4f to %.4f", test.name, share, test.least, test.most)
		middle, margin := (test.least+test.most)/2, (test.most-test.least)/2
		within(t, test.name, share, middle, margin+excess*math.Sqrt(test.least*(1-test.least)/priors)+1.0/priors)
	}
}

// A right prior is objected to with the probability of one look, or of two that overlap.
func TestRightPriorsAreBelieved(t *testing.T) {
	rng := source(t)
	law := eager(64)
	const priors = 60000
	for _, r := range []float64{0.1, 1, 3} {
		count := 0.0
		for range priors {
			if priorConflicts(rng, &law, rng.NormFloat64(), r, 64) {
				count++
			}
		}
		least, most := priors*perTest, priors*perTest
		if r > 0.2 {
			least *= 0.8
		}
		t.Logf("r = %v: %v conflicts, expected %.0f to %.0f", r, count, least, most)
		margin := (most - least) / 2
		within(t, "conflicts", count, least+margin, margin+excess*math.Sqrt(most))
	}
}

// The same for a level that walks: the prior is judged by what it has become.
func TestRightPriorsOfWalksAreBelieved(t *testing.T) {
	rng := source(t)
	law := eager(64)
	const priors = 30000
	count := 0.0
	for range priors {
		level, mean, variance, before := rng.NormFloat64(), 0.0, 1.0, 1.0
		var tally modelcheck.Tally
		for n := 1; n <= 16; n++ {
			step := 0.1 * rng.ExpFloat64()
			level += math.Sqrt(step) * rng.NormFloat64()
			variance += step
			before += step
			gain := variance / (variance + 0.09)
			mean += gain * (level + 0.3*rng.NormFloat64() - mean)
			variance *= 1 - gain
			if tally.PriorLook(n) {
				tally.Prior(&law, n, mean, before, variance)
			}
		}
		if tally.Result(&law) == modelcheck.PriorConflict {
			count++
		}
	}
	const most, least = priors * perTest, 0.8 * priors * perTest
	t.Logf("%v conflicts, expected %.0f to %.0f", count, least, most)
	within(t, "conflicts", count, (most+least)/2, (most-least)/2+excess*math.Sqrt(most))
}
