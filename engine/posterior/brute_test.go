package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// brute computes mixtures by a fine grid over ln r from the plain formulas, with
// no care for range or cost: p(r) prior times likelihood, the level integrated
// out, and the normal by precision weighting given r (Gelman et al. 2013, 2.5).
type brute struct {
	m0, s0, n, mean, a, worth float64
	next                      bool
}

// logTails returns ln P(X < x) and ln P(X > x).
func (b brute) logTails(x float64) (lower, upper float64) {
	var total, low, high logSum
	centre := math.Log(b.a/(b.worth+b.n)) / 2
	far := math.Log1p(math.Abs(x-b.mean)+math.Abs(x-b.m0)) - math.Min(centre, 0)
	for u := centre - 12; u < centre+60+far; u += 0.004 {
		r2 := math.Exp(2 * u)
		v := b.s0*b.s0 + r2/b.n
		p := -(b.worth+b.n-1)*u - b.a/2/r2 - math.Log(v)/2 - (b.mean-b.m0)*(b.mean-b.m0)/2/v
		w := 1/b.s0/b.s0 + b.n/r2
		mean, sd := (b.m0/b.s0/b.s0+b.mean*b.n/r2)/w, math.Sqrt(1/w)
		if b.next {
			sd = math.Sqrt(1/w + r2)
		}
		z := (x - mean) / sd
		total.add(p)
		low.add(p + logErfc(-z/math.Sqrt2) - math.Ln2)
		high.add(p + logErfc(z/math.Sqrt2) - math.Ln2)
	}
	return low.value() - total.value(), high.value() - total.value()
}

// logErfc is the logarithm of erfc, by Mills' ratio bounds' mean where erfc has
// vanished (DLMF 7.8.2; such terms carry less than 1e-290).
func logErfc(x float64) float64 {
	if x < 26 {
		return math.Log(math.Erfc(x))
	}
	return -x*x - math.Log(x*math.Sqrt(math.Pi)) - 1/(2*x*x)
}

// logSum adds exponentials.
type logSum struct{ top, sum float64 }

func (l *logSum) add(x float64) {
	switch {
	case l.sum == 0:
		l.top, l.sum = x, 1
	case x > l.top:
		l.top, l.sum = x, l.sum*math.Exp(l.top-x)+1
	default:
		l.sum += math.Exp(x - l.top)
	}
}

func (l *logSum) value() float64 { return l.top + math.Log(l.sum) }

func TestMixturesAgainstBruteForce(t *testing.T) {
	random := source(t)
	rounds := 24
	if testing.Short() {
		rounds = 4
	}
	for round := range rounds {
		spread := math.Exp(2 * random.NormFloat64())
		n := 1 + random.IntN(40)
		prior := posterior.Prior{Mean: 5 * random.NormFloat64(), SD: math.Exp(2 * random.NormFloat64())}
		noise := learnedNoise(spread*math.Exp(random.NormFloat64()), math.Exp(1.5*random.NormFloat64()))
		// readings at whole steps from their centre, so that S is exact below
		step, centre := spread/8, math.Round(20*random.NormFloat64())
		var k posterior.Constant
		var sum, squares float64
		for range n {
			d := math.Round(8 * random.NormFloat64())
			k.AddLearned(centre + d*step)
			sum += d
			squares += d * d
		}
		b := brute{
			m0: prior.Mean, s0: prior.SD, n: float64(n), mean: centre + sum/float64(n)*step, worth: noise.Worth,
			a:    noise.Worth*noise.Guess*noise.Guess + (squares-sum*sum/float64(n))*step*step,
			next: round%2 == 1,
		}
		p := k.Posterior(prior, noise)
		if b.next {
			p = k.Predictive(prior, noise)
		}
		for _, q := range []float64{1e-250, 1e-60, 1e-8, 0.2, 0.9} {
			x := p.Quantile(q)
			lower, upper := b.logTails(x)
			name := fmt.Sprintf("round %d, %+v, %+v", round, b, noise)
			within(t, name+" lower", math.Log(p.LowerTail(x)), lower, 1e-9)
			within(t, name+" upper", math.Log(p.UpperTail(x)), upper, 1e-9)
			within(t, name+" quantile", lower, math.Log(q), 1e-8)
		}
	}
}
