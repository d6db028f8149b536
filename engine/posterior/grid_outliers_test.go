package posterior_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"leadline.example/engine/posterior"
)

// normalPart is one of the normals that a belief read with outliers is a mixture of.
type normalPart struct{ log, mean, variance float64 }

// mixture is the oracle for values with outliers: each reading was one or wasn't, so
// n of them leave 2^n normals, each followed by the recurrence of the Kalman filter in
// one dimension. A display much narrower than its noise is the mixture, by the Gauss rule
// of three points, of the values that it may have rounded. It returns as well how
// probable it is that the last reading was an outlier.
func (c *gridCase) mixture() (parts []normalPart, outlier float64) {
	parts = []normalPart{{0, c.prior.Mean, c.prior.SD * c.prior.SD}}
	if c.prior.Vague {
		parts[0].variance = math.Inf(1)
	}
	for _, r := range c.readings {
		var usual, outlying []normalPart
		p := r.noise.OutlierProbability
		for _, at := range parts {
			at.variance += c.motion.Walk * r.after
			usual = append(usual, at.given(r.y, r.noise.SD, 1-p)...)
			if p > 0 {
				outlying = append(outlying, at.given(r.y, r.noise.SD*r.noise.Inflation, p)...)
			}
		}
		parts = append(usual, outlying...)
		outlier = math.Exp(evidenceOf(outlying) - evidenceOf(parts))
	}
	return parts, outlier
}

// given returns what a normal becomes by a reading that has a chance to have been made
// with a noise.
func (a normalPart) given(y posterior.Indication, sd, chance float64) []normalPart {
	var out []normalPart
	width := y.Upper - y.Lower
	for i, weight := range []float64{8.0 / 18, 5.0 / 18, 5.0 / 18} {
		at := (y.Lower+y.Upper)/2 + []float64{0, -0.5, 0.5}[i]*math.Sqrt(0.6)*width
		log := math.Log(chance * weight * width)
		if width == 0 {
			log = math.Log(chance)
		}
		if v := sd * sd; math.IsInf(a.variance, 1) {
			out = append(out, normalPart{a.log + log, at, v})
		} else {
			total, off := a.variance+v, at-a.mean
			log -= off*off/total/2 + math.Log(2*math.Pi*total)/2
			out = append(out, normalPart{a.log + log, a.mean + a.variance/total*off, a.variance * v / total})
		}
		if width == 0 {
			break
		}
	}
	return out
}

func evidenceOf(parts []normalPart) float64 {
	top, sum := math.Inf(-1), 0.0
	for _, a := range parts {
		top = math.Max(top, a.log)
	}
	for _, a := range parts {
		sum += math.Exp(a.log - top)
	}
	return top + math.Log(sum)
}

// tabulate returns the mixture about each of its normals, as far as tails of 1e-9.
func tabulate(parts []normalPart) *exact {
	e := &exact{evidence: evidenceOf(parts)}
	var kept []normalPart
	for _, a := range parts {
		if a.log -= e.evidence; a.log > -60 {
			kept = append(kept, a)
			e.mean += math.Exp(a.log) * a.mean
		}
	}
	for _, a := range kept {
		off := a.mean - e.mean
		e.sd += math.Exp(a.log) * (a.variance + off*off)
		if a.log > -23 {
			for z := -6.0; z <= 6; z += 0.5 {
				e.x = append(e.x, a.mean+z*math.Sqrt(a.variance))
			}
		}
	}
	e.sd = math.Sqrt(e.sd)
	slices.Sort(e.x)
	for _, x := range e.x {
		var below, above float64
		for _, a := range kept {
			z := (x - a.mean) / math.Sqrt(2*a.variance)
			below += math.Exp(a.log) * math.Erfc(-z) / 2
			above += math.Exp(a.log) * math.Erfc(z) / 2
		}
		e.below, e.above = append(e.below, below), append(e.above, above)
	}
	return e
}

// checkMixture compares a case with outliers.
func (c *gridCase) checkMixture(t *testing.T, name string) gap {
	t.Helper()
	parts, outlier := c.mixture()
	e := tabulate(parts)
	g := posterior.NewGrid(c.motion, c.prior, c.bias)
	var last posterior.Evidence
	evidence := 0.0
	for _, r := range c.readings {
		g.Advance(r.after)
		last = g.Update(r.y, r.noise)
		evidence += last.Log
	}
	d := compare(e, g.Posterior())
	if !(d.z <= 0.01 && d.mean <= 1e-3 && d.sd <= 1e-3) {
		t.Errorf("%s: off by %+v: %+v", name, d, *c)
	}
	within(t, name+" evidence", evidence, e.evidence, math.Max(3e-3, 1e-8*math.Abs(e.evidence)))
	within(t, name+" outlier", last.Outlier, outlier, 1e-3)
	return d
}

func TestGridWithOutliersIsTheMixture(t *testing.T) {
	random := source(t)
	var worst gap
	for round := range cases(100) {
		worst.widen(outlyingCase(random).checkMixture(t, fmt.Sprint("round ", round)))
	}
	t.Logf("at most %+v", worst)
}

// outlyingCase draws up to six readings by two instruments of a level that stays or
// walks, some after a silence.
func outlyingCase(random *rand.Rand) *gridCase {
	c := &gridCase{prior: posterior.Prior{SD: math.Pow(10, 4*random.Float64()), Vague: random.IntN(4) == 0}}
	if random.IntN(2) == 0 {
		c.motion = posterior.Motion{Form: posterior.MotionWalk, Walk: math.Pow(10, 2*random.Float64()-2)}
	}
	truth := math.Min(c.prior.SD, 300) * random.NormFloat64()
	var noise [2]posterior.Spread
	for i := range noise {
		noise[i] = posterior.Spread{SD: math.Pow(10, float64(i)*random.Float64()), OutlierProbability: 0.2 * math.Pow(10, -3*random.Float64()), Inflation: 2 * math.Pow(50, random.Float64())}
	}
	for range 1 + random.IntN(6) {
		s := seen{after: math.Pow(10, 5*random.Float64()-1), noise: noise[random.IntN(2)]}
		truth += math.Sqrt(c.motion.Walk*s.after) * random.NormFloat64()
		far := s.noise.SD
		if random.IntN(4) == 0 {
			far *= s.noise.Inflation
		}
		s.y = posterior.Exactly(truth + far*random.NormFloat64())
		c.readings = append(c.readings, s)
	}
	return c
}

// A reading much sharper than the belief may fall between points at which there is
// nothing of it but what it says if it was an outlier.
func TestGridFindsSharpReadingsWithOutliers(t *testing.T) {
	for _, c := range []struct{ sd, inflation, y, p float64 }{
		{300, 100, 8, 0.01}, {300, 50, 8, 0.01}, {300, 30, 8, 0.01}, {230, 30, 8, 0.01}, {450, 30, 8, 0.01},
		{300, 20, 8, 0.01}, {200, 20, 4, 0.01}, {100, 10, 4, 0.01}, {150, 15, 4, 0.05}, {1000, 100, 24, 0.01},
		{230, 100, 8, 1e-4}, {1000, 200, 32, 0.01},
		// more than is promised, but what points laid anew are too far apart for at first
		{1e4, 300, 298.2, 0.1}, {1e5, 300, 312, 0.01},
	} {
		noise := posterior.Spread{SD: 1, OutlierProbability: c.p, Inflation: c.inflation}
		for _, y := range []posterior.Indication{posterior.Exactly(c.y), {Lower: c.y - 0.1, Upper: c.y + 0.1}} {
			one := gridCase{prior: posterior.Prior{SD: c.sd}}
			one.with(y, noise, 1)
			one.checkMixture(t, fmt.Sprintf("%+v, %+v", c, y))
		}
	}
}

// After a long silence the belief is wide, however well the level was known before.
func TestGridFindsReadingsAfterSilence(t *testing.T) {
	noise := posterior.Spread{SD: 1, OutlierProbability: 0.01, Inflation: 50}
	c := gridCase{motion: posterior.Motion{Form: posterior.MotionWalk, Walk: 1}, prior: posterior.Prior{SD: 10}}
	for i := range 5 {
		c.readings = append(c.readings, seen{1, posterior.Exactly(float64(i % 3)), noise})
	}
	for _, r := range []seen{{9e4, posterior.Exactly(9), noise}, {0, posterior.Exactly(9.5), noise}, {9e4, posterior.Exactly(200), noise}} {
		c.readings = append(c.readings, r)
		c.checkMixture(t, fmt.Sprint(len(c.readings), " readings"))
	}
}

// Up to the largest inflation that is promised, readings may agree or not.
func TestGridWithOutliersOfAnyInflation(t *testing.T) {
	for _, inflation := range []float64{3, 10, 30, 100} {
		for _, p := range []float64{0.01, 1e-4} {
			noise := posterior.Spread{SD: 1, OutlierProbability: p, Inflation: inflation}
			for _, c := range []struct {
				prior posterior.Prior
				ys    []float64
			}{
				{posterior.Prior{Vague: true}, []float64{300}},
				{posterior.Prior{Vague: true}, []float64{0, 0.5}},
				{posterior.Prior{Vague: true}, []float64{0, 300}},
				{posterior.Prior{Vague: true}, []float64{0, 1000, 0.5, 999.5}},
				{posterior.Prior{SD: 1e4}, []float64{300}},
				{posterior.Prior{SD: 100}, []float64{0, 1e4, 0.3}},
			} {
				one := gridCase{prior: c.prior}
				for _, y := range c.ys {
					one.with(posterior.Exactly(y), noise, 1)
				}
				one.checkMixture(t, fmt.Sprintf("inflation %v with %v: %v", inflation, p, c.ys))
			}
		}
	}
}

// Two instruments of one level that differ by far more than their noise: half of the belief lies
// about either, and so little between that it isn't a number above 0.
func TestGridOfTwoCampsHasAnEmptyValley(t *testing.T) {
	c := gridCase{prior: posterior.Prior{Vague: true}}
	noise := posterior.Spread{SD: 1, OutlierProbability: 0.01, Inflation: 100}
	for range 100 {
		c.with(posterior.Exactly(0), noise, 1)
		c.with(posterior.Exactly(40), noise, 1)
	}
	g, _ := c.grid()
	p := g.Posterior()
	for _, x := range []float64{7.003, 14.8001, 20.01, 31.37} {
		within(t, fmt.Sprint("below ", x), p.LowerTail(x), 0.5, 1e-6)
		within(t, fmt.Sprint("above ", x), p.UpperTail(x), 0.5, 1e-6)
	}
	mean, _ := p.Mean()
	within(t, "mean", mean, 20, 1e-4)
}

// Outliers can leave a second maximum at the end of what is held, 30 below the first in
// logarithms. What lies beyond is finite and small.
func TestGridEndsAboutASecondMaximum(t *testing.T) {
	one := posterior.Spread{SD: 1.085, OutlierProbability: 0.04877, Inflation: 12.8}
	other := posterior.Spread{SD: 1, OutlierProbability: 0.042, Inflation: 14.76}
	c := gridCase{prior: posterior.Prior{SD: 197.6}}
	for i, y := range []float64{-496.478, -497.214, -495.988, -497.794, -497.078, -460.844} {
		c.with(posterior.Exactly(y), []posterior.Spread{one, other}[i%2], 1)
	}
	parts, _ := c.mixture()
	e := tabulate(parts)
	g, _ := c.grid()
	p := g.Posterior()
	checkGrid(t, "posterior", p)
	for i, x := range e.x {
		if small := math.Min(e.below[i], e.above[i]); small > 1e-13 {
			within(t, fmt.Sprint("at ", x), scale(p.LowerTail(x), p.UpperTail(x)), scale(e.below[i], e.above[i]), 0.03)
		}
	}
}

// What a sharp instrument left, a peak on a pedestal, is all weighed when a blunt one
// may have read an outlier.
func TestGridWeighsSharpBeliefsForBluntOutliers(t *testing.T) {
	for offset := range 12 {
		c := gridCase{prior: posterior.Prior{SD: 10}}
		y := 0.5 + 0.007*float64(offset)
		c.with(posterior.Exactly(y), posterior.Spread{SD: 0.01, OutlierProbability: 0.15, Inflation: 100}, 1)
		c.with(posterior.Exactly(3.5), posterior.Spread{SD: 1, OutlierProbability: 0.1, Inflation: 5}, 1)
		c.checkMixture(t, fmt.Sprint("value ", y))
	}
}

// A reading far out on a flank left by a display finds the flank as the
// parabola by which it was continued: two displays that fit only with the level between
// them meet in the middle.
func TestGridFlanksHoldFarOut(t *testing.T) {
	for _, r := range []float64{0.1, 0.05, 0.02, 0.01} {
		for _, c := range []struct{ gap, mean float64 }{{10, 1e-6}, {20, 0.006}, {23, 0.013}, {30, 0.04}} {
			g := posterior.NewGrid(posterior.Motion{}, posterior.Prior{SD: 1e6}, posterior.Bias{})
			g.Update(posterior.Indication{Lower: -0.5, Upper: 0.5}, posterior.Spread{SD: r})
			end := 0.5 + c.gap*r
			g.Update(posterior.Indication{Lower: end, Upper: end + 1}, posterior.Spread{SD: r})
			p := g.Posterior()
			mean, _ := p.Mean()
			sd, _ := p.StandardDeviation()
			within(t, fmt.Sprintf("r = %v, %v apart", r, c.gap), mean, 0.5+c.gap*r/2, c.mean*sd)
		}
	}
}
