package posterior_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// magnitude draws from 10^lo to 10^hi.
func magnitude(random *rand.Rand, lo, hi float64) float64 {
	return math.Pow(10, lo+(hi-lo)*random.Float64())
}

// admissible draws a filter with biases from the limits in doc.go, or from those of
// Account, which it then keeps.
func admissible(random *rand.Rand) (posterior.Filter, []posterior.Term) {
	account, reach := random.IntN(2) == 0, 100.0
	if account {
		reach = 35
	}
	sd := func() float64 { return magnitude(random, -reach, reach) }
	square := func() float64 { return math.Pow(sd(), 2) }
	m := posterior.Motion{
		Form: posterior.MotionForm(random.IntN(4)), Walk: square(), Wander: magnitude(random, -2*reach, 1.5*reach),
		Mean: sd(), Variance: square(), Rate: magnitude(random, -12, 3),
	}
	f := posterior.NewFilter(m, posterior.Prior{Mean: sd(), SD: sd(), Vague: random.IntN(4) == 0}, posterior.SlopePrior{SD: magnitude(random, -reach, 0.9*reach)})
	if account {
		f.Account()
	}
	var terms []posterior.Term
	for _, p := range []posterior.Process{{Variance: square()}, {Variance: square(), Diffusion: square()}, {Variance: square(), Rate: magnitude(random, -12, 3)}} {
		terms = append(terms, posterior.Term{State: f.Add(p), Coefficient: 1})
	}
	return f, terms
}

// Within the limits that doc.go states nothing leaves the range of a double, no
// variance is negative, a reading widens nothing, and silence of a constant, a walk or a
// bias narrows nothing.
func TestFilterAtTheLimits(t *testing.T) {
	random := source(t)
	for n := range 3_000 {
		f, terms := admissible(random)
		centre := magnitude(random, -100, 100)
		variances := func() []float64 {
			all := make([]float64, f.States())
			for i := range all {
				all[i] = f.Variance(i)
			}
			return all
		}
		for range 12 {
			h := magnitude(random, -3, 9)
			before := variances()
			f.Advance(h)
			for i, v := range variances() {
				if i >= f.States()-3 && !(v >= before[i]*(1-1e-12)) {
					t.Fatalf("-seed %d, case %d: a time of %v takes variance %d from %v to %v", *seed, n, h, i, before[i], v)
				}
			}
			vague := f.Vague()
			before = variances()
			u := max(magnitude(random, -100, 100), centre*1e-150)
			f.Update(centre*(1+random.NormFloat64()), centre/7, 1, terms, u*u)
			for i, v := range variances() {
				if !(v >= 0) || math.IsInf(v, 0) || !(vague && i == 0) && !(v <= before[i]*(1+1e-9)) {
					t.Fatalf("-seed %d, case %d: a reading takes variance %d from %v to %v", *seed, n, i, before[i], v)
				}
				if m := f.Mean(i); math.IsNaN(m) || math.IsInf(m, 0) {
					t.Fatalf("-seed %d, case %d: mean %d is %v", *seed, n, i, m)
				}
			}
			if v := f.Variance(0); v == 0 {
				t.Fatalf("-seed %d, case %d: the level has no variance", *seed, n)
			}
		}
		if _, err := posterior.DecodeFilter(f.AppendBinary(nil)); err != nil {
			t.Fatalf("-seed %d, case %d: %v", *seed, n, err)
		}
		for _, p := range f.Parts() {
			if math.IsNaN(p.Variance) || math.IsInf(p.Variance, 0) {
				t.Fatalf("-seed %d, case %d: part %+v", *seed, n, p)
			}
		}
	}
}
