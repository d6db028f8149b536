package posterior_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// kinds are the ways of reading that a Grid serves.
var kinds = []struct {
	name string
	kind kind
}{
	{"displays", kind{displayed: true}},
	{"censoring", kind{censored: true, exact: true}},
	{"outliers", kind{exact: true, outlying: true}},
	{"mixed", kind{displayed: true, censored: true, outlying: true, exact: true}},
}

// spread draws a noise of standard deviation r.
func (k kind) spread(random *rand.Rand, r float64) posterior.Spread {
	s := posterior.Spread{SD: r}
	if k.outlying {
		s.OutlierProbability = 0.001 * math.Pow(200, random.Float64())
		s.Inflation = 3 * math.Pow(33, random.Float64())
	}
	return s
}

// constantCase draws a level that stays, in units of 1 about 0, read n times by a noise
// of standard deviation r.
func (k kind) constantCase(random *rand.Rand, n int, r, d float64) gridCase {
	c := gridCase{prior: posterior.Prior{Mean: random.NormFloat64(), SD: math.Min(300*r, math.Exp(1.5*random.NormFloat64()))}} // as far as Grid promises
	truth := c.prior.Mean + c.prior.SD*random.NormFloat64()
	noise := k.spread(random, r)
	if random.IntN(4) == 0 {
		c.prior = posterior.Prior{Vague: true}
		c.readings = append(c.readings, seen{y: posterior.Exactly(truth + r*random.NormFloat64()), noise: posterior.Spread{SD: r}})
	}
	for range n {
		c.readings = append(c.readings, seen{y: k.reading(random, truth, r, d, noise), noise: noise})
	}
	return c
}

// window returns where the density of a constant level matters, by bisecting a
// range for what isn't far below the highest of its points.
func (c *gridCase) window(bias float64) (lo, hi float64) {
	lo, hi = math.Inf(1), math.Inf(-1)
	for _, r := range c.readings {
		for _, y := range [2]float64{r.y.Lower, r.y.Upper} {
			if !math.IsInf(y, 0) {
				far := 15 * r.noise.SD * math.Max(1, r.noise.Inflation)
				lo, hi = math.Min(lo, y-far), math.Max(hi, y+far)
			}
		}
	}
	if !c.prior.Vague {
		lo, hi = math.Min(lo, c.prior.Mean-15*c.prior.SD), math.Max(hi, c.prior.Mean+15*c.prior.SD)
	}
	for range 6 {
		const n = 400
		lo, hi = c.solve(lo, (hi-lo)/n, n+1, bias).matters()
	}
	return lo, hi
}

func TestGridOfConstantEqualsIntegration(t *testing.T) {
	random := source(t)
	for _, k := range kinds {
		t.Run(k.name, func(t *testing.T) {
			var worst gap
			for range cases(60) {
				c := k.kind.constantCase(random, 1+random.IntN(6), math.Exp(random.NormFloat64()-1), math.Exp(random.NormFloat64()-1))
				lo, hi := c.window(0)
				const n = 4096
				worst.widen(c.check(t, c.solve(lo, (hi-lo)/n, n+1, 0).table()))
			}
			t.Logf("at most %+v", worst)
		})
	}
}

func TestGridOfWalkEqualsIntegration(t *testing.T) {
	random := source(t)
	for _, k := range kinds {
		t.Run(k.name, func(t *testing.T) {
			var worst gap
			for range cases(6) {
				c := k.kind.movingCase(random)
				lo, hi, h := c.span()
				worst.widen(c.check(t, c.solve(lo, h, int((hi-lo)/h)+1, 0).table()))
			}
			t.Logf("at most %+v", worst)
		})
	}
}

// movingCase draws a level that walks or reverts.
func (k kind) movingCase(random *rand.Rand) gridCase {
	c := gridCase{prior: posterior.Prior{Mean: random.NormFloat64(), SD: math.Exp(random.NormFloat64())}}
	r := math.Exp(0.7 * random.NormFloat64())
	step := r * math.Exp(1.5*random.NormFloat64())
	step = math.Min(math.Max(step, r/30), 8*r) // what the oracle's points can resolve
	c.motion = posterior.Motion{Form: posterior.MotionWalk, Walk: step * step}
	if random.IntN(2) == 0 {
		c.motion = posterior.Motion{Form: posterior.MotionReverting, Mean: 1, Variance: 4 * step * step, Rate: 0.2}
	}
	truth := c.prior.Mean + c.prior.SD*random.NormFloat64()
	noise := k.spread(random, r)
	noise.Inflation = math.Min(noise.Inflation, 20)
	d := r * math.Exp(random.NormFloat64()+0.5)
	for i := range 2 + random.IntN(4) {
		s := seen{after: 1, noise: noise}
		if i == 0 {
			s.after = 0
		}
		truth += step * random.NormFloat64()
		s.y = k.reading(random, truth, r, d, noise)
		c.readings = append(c.readings, s)
	}
	return c
}

// span returns a range in which all of a moving case happens, and a distance of points
// that resolves it.
func (c *gridCase) span() (lo, hi, h float64) {
	q := c.motion.Walk
	if c.motion.Form == posterior.MotionReverting {
		q = c.motion.Variance * -math.Expm1(-2*c.motion.Rate)
	}
	far := 8 * math.Sqrt(c.prior.SD*c.prior.SD+q*float64(len(c.readings)))
	lo, hi, h = c.prior.Mean-far, c.prior.Mean+far, math.Min(c.prior.SD/4, math.Sqrt(q)/1.5)
	for _, r := range c.readings {
		h = math.Min(h, r.noise.SD/5)
		for _, y := range [2]float64{r.y.Lower, r.y.Upper} {
			if !math.IsInf(y, 0) {
				lo, hi = math.Min(lo, y-far), math.Max(hi, y+far)
			}
		}
	}
	return lo, hi, h
}

func TestGridOfNormalsIsTheFilter(t *testing.T) {
	random := source(t)
	for round := range 200 {
		name := fmt.Sprint("round ", round)
		scale := math.Exp(10 * random.NormFloat64())
		m := posterior.Motion{Form: posterior.MotionWalk, Walk: scale * scale * math.Exp(4*random.NormFloat64()-3)}
		bias := posterior.Bias{}
		switch random.IntN(4) {
		case 0:
			m = posterior.Motion{Form: posterior.MotionReverting, Mean: scale, Variance: scale * scale * 3, Rate: math.Exp(2*random.NormFloat64() - 1)}
		case 1:
			m = posterior.Motion{}
			bias = posterior.Bias{Mean: 3 * scale, SD: scale * math.Exp(random.NormFloat64())}
		case 2:
			bias = posterior.Bias{Mean: -scale, SD: scale * math.Exp(random.NormFloat64())}
		}
		prior := posterior.Prior{Mean: 1e6 * scale, SD: scale * math.Exp(3*random.NormFloat64())}
		if m.Form == posterior.MotionReverting {
			prior.Mean = scale
		}
		g := posterior.NewGrid(m, prior, bias)
		f := posterior.NewFilter(m, prior, posterior.SlopePrior{})
		b := f.Add(posterior.Process{Variance: bias.SD * bias.SD})
		truth := prior.Mean + prior.SD*random.NormFloat64()
		for range 1 + random.IntN(40) {
			gap := math.Exp(2 * random.NormFloat64())
			g.Advance(gap)
			f.Advance(gap)
			u := scale * math.Exp(2*random.NormFloat64())
			y := truth + bias.Mean + u*random.NormFloat64()
			g.Update(posterior.Exactly(y), posterior.Spread{SD: u})
			f.Update(y, bias.Mean, 1, []posterior.Term{{State: b, Coefficient: 1}}, u*u)
		}
		sameNormal(t, name, g.Posterior(), f.Posterior())
		sameNormal(t, name+" later", g.PosteriorAfter(3), f.PosteriorAfter(3))
	}
}

// sameNormal compares normal scores down to 1e-80.
func sameNormal(t *testing.T, name string, got, want posterior.Posterior) {
	t.Helper()
	mean, _ := want.Mean()
	sd, _ := want.StandardDeviation()
	gotMean, _ := got.Mean()
	gotSD, _ := got.StandardDeviation()
	within(t, name+" mean", gotMean, mean, 1e-5*sd)
	near(t, name+" sd", gotSD, sd, 1e-5)
	for z := -19.0; z <= 19; z += 2 {
		x := mean + z*sd
		within(t, fmt.Sprint(name, " at ", z), scale(got.LowerTail(x), got.UpperTail(x)), scale(want.LowerTail(x), want.UpperTail(x)), 1e-3)
	}
}
