package posterior

import (
	"math"
	"testing"
)

// TestLogBetween holds the faster logarithm against the slower one, which has its own
// table.
func TestLogBetween(t *testing.T) {
	for _, width := range []float64{1e-9, 1e-4, 0.03, 0.3, 1, 7, 300} {
		for a := -60.0; a < 60; a += 0.37 {
			got, want := logBetween(a, a+width, width), logNormalBetween(a, a+width, width)
			if !(math.Abs(got-want) <= 2e-9+1e-14*math.Abs(want)) {
				t.Errorf("ln P(%v, %v) = %v, want %v", a, a+width, got, want)
			}
		}
	}
	if got, want := logBetween(math.Inf(-1), -3, math.Inf(1)), logNormalTail(3); got != want {
		t.Errorf("ln P(-Inf, -3) = %v, want %v", got, want)
	}
}

// TestRoundedNormals sums the probabilities of displayed values to the variance of a
// rounded normal, its mean on a displayed value: (Sheppard 1898; the sums to 12 digits
// by the formula of the normal distribution).
func TestRoundedNormals(t *testing.T) {
	for _, c := range []struct{ sigma, variance float64 }{
		{0.2, 0.0124193306517}, {0.3, 0.0955824244551}, {0.5, 0.325412762586}, {1, 1.08333332236}, {2, 4.08333333333},
	} {
		sum := 0.0
		for k := -40; k <= 40; k++ {
			lower := (float64(k) - 0.5) / c.sigma
			sum += float64(k*k) * math.Exp(logBetween(lower, lower+1/c.sigma, 1/c.sigma))
		}
		if math.Abs(sum/c.variance-1) > 1e-8 {
			t.Errorf("sigma %v: variance %.12g, want %.12g", c.sigma, sum, c.variance)
		}
	}
}

// TestExponentialMomentsOfADisplay: after one displayed reading and a flat prior the level
// is uniform plus noise plus bias, so
//
//	E exp(k level) = exp(k m + k^2 (r^2 + u^2) / 2) sinh(k d / 2) / (k d / 2).
func TestExponentialMomentsOfADisplay(t *testing.T) {
	const m, d = 1.3, 0.8
	for _, r := range []float64{0.01, 0.2, 2} {
		for _, u := range []float64{0, 0.3} {
			var c Counts
			c.Add(Indication{m - d/2, m + d/2}, 0, 1)
			p := c.Posterior(Prior{Vague: true}, Noise{Known: true, SD: r}, Bias{Mean: 0.5, SD: u})
			moment := func(k float64) float64 {
				return math.Exp(k*(m-0.5)+k*k*(r*r+u*u)/2) * math.Sinh(k*d/2) / (k * d / 2)
			}
			mean, sd, ok := p.shape.(*layers).exponentialMoments()
			want := math.Sqrt(moment(2) - moment(1)*moment(1))
			if !ok || math.Abs(mean/moment(1)-1) > 1e-5 || math.Abs(sd/want-1) > 1e-4 {
				t.Errorf("r %v, u %v: %v, %v, %v, want %v, %v", r, u, mean, sd, ok, moment(1), want)
			}
			learned := c.Posterior(Prior{SD: 1}, Noise{Guess: r, Worth: 2}, Bias{})
			if _, _, ok := learned.shape.(*layers).exponentialMoments(); ok {
				t.Error("exp of a level of learned r has moments")
			}
		}
	}
}
