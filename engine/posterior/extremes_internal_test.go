package posterior

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// mostWork bounds the points at which an integrand is computed for one answer.
const mostWork = 20_000

// extremeCase is an admissible declaration with readings; see doc.go.
type extremeCase struct {
	prior    Prior
	noise    Noise
	readings [][2]float64 // value, own u or 0
}

func (c extremeCase) constant() *Constant {
	var k Constant
	for _, r := range c.readings {
		if r[1] > 0 {
			k.AddKnown(r[0], r[1])
			continue
		}
		k.AddLearned(r[0])
	}
	return &k
}

// logUniform draws from 10^lo to 10^hi.
func logUniform(random *rand.Rand, lo, hi float64) float64 {
	return math.Pow(10, lo+(hi-lo)*random.Float64())
}

func signed(random *rand.Rand, x float64) float64 {
	if random.IntN(2) == 0 {
		return -x
	}
	return x
}

// drawExtreme draws from the admissible ranges; half of the readings near each
// other, as readings are.
func drawExtreme(random *rand.Rand) extremeCase {
	c := extremeCase{prior: Prior{Mean: signed(random, logUniform(random, -100, 100)), SD: logUniform(random, -100, 100)}}
	c.noise = Noise{Guess: logUniform(random, -100, 100), Worth: logUniform(random, 0, 9)}
	switch random.IntN(6) {
	case 0:
		c.noise = Noise{}
	case 1:
		c.noise.Worth = 1
	case 2:
		c.noise.Worth = 1 + logUniform(random, -12, 0)
	}
	centre, spread := signed(random, logUniform(random, -100, 100)), logUniform(random, -100, 100)
	for range random.IntN(6) {
		y, u := signed(random, logUniform(random, -100, 100)), 0.0
		if random.IntN(2) == 0 {
			y = math.Max(-1e100, math.Min(1e100, centre+spread*random.NormFloat64()))
		}
		if random.IntN(4) == 0 {
			u = math.Max(logUniform(random, -100, 100), math.Abs(y)*1e-150)
		}
		c.readings = append(c.readings, [2]float64{y, u})
	}
	for _, r := range c.readings {
		c.prior.SD = math.Max(c.prior.SD, math.Abs(r[0]-c.prior.Mean)*1e-150)
	}
	c.prior.SD = math.Min(1e100, c.prior.SD)
	c.prior.Vague = random.IntN(4) == 0
	return c
}

// counted makes one belief anew, counting the work.
func counted(k *Constant, p Prior, n Noise, predictive bool, work *int) Posterior {
	b := k.Posterior(p, n)
	if predictive {
		b = k.Predictive(p, n)
	}
	if b.form != FormMixture {
		return b
	}
	s, _ := k.spread(n)
	m := prepared(k.informed(p, n), s, predictive)
	m.work = work
	return m.build()
}

// The seed is fixed: no run differs from another.
func TestExtremes(t *testing.T) {
	random := rand.New(rand.NewPCG(1, 2))
	rounds := 250
	if testing.Short() {
		rounds = 60
	}
	most, mixtures := 0, 0
	for round := range rounds {
		c := drawExtreme(random)
		k := c.constant()
		for _, predictive := range []bool{false, true} {
			work := 0
			p := counted(k, c.prior, c.noise, predictive, &work)
			if p.form == FormNone {
				continue
			}
			if p.form == FormMixture {
				mixtures++
			}
			e := &examined{T: t, name: fmt.Sprintf("round %d, predictive %v", round, predictive), p: p, work: &work, most: &most}
			e.check("making it")
			e.moments()
			e.quantiles()
			e.probabilities(random, c)
		}
		finiteRepeatability(t, fmt.Sprintf("round %d, %+v", round, c), k, c)
	}
	if mixtures < rounds/4 {
		t.Errorf("only %d mixtures", mixtures)
	}
	t.Logf("most points for one answer: %d", most)
}

// examined is one belief under examination.
type examined struct {
	*testing.T
	name       string
	p          Posterior
	work, most *int
}

// check bounds the work since the last one.
func (e *examined) check(what string) {
	*e.most = max(*e.most, *e.work)
	if *e.work > mostWork {
		e.Errorf("%s: %s took %d points", e.name, what, *e.work)
	}
	*e.work = 0
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

func (e *examined) moments() {
	if mean, ok := e.p.Mean(); ok && !finite(mean) {
		e.Errorf("%s: mean %v", e.name, mean)
	}
	if sd, ok := e.p.StandardDeviation(); ok && !(finite(sd) && sd > 0) {
		e.Errorf("%s: standard deviation %v", e.name, sd)
	}
}

func (e *examined) quantiles() {
	before := math.Inf(-1)
	for _, q := range []float64{5e-13, 1e-6, 0.025, 0.3, 0.5, 0.7, 0.975, 1 - 1e-6, 1 - 5e-13} {
		x := e.p.Quantile(q)
		e.check(fmt.Sprint("the quantile of ", q))
		if !finite(x) || x < before {
			e.Errorf("%s: quantile of %v is %v, after %v", e.name, q, x, before)
		}
		before = x
	}
	for _, coverage := range []float64{0.95, 1 - 1e-12} {
		if lo, hi := e.p.Interval(coverage); !finite(lo) || !finite(hi) || lo > hi {
			e.Errorf("%s: interval %v to %v", e.name, lo, hi)
		}
		*e.work = 0
	}
}

func (e *examined) probabilities(random *rand.Rand, c extremeCase) {
	points := []float64{signed(random, logUniform(random, -100, 100)), e.p.Quantile(random.Float64()), c.prior.Mean, -1e100, 1e100}
	if len(c.readings) > 0 {
		points = append(points, c.readings[0][0])
	}
	*e.work = 0
	for _, a := range points {
		low, high := e.p.LowerTail(a), e.p.UpperTail(a)
		e.check(fmt.Sprint("the tails at ", a))
		if !(low >= 0 && low <= 1 && high >= 0 && high <= 1) || math.Abs(low+high-1) > 1e-9 {
			e.Errorf("%s: tails %v and %v at %v", e.name, low, high, a)
		}
		for _, b := range points {
			if !(a < b) {
				continue
			}
			middle, end := e.p.Between(a, b), e.p.UpperTail(b)
			e.check(fmt.Sprint("what lies between ", a, " and ", b))
			if !(middle >= 0 && middle <= 1) || math.Abs(low+middle+end-1) > 1e-9 {
				e.Errorf("%s: %v below %v, %v between, %v above %v", e.name, low, a, middle, end, b)
			}
		}
	}
}

func finiteRepeatability(t *testing.T, name string, k *Constant, c extremeCase) {
	t.Helper()
	for _, coverage := range []float64{0.5, 0.95, 1 - 1e-12} {
		r := k.Repeatability(c.prior, c.noise, coverage)
		if r.HasMedian && !(r.Lower > 0 && r.Lower <= r.Median && r.Median <= r.Upper && finite(r.Upper)) {
			t.Errorf("%s: r %+v at coverage %v", name, r, coverage)
		}
	}
}

func TestNormalTailFarOut(t *testing.T) {
	for _, z := range []float64{40, 1e10, 1e153, 1.9e154, 1e200, 1e308, math.Inf(1)} {
		if p := normalTail(pair{hi: z}); p != 0 {
			t.Errorf("tail at %v is %v, want 0", z, p)
		}
		if p := normalTail(pair{hi: -z}); p != 1 {
			t.Errorf("tail at %v is %v, want 1", -z, p)
		}
	}
}

// Outside the admissible ratio of conflict to prior nothing is exact, nor does
// anything break.
func TestConflictBeyondTheAdmissible(t *testing.T) {
	for _, y := range []float64{1e50, 1e60, 1e100} {
		c := extremeCase{prior: Prior{SD: 1e-100}, noise: Noise{Guess: 1e-50, Worth: 4}, readings: [][2]float64{{y, 0}}}
		work, most := 0, 0
		for _, predictive := range []bool{false, true} {
			p := counted(c.constant(), c.prior, c.noise, predictive, &work)
			e := &examined{T: t, name: fmt.Sprint(y, predictive), p: p, work: &work, most: &most}
			e.moments()
			e.quantiles()
			e.probabilities(rand.New(rand.NewPCG(1, 2)), c)
		}
		finiteRepeatability(t, fmt.Sprint(y), c.constant(), c)
	}
}
