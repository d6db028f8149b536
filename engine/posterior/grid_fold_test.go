package posterior_test

import (
	"bytes"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// times is a case whose readings are repeated.
func (c *gridCase) with(y posterior.Indication, noise posterior.Spread, n int) {
	for range n {
		c.readings = append(c.readings, seen{y: y, noise: noise})
	}
}

// A hundred identical displayed readings say that the value lies in the displayed
// interval, or about its end as far as the noise reaches, and no more.
func TestHundredIdenticalDisplays(t *testing.T) {
	var worst gap
	for _, ratio := range []float64{0.02, 0.05, 0.1, 0.2, 0.3, 0.5, 0.7, 1} {
		for _, prior := range []posterior.Prior{{Vague: true}, {Mean: 0.3, SD: 2}} {
			c := gridCase{prior: prior}
			c.with(posterior.Indication{Lower: -0.5, Upper: 0.5}, posterior.Spread{SD: ratio}, 100)
			lo, hi := c.window(0)
			e := c.solve(lo, (hi-lo)/8192, 8193, 0).table()
			worst.widen(c.check(t, e))
			// Far less noise than the display resolves: uniform within, less
			// some noise at each end.
			if ratio <= 0.05 && !(e.sd > (1-6*ratio)/math.Sqrt(12)) {
				t.Errorf("r/d %v: standard deviation %v", ratio, e.sd)
			}
		}
	}
	t.Logf("at most %+v", worst)
}

func TestThousandMixedReadings(t *testing.T) {
	random := source(t)
	var worst gap
	for round := range 6 {
		d := 1.0
		r := d * []float64{0.02, 0.1, 0.3, 0.5, 0.7, 1}[round]
		k := kind{displayed: true, censored: round%2 == 0, exact: round%3 == 0, outlying: round >= 4}
		c := gridCase{prior: posterior.Prior{Mean: 0.2, SD: 3}}
		noise := posterior.Spread{SD: r}
		if k.outlying {
			noise.OutlierProbability, noise.Inflation = 0.02, 8
		}
		for range 1000 {
			c.with(k.reading(random, 0.37, r, d, noise), noise, 1)
		}
		lo, hi := c.window(0)
		worst.widen(c.check(t, c.solve(lo, (hi-lo)/2048, 2049, 0).table()))
	}
	t.Logf("at most %+v", worst)
}

// A step in a thousand parts gives what it gives at once.
func TestGridStepsInParts(t *testing.T) {
	random := source(t)
	for round := range 12 {
		k := kinds[round%len(kinds)].kind
		c := k.movingCase(random)
		whole, _ := c.grid()
		seconds := math.Exp(2 * random.NormFloat64())
		parts := whole.Clone()
		whole.Advance(seconds)
		for range 1000 {
			parts.Advance(seconds / 1000)
		}
		samePlaces(t, fmt.Sprint("round ", round), parts.Posterior(), whole.Posterior(), 1e-3)
	}
}

// samePlaces compares normal scores at quantiles of the second.
func samePlaces(t *testing.T, name string, got, want posterior.Posterior, tolerance float64) {
	t.Helper()
	for z := -5.9; z < 6; z += 0.9 {
		p := math.Erfc(math.Abs(z)/math.Sqrt2) / 2
		x := want.Quantile(p)
		if z > 0 {
			x = mirrored(want, p)
		}
		within(t, fmt.Sprint(name, " at ", z), scale(got.LowerTail(x), got.UpperTail(x)), z, tolerance)
	}
}

// mirrored returns the point above which p lies.
func mirrored(d posterior.Posterior, p float64) float64 {
	_, x := d.Interval(1 - 2*p)
	return x
}

func TestGridIsImproperUntilBounded(t *testing.T) {
	above, below := posterior.Indication{Lower: 3, Upper: math.Inf(1)}, posterior.Indication{Lower: math.Inf(-1), Upper: 5}
	noise := posterior.Spread{SD: 0.5, OutlierProbability: 0.1, Inflation: 4}
	walk := posterior.Motion{Form: posterior.MotionWalk, Walk: 0.04}
	for _, bias := range []posterior.Bias{{}, {Mean: 1, SD: 0.2}} {
		g := posterior.NewGrid(walk, posterior.Prior{Vague: true}, bias)
		for i, y := range []posterior.Indication{above, above} {
			e := g.Update(y, noise)
			if e != (posterior.Evidence{Outlier: 0.1}) || g.Posterior().Form() != posterior.FormNone || g.Predictive(noise).Form() != posterior.FormNone {
				t.Errorf("reading %d: %+v, %v", i, e, g.Posterior().Form())
			}
			if _, _, ok := g.Foretell(posterior.Exactly(4), noise); ok {
				t.Error("foretold from nothing")
			}
			g.Advance(2)
		}
		if mean, sd := g.BiasBelief(); mean != bias.Mean || sd != bias.SD {
			t.Errorf("bias %v, %v before the level is bounded, was %+v", mean, sd, bias)
		}
		if e := g.Update(below, noise); !(e.Log < 2 && e.Log > 0) || g.Posterior().Form() != posterior.FormGrid {
			t.Errorf("bounded: %+v, %v", e, g.Posterior().Form())
		}
	}
}

// The walk between two readings that bound a flat level counts: with a flat level the
// first reading and the walk are a reading of variance r^2 + q.
func TestWalkBetweenBounds(t *testing.T) {
	const r, q = 0.3, 0.4
	up, down := posterior.Indication{Lower: -1, Upper: math.Inf(1)}, posterior.Indication{Lower: math.Inf(-1), Upper: 1}
	g := posterior.NewGrid(posterior.Motion{Form: posterior.MotionWalk, Walk: q}, posterior.Prior{Vague: true}, posterior.Bias{})
	g.Update(up, posterior.Spread{SD: r})
	for range 10 {
		g.Advance(0.1)
	}
	evidence := g.Update(down, posterior.Spread{SD: r}).Log
	c := gridCase{prior: posterior.Prior{Vague: true}}
	c.with(up, posterior.Spread{SD: math.Sqrt(r*r + q)}, 1)
	c.with(down, posterior.Spread{SD: r}, 1)
	lo, hi := c.window(0)
	e := c.solve(lo, (hi-lo)/8192, 8193, 0).table()
	within(t, "evidence", evidence, e.evidence, 1e-5)
	if off := compare(e, g.Posterior()); !(off.z < 1e-3 && off.mean < 1e-5 && off.sd < 1e-5) {
		t.Errorf("off by %+v", off)
	}
}

// Truncated normal distributions (Johnson, Kotz & Balakrishnan 1994, Continuous Univariate
// Distributions vol. 1, 13.10; recomputed with mpmath, 12 digits): a one-sided reading
// without noise cuts a prior off. The noise is 1e-4 here, which moves the mean by the
// square of that.
func TestTruncatedNormalMoments(t *testing.T) {
	for _, c := range []struct{ end, mass, mean, variance float64 }{
		{0, 0.5, 0.797884560803, 0.363380227632},
		{1, 0.158655253931, 1.52513527616, 0.19909766557},
	} {
		g := posterior.NewGrid(posterior.Motion{}, posterior.Prior{SD: 1}, posterior.Bias{})
		e := g.Update(posterior.Indication{Lower: c.end, Upper: math.Inf(1)}, posterior.Spread{SD: 1e-4})
		mean, _ := g.Posterior().Mean()
		sd, _ := g.Posterior().StandardDeviation()
		near(t, "mass", math.Exp(e.Log), c.mass, 1e-6)
		near(t, "mean", mean, c.mean, 1e-6)
		near(t, "variance", sd*sd, c.variance, 1e-5)
	}
}

// grids are states to start from.
func grids(random *rand.Rand) []posterior.Grid {
	var all []posterior.Grid
	for _, k := range kinds {
		c := k.kind.movingCase(random)
		c.motion.Form = posterior.MotionWalk
		for _, c.bias = range []posterior.Bias{{}, {Mean: 1, SD: 0.3}} {
			g, _ := c.grid()
			all = append(all, g)
			c.prior = posterior.Prior{Vague: true}
			all = append(all, posterior.NewGrid(c.motion, c.prior, c.bias))
			g, _ = c.grid()
			all = append(all, g)
		}
	}
	return all
}

func TestGridsComeBackBitForBit(t *testing.T) {
	for i, g := range grids(source(t)) {
		b := g.AppendBinary([]byte("head"))
		again, err := posterior.DecodeGrid(b[4:])
		if err != nil || string(b[:4]) != "head" || !bytes.Equal(again.AppendBinary(nil), b[4:]) {
			t.Fatalf("state %d: %v", i, err)
		}
		y := posterior.Indication{Lower: 0.2, Upper: 0.7}
		for _, g := range []*posterior.Grid{&g, &again} {
			g.Advance(0.3)
			g.Update(y, posterior.Spread{SD: 0.2})
		}
		if !bytes.Equal(again.AppendBinary(nil), g.AppendBinary(nil)) {
			t.Errorf("state %d goes on differently", i)
		}
	}
}

func TestDamagedGridsAreRefused(t *testing.T) {
	all := grids(source(t))
	good := all[3].AppendBinary(nil) // with a bias
	change := func(at int, to ...byte) []byte {
		b := bytes.Clone(good)
		copy(b[at:], to)
		return b
	}
	infinite := []byte{0, 0, 0, 0, 0, 0, 0xf0, 0x7f}
	for name, b := range map[string][]byte{
		"empty": nil, "head": good[:98], "short": good[:len(good)-1], "long": append(bytes.Clone(good), 0),
		"version": change(0, 99), "motion": change(1, 9), "infinite mean": change(18, infinite...),
		"step": change(75, make([]byte, 8)...), "count": change(91, 1), "flags": change(58, 0xff),
		"without bias": change(58, 0), "infinite density": change(99, infinite...),
		"negative variance": change(len(good)-8, 0, 0, 0, 0, 0, 0, 0xf0, 0xbf),
		"negative bias":     change(50, 0, 0, 0, 0, 0, 0, 0xf0, 0xbf),
	} {
		if _, err := posterior.DecodeGrid(b); err == nil {
			t.Errorf("%s: no error", name)
		}
	}
}

func FuzzDecodeGrid(f *testing.F) {
	for _, g := range grids(rand.New(rand.NewPCG(1, 1))) {
		f.Add(g.AppendBinary(nil))
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		g, err := posterior.DecodeGrid(b)
		if err != nil {
			return
		}
		if got := g.AppendBinary(nil); !bytes.Equal(got, b) {
			t.Errorf("%x came back as %x", b, got)
		}
	})
}
