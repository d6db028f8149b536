package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// Durbin & Koopman (2012), 2.2.5 and 2.9, on the Nile, by the joint filter.
func TestNileByFilter(t *testing.T) {
	walk := posterior.Motion{Form: posterior.MotionWalk, Walk: 1469.1}
	for file, start := range map[string]posterior.Prior{
		"published/nile_filter_a0_P1e7.csv": {SD: math.Sqrt(1e7)}, "published/nile_filter_diffuse.csv": vaguePrior(),
	} {
		f := posterior.NewFilter(walk, start, posterior.SlopePrior{})
		for i, row := range table(t, file) {
			name := fmt.Sprint(file, " ", row[1])
			if i > 0 {
				f.Advance(1)
			}
			if next := f.Predictive(0, 1, nil, 15099); row[3] != "" {
				near(t, name+": next", next.Location(), number(t, row[3]), 4e-12)
				near(t, name+": its variance", next.Scale()*next.Scale(), number(t, row[6]), 4e-12)
			} else if next.Form() != posterior.FormNone || f.Posterior().Form() != posterior.FormNone || !f.Vague() {
				t.Errorf("%s: a belief before any reading", name)
			}
			f.Update(number(t, row[2]), 0, 1, nil, 15099)
			near(t, name+": mean", f.Mean(0), number(t, row[8]), 4e-12)
			near(t, name+": variance", f.Variance(0), number(t, row[9]), 4e-12)
		}
		prints(t, "level of 1970", f.Mean(0), "798.37") // Durbin & Koopman, from memory
		prints(t, "its variance", f.Variance(0), "4032.158")
	}
}

// West & Harrison (1997), table 2.1, by the joint filter.
func TestKuritByFilter(t *testing.T) {
	f := posterior.NewFilter(posterior.Motion{Form: posterior.MotionWalk, Walk: 5}, posterior.Prior{Mean: 130, SD: 20}, posterior.SlopePrior{})
	for _, row := range table(t, "published/kurit.csv") {
		f.Advance(1)
		near(t, "Q after "+row[0], f.Variance(0)+100, number(t, row[2]), 2e-11)
		f.Update(number(t, row[1]), 0, 1, nil, 100)
		near(t, "m after "+row[0], f.Mean(0), number(t, row[6]), 2e-11)
		near(t, "C after "+row[0], f.Variance(0), number(t, row[7]), 2e-11)
	}
}

// Steady gains of the trend whose slope alone is driven by white noise of density w: with r = 1
// and a reading a second, tracking index L^2 = w,
//
//	beta^2 = L^2 (1 - alpha),  alpha = sqrt(2 beta + beta^2 / 12) - beta / 2
//
// Bar-Shalom, Li & Kirubarajan (2001), Estimation with Applications to Tracking and
// Navigation, 6.5.3 (continuous white noise acceleration), from memory.
func TestAlphaBetaGains(t *testing.T) {
	for _, w := range []float64{1e-6, 1e-4, 1e-2, 1, 100} {
		alpha, beta := steady(posterior.Motion{Form: posterior.MotionTrend, Wander: w}, 1)
		near(t, fmt.Sprint("beta^2 at ", w), beta*beta, w*(1-alpha), 1e-10)
		near(t, fmt.Sprint("alpha at ", w), alpha, math.Sqrt(2*beta+beta*beta/12)-beta/2, 1e-10)
	}
}

// A random constant and one that moves a little: Welch & Bishop (2006), An
// Introduction to the Kalman Filter, 3; recomputed with mpmath, 12 digits. The
// variance that is 0.0002 in the text is that of a constant.
func TestRandomConstantByFilter(t *testing.T) {
	for walk, want := range map[float64]float64{0: 0.000199960007998, 1e-5: 0.000339210817789} {
		f := posterior.NewFilter(posterior.Motion{Form: posterior.MotionWalk, Walk: walk}, posterior.Prior{SD: 1}, posterior.SlopePrior{})
		for range 50 {
			f.Advance(1)
			f.Update(-0.37727, 0, 1, nil, 0.01)
		}
		near(t, fmt.Sprint("variance with ", walk), f.Variance(0), want, 1e-11)
	}
}
