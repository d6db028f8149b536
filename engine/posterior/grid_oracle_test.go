package posterior_test

import (
	"flag"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mathext"

	"leadline.example/engine/posterior"
)

// allCases has the random cases of grids all run: 200 for each way of reading.
var allCases = flag.Bool("gridcases", false, "run all 200 random cases of each way of reading a grid, which takes minutes")

// cases returns how many of 200 to run.
func cases(some int) int {
	if *allCases {
		return 200
	}
	if testing.Short() {
		return max(1, some/4)
	}
	return some
}

// seen is a reading with its noise, after a time since the one before.
type seen struct {
	after float64
	y     posterior.Indication
	noise posterior.Spread
}

// gridCase is a belief that isn't normal.
type gridCase struct {
	motion   posterior.Motion
	prior    posterior.Prior
	bias     posterior.Bias
	readings []seen
}

// grid folds the case.
func (c *gridCase) grid() (posterior.Grid, float64) {
	g := posterior.NewGrid(c.motion, c.prior, c.bias)
	evidence := 0.0
	for _, r := range c.readings {
		g.Advance(r.after)
		evidence += g.Update(r.y, r.noise).Log
	}
	return g, evidence
}

// dense is the oracle: the density itself, not its logarithm, at points fixed for the
// whole case, so close and so many that sums serve for integrals. Each step is
//
//	p(x') = integral of p(x) N(x'; mean + left (x - mean), q) dx
//
// summed over all points that matter, or taken at once for a level that stays.
type dense struct {
	lo, h    float64
	log      []float64
	evidence float64
}

// logUpper is ln Q(z): by erfc, and from 25 on by the asymptotic series (DLMF 7.12.1).
func logUpper(z float64) float64 {
	if z < 25 {
		return math.Log(math.Erfc(z/math.Sqrt2) / 2)
	}
	q := 1 / (z * z)
	return -z*z/2 - math.Log(z*math.Sqrt(2*math.Pi)) + math.Log1p(-q+3*q*q-15*q*q*q)
}

// logInside is ln P(a < Z < b) from tails on the side of the smaller ones.
func logInside(a, b float64) float64 {
	if a+b < 0 {
		a, b = -b, -a
	}
	if a < -5 {
		return math.Log1p(-math.Exp(logUpper(-a)) - math.Exp(logUpper(b)))
	}
	big, small := logUpper(a), logUpper(b)
	return big + math.Log1p(-math.Exp(small-big))
}

// says is the logarithm of what a reading says of x.
func (r *seen) says(x float64) float64 {
	one := func(sd float64) float64 {
		if r.y.Exact() {
			z := (r.y.Lower - x) / sd
			return -z*z/2 - math.Log(sd*math.Sqrt(2*math.Pi))
		}
		return logInside((r.y.Lower-x)/sd, (r.y.Upper-x)/sd)
	}
	p := r.noise.OutlierProbability
	if p == 0 {
		return one(r.noise.SD)
	}
	a, b := math.Log(1-p)+one(r.noise.SD), math.Log(p)+one(r.noise.SD*r.noise.Inflation)
	top := math.Max(a, b)
	return top + math.Log(math.Exp(a-top)+math.Exp(b-top))
}

// solve computes the case for a given bias, for all but the last step on n points from lo,
// h apart, then on points that are close where it matters.
func (c *gridCase) solve(lo, h float64, n int, bias float64) *dense {
	d := &dense{lo: lo, h: h, log: make([]float64, n)}
	if !c.prior.Vague {
		for i := range d.log {
			z := (d.x(i) - c.prior.Mean) / c.prior.SD
			d.log[i] = -z*z/2 - math.Log(c.prior.SD*math.Sqrt(2*math.Pi))
		}
	}
	if c.motion.Form == posterior.MotionConstant {
		alike := make(map[seen]float64)
		for _, r := range c.readings {
			alike[r]++
		}
		for r, count := range alike {
			d.read(&r, bias, count)
		}
		d.sum()
		return d
	}
	for k := range c.readings {
		r := &c.readings[k]
		before := d
		d = before.moved(&c.motion, r.after, lo, h, n)
		d.read(r, bias, 1)
		if k == len(c.readings)-1 && d != before {
			from, to := d.matters()
			d = before.moved(&c.motion, r.after, from, (to-from)/2000, 2001)
			d.read(r, bias, 1)
		}
	}
	d.sum()
	return d
}

// read takes in a reading that was made count times.
func (d *dense) read(r *seen, bias, count float64) {
	for i := range d.log {
		d.log[i] += count * r.says(d.x(i)+bias)
	}
}

// matters returns where the density isn't far below its highest.
func (d *dense) matters() (lo, hi float64) {
	top := slices.Max(d.log)
	a, b := len(d.log)-1, 0
	for i, v := range d.log {
		if v > top-40 {
			a, b = min(a, i), max(b, i)
		}
	}
	return d.x(max(0, a-1)), d.x(min(len(d.log)-1, b+1))
}

func (d *dense) sum() {
	top, sum := slices.Max(d.log), 0.0
	for _, v := range d.log {
		sum += math.Exp(v - top)
	}
	d.evidence = top + math.Log(sum*d.h)
}

func (d *dense) x(i int) float64 { return d.lo + float64(i)*d.h }

// moved returns the density after a time on other points; d itself if nothing moves.
func (d *dense) moved(m *posterior.Motion, seconds, lo, h float64, n int) *dense {
	left, q, about := 1.0, 0.0, 0.0
	switch m.Form {
	case posterior.MotionWalk:
		q = m.Walk * seconds
	case posterior.MotionReverting:
		about, left = m.Mean, math.Exp(-m.Rate*seconds)
		q = m.Variance * (1 - left*left)
	}
	if q == 0 {
		return d
	}
	// Only points count that are within 110 of the highest, and from which the
	// level came within 40 standard deviations.
	top, sd := slices.Max(d.log), math.Sqrt(q)
	from, to := d.matters()
	mass := make([]float64, len(d.log))
	for i, v := range d.log {
		mass[i] = math.Exp(v-top) * d.h / sd / math.Sqrt(2*math.Pi)
	}
	out := &dense{lo: lo, h: h, log: make([]float64, n)}
	for j := range out.log {
		sum, y := 0.0, out.x(j)
		came := about + (y-about)/left
		a := max(0, int((math.Max(from, came-40*sd/left)-d.lo)/d.h))
		b := min(len(d.log)-1, int((math.Min(to, came+40*sd/left)-d.lo)/d.h)+1)
		for i := a; i <= b; i++ {
			z := (y - about - left*(d.x(i)-about)) / sd
			sum += mass[i] * math.Exp(-z*z/2)
		}
		out.log[j] = top + math.Log(math.Max(sum, 1e-300))
	}
	return out
}

// exact is a distribution in tables: probabilities below and above points.
type exact struct {
	x, below, above []float64
	mean, sd        float64
	evidence        float64
}

// table sums the density.
func (d *dense) table() *exact {
	n := len(d.log)
	e := &exact{x: make([]float64, n), below: make([]float64, n), above: make([]float64, n), evidence: d.evidence}
	p := make([]float64, n)
	for i, v := range d.log {
		p[i] = math.Exp(v-d.evidence) * d.h
		e.x[i] = d.x(i)
		e.mean += p[i] * e.x[i]
	}
	for i := range p {
		e.sd += p[i] * (e.x[i] - e.mean) * (e.x[i] - e.mean)
	}
	e.sd = math.Sqrt(e.sd)
	for i := 1; i < n; i++ {
		e.below[i] = e.below[i-1] + logMean(p[i-1], p[i])
	}
	for i := n - 2; i >= 0; i-- {
		e.above[i] = e.above[i+1] + logMean(p[i], p[i+1])
	}
	return e
}

// logMean is the integral from 0 to 1 of a^(1-t) b^t: better in tails than the
// trapezoid rule.
func logMean(a, b float64) float64 {
	if r := math.Log(b / a); math.Abs(r) > 1e-3 && !math.IsInf(r, 0) {
		return (b - a) / r
	}
	return (a + b) / 2
}

// scale returns the normal score of a point whose tails these are.
func scale(below, above float64) float64 {
	if below < above {
		return mathext.NormalQuantile(below)
	}
	return -mathext.NormalQuantile(above)
}

// gap is how far a belief is off.
type gap struct{ z, mean, sd float64 }

func (g *gap) widen(o gap) {
	g.z, g.mean, g.sd = math.Max(g.z, o.z), math.Max(g.mean, o.mean), math.Max(g.sd, o.sd)
}

// compare returns the largest difference of normal scores for 1e-9 < p < 1 - 1e-9, that
// of means in exact standard deviations, and the relative one of standard deviations.
func compare(e *exact, p posterior.Posterior) gap {
	var g gap
	next := math.Inf(-1)
	for i, x := range e.x {
		if math.Min(e.below[i], e.above[i]) <= 1e-9 {
			continue
		}
		want := scale(e.below[i], e.above[i])
		if want < next {
			continue
		}
		next = want + 0.4
		g.z = math.Max(g.z, math.Abs(scale(p.LowerTail(x), p.UpperTail(x))-want))
	}
	if math.IsInf(next, -1) {
		g.z = math.Inf(1)
	}
	mean, _ := p.Mean()
	sd, _ := p.StandardDeviation()
	g.mean, g.sd = math.Abs(mean-e.mean)/e.sd, math.Abs(sd/e.sd-1)
	return g
}

// check compares a case with the oracle.
func (c *gridCase) check(t *testing.T, e *exact) gap {
	t.Helper()
	g, evidence := c.grid()
	d := compare(e, g.Posterior())
	if !(d.z <= 0.03 && d.mean <= 0.01 && d.sd <= 0.03) {
		t.Errorf("off by %+v: %+v", d, *c)
	}
	if off := math.Abs(evidence - e.evidence); !(off <= 1e-3) {
		t.Errorf("evidence %v, want %v: %+v", evidence, e.evidence, *c)
	}
	return d
}

// kind is what readings are like.
type kind struct{ displayed, censored, outlying, exact bool }

// reading draws one of a true value.
func (k kind) reading(random *rand.Rand, truth, r float64, d float64, noise posterior.Spread) posterior.Indication {
	if random.Float64() < noise.OutlierProbability {
		r *= noise.Inflation
	}
	y := truth + r*random.NormFloat64()
	var choices []posterior.Indication
	if k.displayed {
		shown := d * math.Round(y/d)
		choices = append(choices, posterior.Indication{Lower: shown - d/2, Upper: shown + d/2})
	}
	if k.censored {
		end := truth + 2*r*random.NormFloat64()
		one := posterior.Indication{Lower: math.Inf(-1), Upper: end}
		if y > end {
			one = posterior.Indication{Lower: end, Upper: math.Inf(1)}
		}
		choices = append(choices, one)
	}
	if k.exact {
		choices = append(choices, posterior.Exactly(y))
	}
	return choices[random.IntN(len(choices))]
}
