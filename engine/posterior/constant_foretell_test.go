package posterior_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// Foretell gives the tails of Predictive, which are held against tables of an independent
// program, to a relative 1e-3 down to 1e-8; where nothing is foretold neither does.
func TestForetellAgreesWithPredictive(t *testing.T) {
	rng := rand.New(rand.NewPCG(31, 7))
	worst := 0.0
	for range 400 {
		p := posterior.Prior{Vague: rng.IntN(4) == 0, Mean: 10 * rng.NormFloat64(), SD: math.Exp(3 * rng.NormFloat64())}
		n := posterior.Noise{Guess: math.Exp(rng.NormFloat64()), Worth: math.Exp(math.Abs(4 * rng.NormFloat64()))}
		if rng.IntN(3) == 0 {
			n = posterior.Noise{}
		}
		var c posterior.Constant
		for range rng.IntN(40) {
			c.AddLearned(3 * rng.NormFloat64())
		}
		if rng.IntN(3) == 0 {
			c.AddKnown(rng.NormFloat64(), 0.5)
		}
		q := c.Predictive(p, n)
		for range 5 {
			y := 8 * rng.NormFloat64()
			below, above, ok := c.Foretell(p, n, y)
			if ok != (q.Form() != posterior.FormNone) {
				t.Fatalf("prior %+v, noise %+v, %d readings: foretold %v, predictive of form %v", p, n, c.Count(), ok, q.Form())
			}
			if !ok {
				continue
			}
			for _, tail := range [...][2]float64{{below, q.LowerTail(y)}, {above, q.UpperTail(y)}} {
				if tail[1] < 1e-8 {
					continue
				}
				off := math.Abs(tail[0]/tail[1] - 1)
				worst = max(worst, off)
				if off > 1e-3 {
					t.Errorf("prior %+v, noise %+v, %d readings: a tail beyond %v is %v, want %v", p, n, c.Count(), y, tail[0], tail[1])
				}
			}
		}
	}
	t.Logf("worst relative error %.2g", worst)
}
