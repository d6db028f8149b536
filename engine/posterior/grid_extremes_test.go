package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// Whatever comes, limits lie inside what is evaluated or in a stated tail: every answer is
// a number, tails together are 1, fall outwards and never end.
func TestGridAtTheEndsOfTheRange(t *testing.T) {
	random := source(t)
	for round := range cases(12) {
		size := math.Exp(30 * random.NormFloat64())
		draw := func(spread float64) float64 { return size * math.Exp(spread*random.NormFloat64()) }
		m := posterior.Motion{Form: posterior.MotionForm([]int{0, 1, 3}[random.IntN(3)]), Walk: math.Pow(draw(6), 2), Mean: draw(3), Variance: math.Pow(draw(4), 2), Rate: math.Exp(4 * random.NormFloat64())}
		bias := posterior.Bias{}
		if m.Form != posterior.MotionReverting && random.IntN(2) == 0 {
			bias = posterior.Bias{Mean: draw(3), SD: draw(4)}
		}
		prior := posterior.Prior{Mean: draw(3), SD: draw(5), Vague: random.IntN(4) == 0}
		g := posterior.NewGrid(m, prior, bias)
		for step := range 8 {
			y := posterior.Exactly(draw(4))
			switch random.IntN(3) {
			case 0:
				y.Upper += draw(6)
			case 1:
				y.Upper = math.Inf(1)
			}
			noise := posterior.Spread{SD: draw(5)}
			if random.IntN(2) == 0 {
				noise.OutlierProbability, noise.Inflation = 0.1*random.Float64(), 2+98*random.Float64()
			}
			g.Advance(math.Exp(5 * random.NormFloat64()))
			name := fmt.Sprintf("round %d, step %d", round, step)
			if below, above, ok := g.Foretell(y, noise); ok && !(below >= 0 && above >= 0 && below+above <= 1+1e-12) {
				t.Fatalf("%s: foretold %v, %v", name, below, above)
			}
			e := g.Update(y, noise)
			if math.IsNaN(e.Log) || math.IsInf(e.Log, 0) || !(e.Outlier >= 0 && e.Outlier <= 1) {
				t.Fatalf("%s: evidence %+v", name, e)
			}
			if step%4 == 3 && m.Form == posterior.MotionWalk {
				bias = posterior.Bias{Mean: draw(3), SD: draw(4)}
				g.Recalibrate(bias)
			}
			checkGrid(t, name, g.Posterior())
			checkGrid(t, name+" predictive", g.Predictive(noise))
		}
		if n := len(g.AppendBinary(nil)); n > 99+24*(2*8192) {
			t.Fatalf("round %d: %d bytes", round, n)
		}
	}
}

func checkGrid(t *testing.T, name string, p posterior.Posterior) {
	t.Helper()
	if p.Form() == posterior.FormNone {
		return
	}
	mean, _ := p.Mean()
	sd, _ := p.StandardDeviation()
	if math.IsNaN(mean) || math.IsInf(mean, 0) || !(sd > 0) || math.IsInf(sd, 0) {
		t.Fatalf("%s: mean %v, standard deviation %v", name, mean, sd)
	}
	before := math.Inf(1)
	for _, z := range []float64{0, 1, 3, 6, 9, 12, 15, 18} {
		for _, side := range []float64{-1, 1} {
			x := mean + side*z*sd
			lower, upper := p.LowerTail(x), p.UpperTail(x)
			if !(math.Abs(lower+upper-1) < 1e-6) {
				t.Fatalf("%s at %v sd: tails %v, %v", name, side*z, lower, upper)
			}
			if side < 0 {
				continue
			}
			if !(upper <= before) {
				t.Fatalf("%s at %v sd: tail %v after %v", name, z, upper, before)
			}
			before = upper
		}
	}
	for _, q := range []float64{1e-12, 1e-3, 0.3, 0.5, 0.9} {
		x := p.Quantile(q)
		// No closer than an edge is sharp, or a double near x.
		off := 1e-6*sd + 1e-14*math.Abs(x)
		if under, over := p.LowerTail(x-off), p.LowerTail(x+off); !(under <= q && q <= over) {
			t.Fatalf("%s: %v and %v about the quantile of %v", name, under, over, q)
		}
	}
	if b := p.Between(mean-sd/1000, mean+sd/1000); !(b >= 0 && b < 0.1) {
		t.Fatalf("%s: %v within a thousandth of a standard deviation", name, b)
	}
}

// A reading far from the belief, or far sharper, finds its place.
func TestGridFollowsFarAndSharpReadings(t *testing.T) {
	for _, c := range []struct{ sd, y, r float64 }{
		{1, 40, 1}, {1, 40, 0.01}, {1, 1e4, 1}, {1, 0.3, 1e-6}, {1e3, 0.3, 1e-6}, {1e-3, 0.3, 1}, {1, 1e4, 1e-4},
	} {
		name := fmt.Sprintf("%+v", c)
		g := posterior.NewGrid(posterior.Motion{}, posterior.Prior{Mean: 1e6, SD: c.sd}, posterior.Bias{})
		var k posterior.Constant
		k.AddKnown(1e6+c.y, c.r)
		g.Update(posterior.Exactly(1e6+c.y), posterior.Spread{SD: c.r})
		sameNormal(t, name, g.Posterior(), k.Posterior(posterior.Prior{Mean: 1e6, SD: c.sd}, absentNoise()))
	}
}

// Values about 1e6, displayed to 1e-3.
func TestGridOfLargeValues(t *testing.T) {
	c := gridCase{prior: posterior.Prior{Mean: 0, SD: 0.01}}
	far := posterior.NewGrid(posterior.Motion{}, posterior.Prior{Mean: 1e6, SD: 0.01}, posterior.Bias{})
	noise := posterior.Spread{SD: 2e-4}
	for range 20 {
		// 2^-10 about 1e6 is a double
		c.with(posterior.Indication{Lower: 0, Upper: 1.0 / 1024}, noise, 1)
		far.Update(posterior.Indication{Lower: 1e6, Upper: 1e6 + 1.0/1024}, noise)
	}
	near, _ := c.grid()
	p, q := near.Posterior(), far.Posterior()
	a, _ := p.Mean()
	b, _ := q.Mean()
	s, _ := p.StandardDeviation()
	within(t, "mean", b-1e6, a, 1e-6*s)
	for z := -5.5; z < 6; z++ {
		x := math.Round((1e6+a+z*s)*math.Ldexp(1, 32)) / math.Ldexp(1, 32)
		within(t, fmt.Sprint("at ", z), scale(q.LowerTail(x), q.UpperTail(x)), scale(p.LowerTail(x-1e6), p.UpperTail(x-1e6)), 1e-5)
	}
}

// The exponential of a belief on a logarithmic scale has the moments that integrating
// gives.
func TestGridExponentialMoments(t *testing.T) {
	random := source(t)
	for round := range 12 {
		// Without outliers, whose far tails the oracle's range would have to hold.
		c := kinds[round%2].kind.constantCase(random, 3, 0.4, 0.5)
		lo, hi := c.window(0)
		d := c.solve(lo, (hi-lo)/8192, 8193, 0)
		var first, second float64
		for i, v := range d.log {
			w := math.Exp(v-d.evidence) * d.h
			first += w * math.Exp(d.x(i))
			second += w * math.Exp(2*d.x(i))
		}
		g, _ := c.grid()
		p := g.Posterior().Exp()
		mean, hasMean := p.Mean()
		sd, hasSD := p.StandardDeviation()
		if !hasMean || !hasSD {
			t.Fatalf("round %d: no moments", round)
		}
		near(t, fmt.Sprint("round ", round, " mean"), mean, first, 1e-4)
		near(t, fmt.Sprint("round ", round, " sd"), sd, math.Sqrt(second-first*first), 1e-3)
	}
}
