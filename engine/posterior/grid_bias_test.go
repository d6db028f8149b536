package posterior_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"leadline.example/engine/posterior"
)

// twoDimensions integrates over the bias for each level:
//
//	p(level) ~ prior(level) integral of N(b; B, u^2) L(level + b) db
//
// where L is what the readings say of what the instrument sees.
func (c *gridCase) twoDimensions() *exact {
	// Where the level can be at all, then where it is.
	eta := gridCase{prior: c.prior, readings: c.readings}
	if !c.prior.Vague {
		eta.prior = posterior.Prior{Mean: c.prior.Mean + c.bias.Mean, SD: math.Hypot(c.prior.SD, c.bias.SD)}
	}
	a, b := eta.window(0)
	a, b = a-c.bias.Mean-16*c.bias.SD, b-c.bias.Mean+16*c.bias.SD
	for range 4 {
		a, b = c.levels(a, b, 300, 800).matters()
	}
	d := c.levels(a, b, 1500, 6000)
	d.sum()
	return d.table()
}

// levels tabulates the density of the level at n + 1 points from lo to hi. What the
// readings say is tabulated at m + 1 points.
func (c *gridCase) levels(lo, hi float64, n, m int) *dense {
	alone := gridCase{prior: posterior.Prior{Vague: true}, readings: c.readings}
	u := c.bias.SD
	from, to := lo+c.bias.Mean-16*u, hi+c.bias.Mean+16*u
	says := alone.solve(from, (to-from)/float64(m), m+1, 0)
	top := slices.Max(says.log)
	d := &dense{lo: lo, h: (hi - lo) / float64(n), log: make([]float64, n+1)}
	stride := max(1, int(math.Min(u/16, c.readings[0].noise.SD/8)/says.h))
	for i := range d.log {
		x, sum := d.x(i), 0.0
		first := int((x + c.bias.Mean - 16*u - from) / says.h)
		last := min(m, int((x+c.bias.Mean+16*u-from)/says.h))
		for k := max(0, first); k <= last; k += stride {
			z := (says.x(k) - x - c.bias.Mean) / u
			sum += math.Exp(says.log[k] - top - z*z/2)
		}
		d.log[i] = top + math.Log(math.Max(sum, 1e-300)*says.h*float64(stride)/u/math.Sqrt(2*math.Pi))
		if !c.prior.Vague {
			z := (x - c.prior.Mean) / c.prior.SD
			d.log[i] -= z*z/2 + math.Log(c.prior.SD*math.Sqrt(2*math.Pi))
		}
	}
	return d
}

func TestGridWithBiasEqualsIntegration(t *testing.T) {
	random := source(t)
	for _, k := range kinds {
		t.Run(k.name, func(t *testing.T) {
			var worst gap
			for range cases(10) {
				r := math.Exp(random.NormFloat64() - 1)
				c := k.kind.constantCase(random, 1+random.IntN(6), r, math.Exp(random.NormFloat64()-1))
				c.prior.SD = math.Min(c.prior.SD, 20*r) // what the oracle's points resolve
				c.bias = posterior.Bias{Mean: random.NormFloat64(), SD: r * math.Exp(random.NormFloat64())}
				worst.widen(c.check(t, c.twoDimensions()))
			}
			t.Logf("at most %+v", worst)
		})
	}
}

// A level that walks, read with a bias: given the bias it is a case without one, so it
// is integrated over the bias, weighted by what the readings say of it. A Grid for each
// stratum of the bias as narrow as the noise, half of it with outliers, is held against
// that.
func TestWalkWithBiasEqualsIntegration(t *testing.T) {
	random := source(t)
	var worst gap
	for round := range cases(3) {
		c := kinds[round%4].kind.movingCase(random)
		r := c.readings[0].noise.SD
		c.motion = posterior.Motion{Form: posterior.MotionWalk, Walk: r * r * math.Exp(random.NormFloat64())}
		c.bias = posterior.Bias{SD: r * math.Exp(0.7*random.NormFloat64()-0.2)}
		worst.widen(c.checkGivenBias(t, fmt.Sprint("round ", round)))
	}
	t.Logf("at most %+v", worst)
}

// bank folds a Grid for each stratum of the bias.
func (c *gridCase) bank(sd float64) (posterior.Posterior, float64) {
	strata, logs := c.bias.Strata(sd)
	parts := make([]posterior.Posterior, len(strata))
	total := 0.0
	for i, bias := range strata {
		alone := *c
		alone.bias = bias
		g, evidence := alone.grid()
		parts[i] = g.Posterior()
		logs[i] += evidence
		total += math.Exp(logs[i])
	}
	return posterior.Blend(logs, parts), math.Log(total)
}

// Strata together are the bias they are of.
func TestStrataAreTheBias(t *testing.T) {
	whole := posterior.Bias{Mean: 3, SD: 2}
	if parts, logs := whole.Strata(2); len(parts) != 1 || parts[0] != whole || logs[0] != 0 {
		t.Errorf("a narrow bias is split into %v, %v", parts, logs)
	}
	for _, sd := range []float64{1.9, 1.4, 1, 0.3} {
		parts, logs := whole.Strata(sd)
		for z := -5.5; z <= 5.5; z += 0.5 {
			x, density := 3+2*z, 0.0
			for i, b := range parts {
				if b.SD > sd {
					t.Fatalf("a stratum of %v for %v", b.SD, sd)
				}
				d := (x - b.Mean) / b.SD
				density += math.Exp(logs[i]-d*d/2) / b.SD
			}
			near(t, fmt.Sprint("sd ", sd, " at ", z), density, math.Exp(-z*z/2)/2, 2e-4)
		}
	}
}

// checkGivenBias compares at the belief's own quantiles.
func (c *gridCase) checkGivenBias(t *testing.T, name string) gap {
	t.Helper()
	narrow := c.readings[0].noise.SD
	if c.readings[0].noise.OutlierProbability > 0 {
		narrow /= 2
	}
	p, evidence := c.bank(narrow)
	const places = 15
	var xs, below, above [places]float64
	for i := range xs {
		xs[i] = p.Quantile(math.Erfc(-(float64(i)-places/2)*0.82/math.Sqrt2) / 2)
	}
	var weights, first, second float64
	lo, hi, h := c.span()
	lo, hi = lo-12*c.bias.SD, hi+12*c.bias.SD
	step := c.bias.SD / 3
	for z := -12.0; z <= 12; z += step / c.bias.SD {
		d := c.solve(lo, h, int((hi-lo)/h)+1, z*c.bias.SD)
		e := d.table()
		w := math.Exp(d.evidence-evidence-z*z/2) * step / c.bias.SD / math.Sqrt(2*math.Pi)
		weights += w
		first += w * e.mean
		second += w * (e.sd*e.sd + e.mean*e.mean)
		for i, x := range xs {
			under, over := e.tails(x)
			below[i] += w * under
			above[i] += w * over
		}
	}
	mean := first / weights
	sd := math.Sqrt(second/weights - mean*mean)
	gotMean, _ := p.Mean()
	gotSD, _ := p.StandardDeviation()
	off := gap{mean: math.Abs(gotMean-mean) / sd, sd: math.Abs(gotSD/sd - 1)}
	for i, x := range xs {
		off.z = math.Max(off.z, math.Abs(scale(p.LowerTail(x), p.UpperTail(x))-scale(below[i]/weights, above[i]/weights)))
	}
	if !(off.z <= 0.03 && off.mean <= 0.01 && off.sd <= 0.03) {
		t.Errorf("%s: off by %+v: %+v", name, off, *c)
	}
	within(t, name+" evidence", math.Log(weights), 0, 3e-3)
	return off
}

// tails interpolates the logarithms of the tails.
func (e *exact) tails(x float64) (below, above float64) {
	t := (x - e.x[0]) / (e.x[1] - e.x[0])
	i := int(t)
	switch {
	case t <= 0:
		return 0, 1
	case i >= len(e.x)-1:
		return 1, 0
	}
	f := t - float64(i)
	mix := func(v []float64) float64 {
		if v[i] == 0 || v[i+1] == 0 {
			return 0
		}
		return math.Exp((1-f)*math.Log(v[i]) + f*math.Log(v[i+1]))
	}
	return mix(e.below), mix(e.above)
}

// A further calibration, a renewal and a widening of a normal belief are what the joint
// filter makes of them.
func TestGridIsRedrawnAsTheFilter(t *testing.T) {
	random := source(t)
	for round := range 100 {
		walk := posterior.Motion{Form: posterior.MotionWalk, Walk: math.Exp(random.NormFloat64() - 2)}
		prior := posterior.Prior{Mean: 3, SD: math.Exp(random.NormFloat64())}
		bias := posterior.Bias{Mean: 1, SD: math.Exp(2*random.NormFloat64() - 1)}
		if round%5 == 0 {
			walk = posterior.Motion{}
		}
		g := posterior.NewGrid(walk, prior, bias)
		f := posterior.NewFilter(walk, prior, posterior.SlopePrior{})
		b := f.Add(posterior.Process{Variance: bias.SD * bias.SD})
		for step := range 24 {
			g.Advance(1)
			f.Advance(1)
			switch {
			case step%8 == 5:
				bias = posterior.Bias{Mean: random.NormFloat64(), SD: math.Exp(2*random.NormFloat64() - 1)}
				g.Recalibrate(bias)
				f.Redraw(b, posterior.Process{Variance: bias.SD * bias.SD})
			case step == 9:
				prior = posterior.Prior{Mean: 5, SD: math.Exp(random.NormFloat64())}
				g.Renew(prior)
				f.Renew(prior, posterior.SlopePrior{})
			case step == 18 && walk.Walk > 0:
				g.Widen(walk.Walk * 30)
				f.Advance(30)
			}
			u := math.Exp(random.NormFloat64() - 1)
			y := prior.Mean + bias.Mean + random.NormFloat64()
			g.Update(posterior.Exactly(y), posterior.Spread{SD: u})
			f.Update(y, bias.Mean, 1, []posterior.Term{{State: b, Coefficient: 1}}, u*u)
		}
		name := fmt.Sprint("round ", round)
		sameNormal(t, name, g.Posterior(), f.Posterior())
		mean, sd := g.BiasBelief()
		within(t, name+" bias", mean, bias.Mean+f.Mean(b), 1e-4*sd)
		near(t, name+" sd of the bias", sd, math.Sqrt(f.Variance(b)), 1e-4)
	}
}

// What the next reading will be, and whether the last was an outlier.
func TestGridForetells(t *testing.T) {
	random := source(t)
	for round := range 40 {
		k := kinds[round%4].kind
		k.outlying = round%2 == 0
		r := math.Exp(1.5*random.NormFloat64() - 1)
		c := k.constantCase(random, 1+random.IntN(5), r, math.Exp(random.NormFloat64()-1))
		noise := k.spread(random, r*math.Exp(2*random.NormFloat64()))
		c.foretell(t, random, fmt.Sprint("round ", round), noise)
	}
}

func (c *gridCase) foretell(t *testing.T, random *rand.Rand, name string, noise posterior.Spread) {
	t.Helper()
	lo, hi := c.window(0)
	const n = 8192
	h := (hi - lo) / n
	noise.SD = math.Max(noise.SD, 2*h) // what the oracle's points resolve
	e := c.solve(lo, h, n+1, 0).table()
	usual := math.Hypot(e.sd, noise.SD)
	// What is far out in the noise's tails may come from farther out in the belief's.
	lo, hi = max(lo-n*h, min(lo, e.mean-5*usual)), min(hi+n*h, max(hi, e.mean+5*usual))
	d := c.solve(lo, h, int((hi-lo)/h)+1, 0)
	g, _ := c.grid()
	p := g.Predictive(noise)
	exactTo := 1e-17
	if noise.OutlierProbability > 0 {
		exactTo = 1e-12
	}
	for z := -5.0; z <= 5; z += 1.25 {
		y := e.mean + z*usual
		below, above := d.foretold(y, noise)
		if below < 1e-280 || above < 1e-280 {
			continue // beyond what the oracle sums
		}
		under, _, _ := g.Foretell(posterior.Indication{Lower: y, Upper: y + usual}, noise)
		_, over, _ := g.Foretell(posterior.Indication{Lower: y - usual, Upper: y}, noise)
		got, want := scale(under, over), scale(below, above)
		predicted := scale(p.LowerTail(y), p.UpperTail(y))
		switch small := min(below, above); {
		case small > exactTo:
			near(t, fmt.Sprint(name, " below ", z), under, below, 1e-4)
			near(t, fmt.Sprint(name, " above ", z), over, above, 1e-4)
			within(t, fmt.Sprint(name, " predictive ", z), predicted, want, 1e-3)
		case noise.OutlierProbability > 0: // rests on flanks that outliers would have bent
			within(t, fmt.Sprint(name, " foretold ", z), min(under, over), 0, 2*exactTo)
			within(t, fmt.Sprint(name, " predictive ", z), min(p.LowerTail(y), p.UpperTail(y)), 0, 2*exactTo)
		default: // deeper than what is held, by the normal score
			within(t, fmt.Sprint(name, " foretold ", z), got, want, 0.01*math.Abs(want))
			within(t, fmt.Sprint(name, " predictive ", z), predicted, want, 0.01*math.Abs(want))
		}
	}
	if noise.OutlierProbability == 0 {
		return
	}
	y := e.mean + 2*usual*random.NormFloat64()
	var all, outlying float64
	for i, v := range d.log {
		w, s := math.Exp(v-d.evidence), noise.SD*noise.Inflation
		z, far := (y-d.x(i))/noise.SD, (y-d.x(i))/s
		b := w * noise.OutlierProbability / s * math.Exp(-far*far/2)
		outlying += b
		all += b + w*(1-noise.OutlierProbability)/noise.SD*math.Exp(-z*z/2)
	}
	if all == 0 {
		return // beyond what the oracle sums
	}
	got := g.Update(posterior.Exactly(y), noise).Outlier
	within(t, name+" outlier", got, outlying/all, 1e-4)
}

// foretold sums the tails of an indication.
func (d *dense) foretold(y float64, noise posterior.Spread) (below, above float64) {
	for i, v := range d.log {
		w, z := math.Exp(v-d.evidence)*d.h, (y-d.x(i))/noise.SD/math.Sqrt2
		p := noise.OutlierProbability
		far := z
		if p > 0 {
			far /= noise.Inflation
		}
		below += w * ((1-p)*math.Erfc(-z) + p*math.Erfc(-far)) / 2
		above += w * ((1-p)*math.Erfc(z) + p*math.Erfc(far)) / 2
	}
	return below, above
}
