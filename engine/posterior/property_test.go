package posterior_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// added is one reading of a constant.
type added struct{ y, u float64 } // u is 0 if the reading informs r

func (a added) to(c *posterior.Constant) {
	if a.u > 0 {
		c.AddKnown(a.y, a.u)
		return
	}
	c.AddLearned(a.y)
}

func draw(random *rand.Rand, n int, centre, spread float64) []added {
	out := make([]added, n)
	for i := range out {
		out[i].y = centre + spread*random.NormFloat64()
		if random.IntN(2) == 0 {
			out[i].u = spread * math.Exp(3*random.NormFloat64())
		}
	}
	// A far outlier as the origin is the worst there is for sums.
	if n > 0 && random.IntN(3) == 0 {
		out[0].y = centre + 1e9*spread
	}
	return out
}

func TestOrderAndRestartChangeNothing(t *testing.T) {
	random := source(t)
	priors := []posterior.Prior{vaguePrior(), {Mean: 7, SD: 2}}
	noises := []posterior.Noise{knownNoise(0.3), learnedNoise(0, 0), learnedNoise(0.5, 3)}
	for round := range 60 {
		spread := math.Exp(4 * random.NormFloat64())
		readings := draw(random, 2+random.IntN(200), math.Exp(8*random.NormFloat64()), spread)
		var inOrder, shuffled, restarted posterior.Constant
		for _, a := range readings {
			a.to(&inOrder)
		}
		for i, a := range readings {
			a.to(&restarted)
			if i%7 == 0 {
				again, err := posterior.DecodeConstant(restarted.AppendBinary(nil))
				if err != nil {
					t.Fatal(err)
				}
				restarted = again
			}
		}
		if inOrder != restarted {
			t.Fatalf("round %d: a restart changed the state", round)
		}
		random.Shuffle(len(readings), func(i, j int) { readings[i], readings[j] = readings[j], readings[i] })
		for _, a := range readings {
			a.to(&shuffled)
		}
		for _, prior := range priors {
			for _, noise := range noises {
				sameBelief(t, fmt.Sprint("round ", round, prior, noise), inOrder.Posterior(prior, noise), shuffled.Posterior(prior, noise))
			}
		}
	}
}

// sameBelief allows the mean two units in its last place and 1e-12 of the
// standard deviation, and that 1e-12 of itself.
func sameBelief(t *testing.T, name string, p, q posterior.Posterior) {
	t.Helper()
	if p.Form() != q.Form() {
		t.Fatalf("%s: %v and %v", name, p.Form(), q.Form())
	}
	pm, pok := p.Mean()
	qm, qok := q.Mean()
	ps, psok := p.StandardDeviation()
	qs, qsok := q.StandardDeviation()
	if pok != qok || psok != qsok {
		t.Errorf("%s: moments exist in one order only", name)
	}
	if pok && psok {
		within(t, name+" mean", pm, qm, 1e-12*qs+2*math.Abs(qm)*0x1p-52)
		near(t, name+" sd", ps, qs, 1e-12)
	}
}

func TestReadingNeverWidensAConstantOfKnownRepeatability(t *testing.T) {
	random := source(t)
	for range 200 {
		var c posterior.Constant
		prior := posterior.Prior{Mean: random.NormFloat64(), SD: math.Exp(3 * random.NormFloat64())}
		noise := knownNoise(math.Exp(3 * random.NormFloat64()))
		before := prior.SD * (1 + 1e-15)
		for range 50 {
			c.AddKnown(100*random.NormFloat64(), noise.SD)
			sd, _ := c.Posterior(prior, noise).StandardDeviation()
			if !(sd <= before) {
				t.Fatalf("a reading took sd from %v to %v", before, sd)
			}
			before = sd
		}
	}
}

// beliefs returns one of each form, and some harder ones.
func beliefs(t testing.TB) map[string]posterior.Posterior {
	out := map[string]posterior.Posterior{
		"normal":         posterior.Normal(posterior.LevelOf(2), 0.5),
		"normal, large":  posterior.Normal(posterior.LevelOf(1e9), 1),
		"student 0.5":    posterior.Student(posterior.LevelOf(-1), 2, 0.5),
		"student 1":      posterior.Student(posterior.LevelOf(0), 1, 1),
		"student 7":      posterior.Student(posterior.LevelOf(5), 0.01, 7),
		"student 1e7":    posterior.Student(posterior.LevelOf(5), 0.01, 1e7),
		"student 1999.5": posterior.Student(posterior.LevelOf(5), 0.01, 1999.5),
	}
	for _, c := range mixtureCases(t) {
		k, prior, noise := c.build()
		out["level, "+c.Name] = k.Posterior(prior, noise)
		out["next, "+c.Name] = k.Predictive(prior, noise)
	}
	return out
}

func TestProbabilitiesAddUp(t *testing.T) {
	random := source(t)
	for name, p := range beliefs(t) {
		for range 40 {
			a, b, c := p.Quantile(random.Float64()), p.Quantile(random.Float64()), p.Quantile(random.Float64())
			a, b, c = min(a, b, c), a+b+c-min(a, b, c)-max(a, b, c), max(a, b, c)
			if !(a < b && b < c) {
				continue // equal but for rounding
			}
			within(t, name+": total", p.LowerTail(a)+p.Between(a, c)+p.UpperTail(c), 1, 1e-12)
			near(t, name+": parts", p.Between(a, b)+p.Between(b, c), p.Between(a, c), 1e-11)
			within(t, name+": complement", p.LowerTail(b)+p.UpperTail(b), 1, 1e-12)
			within(t, name+": half line", p.Between(a, math.Inf(1)), p.UpperTail(a), 1e-15)
		}
	}
}

// Between in a tail and over a narrow gap is neither 0 nor noise.
func TestBetweenKeepsItsDigits(t *testing.T) {
	compared := 0
	for name, p := range beliefs(t) {
		for _, q := range []float64{0.3, 1e-3, 1e-30, 1e-200} {
			a, b := p.Quantile(q), p.Quantile(q*0.5)
			ulp := math.Abs(b) * 0x1p-52
			if !(a-b > 1e8*ulp) || math.IsInf(b, 0) {
				continue // not enough doubles in between
			}
			compared++
			near(t, fmt.Sprintf("%s: half of the tail %v", name, q), p.Between(b, a), q/2, 1e-6)
			middle, width := b+(a-b)/2, math.Max((a-b)*0x1p-20, 1e3*ulp)
			low, high := middle+width, middle+2*width
			whole, parts := p.Between(middle, high), p.Between(middle, low)+p.Between(low, high)
			near(t, fmt.Sprintf("%s: narrow gap beyond %v", name, q), parts, whole, 1e-9)
			if !(whole > 0) {
				t.Errorf("%s: nothing between two points", name)
			}
		}
	}
	if compared < 80 {
		t.Errorf("only %d gaps compared", compared)
	}
}

func TestQuantilesInvertTails(t *testing.T) {
	for name, p := range beliefs(t) {
		for _, q := range []float64{0.4999, 0.3, 0.025, 1e-3, 1e-9, 1e-40, 1e-250} {
			x, condition := p.Quantile(q), 1e-10
			// One unit in the last place of x moves the tail by x f.
			ulp := math.Abs(x) * 0x1p-52
			condition += 2 * p.Between(x-ulp, x+ulp) / q
			if !(condition < 1e-3) {
				continue
			}
			near(t, fmt.Sprintf("%s: lower tail at the quantile of %v", name, q), p.LowerTail(x), q, condition)
		}
		lo, hi := p.Interval(0.95)
		if p.Form() != posterior.FormNone && !(lo < hi) {
			t.Errorf("%s: interval from %v to %v", name, lo, hi)
		}
	}
}

// A mixture tends to Student t as what was known before fades, and to the known
// repeatability's normal as the guess of r hardens.
func TestMixtureLimits(t *testing.T) {
	k := learnedAll([]float64{4.1, 4.4, 3.9, 4.2})
	faded := k.Posterior(posterior.Prior{Mean: 4, SD: 1e8}, learnedNoise(0.2, 3))
	flat := k.Posterior(vaguePrior(), learnedNoise(0.2, 3))
	hard := k.Posterior(posterior.Prior{Mean: 4, SD: 0.2}, learnedNoise(0.2, 1e13))
	known := k.Posterior(posterior.Prior{Mean: 4, SD: 0.2}, knownNoise(0.2))
	for _, x := range []float64{3, 3.9, 4.2, 4.6, 6} {
		near(t, "upper tail as the prior fades", faded.UpperTail(x), flat.UpperTail(x), 1e-9)
		near(t, "lower tail as the prior fades", faded.LowerTail(x), flat.LowerTail(x), 1e-9)
		near(t, "upper tail as the guess hardens", hard.UpperTail(x), known.UpperTail(x), 1e-7)
	}
}

// A prior so firm that the readings don't matter makes the very first guess of
// a quantile exact; the search must notice.
func TestQuantileWhereTheFirstGuessIsExact(t *testing.T) {
	prior := posterior.Prior{Mean: 0, SD: 1e-60}
	p := learnedAll([]float64{1, -1}).Posterior(prior, learnedNoise(1, 1))
	for _, coverage := range []float64{0.5, 0.9, 0.95, 0.99} {
		lo, hi := p.Interval(coverage)
		_, z := posterior.Normal(posterior.Level{}, 1e-60).Interval(coverage)
		near(t, "lower", lo, -z, 1e-12)
		near(t, "upper", hi, z, 1e-12)
	}
}
