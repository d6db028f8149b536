package posterior_test

import (
	"bytes"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// identical returns n equal displayed readings of [-1/2, 1/2].
func identical(n int) *posterior.Counts {
	var c posterior.Counts
	for range n {
		c.Add(posterior.Indication{Lower: -0.5, Upper: 0.5}, 0, 1)
	}
	return &c
}

// TestIdenticalDisplaysStayUniform: for r much below the resolution the display alone
// bounds the level, however many readings agree: uniform over d, standard deviation
// d / sqrt(12), which JCGM 100:2008, F.2.2.1 rounds to 0.29 d.
func TestIdenticalDisplaysStayUniform(t *testing.T) {
	for _, n := range []int{1, 100, 1_000_000} {
		p := identical(n).Posterior(vaguePrior(), knownNoise(1e-5), posterior.Bias{})
		sd, _ := p.StandardDeviation()
		near(t, "sd", sd, 1/math.Sqrt(12), 2e-4)
		prints(t, "sd as published", sd, "0.29")
		for _, x := range []float64{-0.49, -0.3, 0, 0.25, 0.48} {
			within(t, "P(level < x)", p.LowerTail(x), x+0.5, 1e-4)
			within(t, "P(level > x)", p.UpperTail(x), 0.5-x, 1e-4)
		}
		within(t, "quantile", p.Quantile(0.975), 0.475, 1e-4)
	}
}

// TestIdenticalDisplaysAgainstIntegration asks after 100 readings that show one value, and
// after a million. Moment matching, which takes the display for noise, would say
// sqrt((r^2 + d^2/12) / 100): less than half at r = 0.02 d.
func TestIdenticalDisplaysAgainstIntegration(t *testing.T) {
	for _, r := range []float64{0.02, 0.05, 0.1, 0.2, 0.5, 1} {
		for _, n := range []float64{100, 1e6} {
			q := &question{prior: vaguePrior(), noise: knownNoise(r)}
			q.readings = []said{{posterior.Indication{Lower: -0.5, Upper: 0.5}, 0, 1, n}}
			checkQuestion(t, "identical", q)
			if n == 100 {
				sd, _ := identical(100).Posterior(vaguePrior(), knownNoise(r), posterior.Bias{}).StandardDeviation()
				if matched := math.Sqrt((r*r + 1./12) / 100); r <= 0.05 && sd < 2*matched {
					t.Errorf("r = %v: sd %v after 100 readings, moment matching says %v", r, sd, matched)
				}
			}
		}
		q := &question{prior: vaguePrior(), noise: learnedNoise(r, 3)}
		q.readings = []said{{posterior.Indication{Lower: -0.5, Upper: 0.5}, 0, 1, 100}}
		checkQuestion(t, "identical, learned", q)
	}
}

// TestDisplayAsVariance is Sheppard's correction: displays in the numbers that a normal of
// standard deviation r leads to are as good as values of variance r^2 + d^2/12 from
// r = d on (3e-4 of the standard deviation), and not at r = 0.3 d.
func TestDisplayAsVariance(t *testing.T) {
	gap := func(r float64) float64 {
		var c posterior.Counts
		n := 0
		for k := -12; k <= 12; k++ {
			lower, upper := float64(k)-0.5, float64(k)+0.5
			share := math.Erfc(lower/r/math.Sqrt2)/2 - math.Erfc(upper/r/math.Sqrt2)/2
			for range int(math.Round(2000 * share)) {
				c.Add(posterior.Indication{Lower: lower, Upper: upper}, 0, 1)
				n++
			}
		}
		sd, _ := c.Posterior(vaguePrior(), knownNoise(r), posterior.Bias{}).StandardDeviation()
		return sd/math.Sqrt((r*r+1./12)/float64(n)) - 1
	}
	for _, r := range []float64{1, 1.5, 2} {
		within(t, "relative gap", gap(r), 0, 3e-4)
	}
	if g := gap(0.3); math.Abs(g) < 0.02 {
		t.Errorf("at r = 0.3 d the gap is only %v", g)
	}
}

// TestCensoredReadingTruncates: a sharp one-sided reading cuts the prior off. Moments of
// the standard normal above 0 and above 1: Johnson, Kotz & Balakrishnan 1994,
// Continuous Univariate Distributions vol. 1, 13.10, evaluated to 12 digits.
func TestCensoredReadingTruncates(t *testing.T) {
	for _, c := range []struct{ limit, mean, variance float64 }{
		{0, 0.797884560803, 0.363380227632},
		{1, 1.52513527616, 0.19909766557},
	} {
		var k posterior.Counts
		k.Add(posterior.Indication{Lower: c.limit, Upper: math.Inf(1)}, 1e-7, 0)
		p := k.Posterior(posterior.Prior{SD: 1}, absentNoise(), posterior.Bias{})
		mean, _ := p.Mean()
		sd, _ := p.StandardDeviation()
		near(t, "mean", mean, c.mean, 1e-6)
		near(t, "variance", sd*sd, c.variance, 1e-5)
		var mirrored posterior.Counts
		mirrored.Add(posterior.Indication{Lower: math.Inf(-1), Upper: -c.limit}, 1e-7, 0)
		mean, _ = mirrored.Posterior(posterior.Prior{SD: 1}, absentNoise(), posterior.Bias{}).Mean()
		near(t, "mirrored mean", mean, -c.mean, 1e-6)
	}
}

// TestExactReadingsEqualConstant: of values alone Counts make what Constant has in closed
// form, or by another quadrature.
func TestExactReadingsEqualConstant(t *testing.T) {
	random := source(t)
	for round := range 20 {
		var c posterior.Counts
		var k posterior.Constant
		for range 4 + random.IntN(30) {
			y := 7 + random.NormFloat64()
			c.Add(posterior.Exactly(y), 0, 1)
			k.AddLearned(y)
			if round%2 == 0 {
				c.Add(posterior.Exactly(y+0.1), 0.7, 0)
				k.AddKnown(y+0.1, 0.7)
			}
		}
		prior := posterior.Prior{Mean: 6, SD: 1}
		if round%4 > 1 {
			prior = vaguePrior()
		}
		for name, n := range map[string]posterior.Noise{"known": knownNoise(1.2), "learned": learnedNoise(0.8, 3), "reference": learnedNoise(0, 0)} {
			got, want := c.Posterior(prior, n, posterior.Bias{}), k.Posterior(prior, n)
			a, _ := got.Mean()
			b, _ := want.Mean()
			sa, _ := got.StandardDeviation()
			sb, _ := want.StandardDeviation()
			within(t, name+": mean", a, b, 1e-6*sb)
			near(t, name+": sd", sa, sb, 1e-5)
			for _, q := range []float64{1e-9, 1e-4, 0.3, 0.9, 1 - 1e-7} {
				x := want.Quantile(q)
				near(t, name+": lower tail", got.LowerTail(x), want.LowerTail(x), 1e-4)
				near(t, name+": upper tail", got.UpperTail(x), want.UpperTail(x), 1e-4)
			}
			next, other := c.Predictive(prior, n, posterior.Bias{}, 0), k.Predictive(prior, n)
			x := other.Quantile(1e-5)
			near(t, name+": next", next.LowerTail(x), 1e-5, 1e-3)
			ra, rb := c.Repeatability(prior, n, posterior.Bias{}, 0.9), k.Repeatability(prior, n, 0.9)
			near(t, name+": r's median", ra.Median+ra.StandardDeviation, rb.Median+rb.StandardDeviation, 1e-4)
			near(t, name+": r's upper limit", ra.Upper, rb.Upper, 1e-4)
		}
	}
}

// TestMomentsThatBarelyExist: of one value, worth 2.1 and a flat level the belief is
// Student t with 2.1 degrees of freedom, whose variance is scale^2 nu / (nu - 2) (JCGM
// 101:2008, 6.4.9.4). Part of its sum over r lies where no tail has anything left.
func TestMomentsThatBarelyExist(t *testing.T) {
	var c posterior.Counts
	c.Add(posterior.Exactly(5), 0, 1)
	p := c.Posterior(vaguePrior(), learnedNoise(0.3, 2.1), posterior.Bias{})
	sd, ok := p.StandardDeviation()
	if !ok {
		t.Fatal("no standard deviation")
	}
	near(t, "sd", sd, 0.3*math.Sqrt(2.1/0.1), 1e-4)
	if _, ok := c.Posterior(vaguePrior(), learnedNoise(0.3, 2), posterior.Bias{}).StandardDeviation(); ok {
		t.Error("2 degrees of freedom, but a standard deviation")
	}
	if _, ok := c.Posterior(vaguePrior(), learnedNoise(0.3, 1), posterior.Bias{}).Mean(); ok {
		t.Error("1 degree of freedom, but a mean")
	}
}

func TestImproperCountsSayNothing(t *testing.T) {
	display := posterior.Indication{Lower: 1, Upper: 2}
	above := posterior.Indication{Lower: 1, Upper: math.Inf(1)}
	below := posterior.Indication{Lower: math.Inf(-1), Upper: 3}
	proper := posterior.Prior{Mean: 0, SD: 5}
	floor := posterior.Noise{Floor: 0.1}
	for _, c := range []struct {
		name  string
		prior posterior.Prior
		noise posterior.Noise
		add   []posterior.Indication
		says  bool
	}{
		{"nothing, flat", vaguePrior(), knownNoise(1), nil, false},
		{"nothing, prior", proper, knownNoise(1), nil, true},
		{"one display", vaguePrior(), knownNoise(1), []posterior.Indication{display}, true},
		{"one side", vaguePrior(), knownNoise(1), []posterior.Indication{above, above}, false},
		{"one side, prior", proper, knownNoise(1), []posterior.Indication{above}, true},
		{"both sides", vaguePrior(), knownNoise(1), []posterior.Indication{above, below}, true},
		{"reference, displays", vaguePrior(), learnedNoise(0, 0), []posterior.Indication{display, display, display}, false},
		{"reference, displays, prior", proper, learnedNoise(0, 0), []posterior.Indication{display, display}, false},
		{"reference, one value", vaguePrior(), learnedNoise(0, 0), []posterior.Indication{posterior.Exactly(1), posterior.Exactly(1)}, false},
		{"reference, two values", vaguePrior(), learnedNoise(0, 0), []posterior.Indication{posterior.Exactly(1), posterior.Exactly(2)}, true},
		{"floor, one display", vaguePrior(), floor, []posterior.Indication{display}, false},
		{"floor, two displays", vaguePrior(), floor, []posterior.Indication{display, display}, true},
		{"floor, one display, prior", proper, floor, []posterior.Indication{display}, true},
		{"floor, one side, prior", proper, floor, []posterior.Indication{above}, false},
		{"floor, both sides", vaguePrior(), floor, []posterior.Indication{above, below}, false},
		{"worth 1, both sides", vaguePrior(), learnedNoise(1, 1), []posterior.Indication{above, below}, false},
		{"worth 2, both sides", vaguePrior(), learnedNoise(1, 2), []posterior.Indication{above, below}, true},
		{"reference, nothing, prior", proper, learnedNoise(0, 0), nil, false},
	} {
		var k posterior.Counts
		for _, y := range c.add {
			k.Add(y, 0, 1)
		}
		for name, p := range map[string]posterior.Posterior{
			"posterior": k.Posterior(c.prior, c.noise, posterior.Bias{}), "predictive": k.Predictive(c.prior, c.noise, posterior.Bias{}, 0),
		} {
			if says := p.Form() == posterior.FormGrid; says != c.says {
				t.Errorf("%s: the %s is %v", c.name, name, p.Form())
			}
			if math.IsNaN(p.UpperTail(1.5)) == c.says {
				t.Errorf("%s: the %s gives %v", c.name, name, p.UpperTail(1.5))
			}
		}
	}
}

// TestCountsHoldExtremes: answers stay finite, in order and inverse to each other.
func TestCountsHoldExtremes(t *testing.T) {
	at := func(lower, upper, n float64) said {
		return said{posterior.Indication{Lower: lower, Upper: upper}, 0, 1, n}
	}
	fine := []said{}
	for i := range 1000 {
		fine = append(fine, at(float64(i)-0.5, float64(i)+0.5, 1+float64(i%3)))
	}
	for _, c := range []struct {
		name     string
		readings []said
		noise    posterior.Noise
	}{
		{"large values", []said{at(1e6-0.0005, 1e6+0.0005, 50), at(1e6+0.0005, 1e6+0.0015, 3)}, knownNoise(2e-4)},
		{"large values, learned", []said{at(1e6-0.0005, 1e6+0.0005, 50), at(1e6+0.0005, 1e6+0.0015, 3)}, learnedNoise(2e-4, 3)},
		{"conflicting", []said{at(0, 1, 5), at(100, 101, 5)}, knownNoise(0.05)},
		{"conflicting, learned", []said{at(0, 1, 5), at(100, 101, 5)}, learnedNoise(0.05, 5)},
		{"crossed limits", []said{at(10, math.Inf(1), 3), at(math.Inf(-1), -10, 2)}, knownNoise(0.1)},
		{"1,000 distinct", fine, knownNoise(300)},
		{"1,000 distinct, learned", fine, learnedNoise(300, 5)},
		{"a million", []said{at(-0.5, 0.5, 1e6)}, knownNoise(0.1)},
		{"a million, learned", []said{at(-0.5, 0.5, 1e6), at(0.5, 1.5, 3e5)}, learnedNoise(0.3, 5)},
	} {
		q := &question{prior: vaguePrior(), noise: c.noise, readings: c.readings}
		for _, b := range []posterior.Bias{{}, {Mean: 1e-5, SD: 1e-4}} {
			p := q.counts().Posterior(q.prior, q.noise, b)
			sd, _ := p.StandardDeviation()
			before := math.Inf(-1)
			for _, v := range []float64{1e-12, 1e-6, 0.025, 0.5, 0.975, 1 - 1e-6} {
				x := p.Quantile(v)
				if !(x > before) {
					t.Errorf("%s, %v: the quantile of %v is %v after %v", c.name, b, v, x, before)
				}
				before = x
				near(t, c.name+": tail at its quantile", math.Min(p.LowerTail(x), p.UpperTail(x)), math.Min(v, 1-v), 1e-4+1e-10*math.Abs(x)/sd)
			}
			for _, z := range []float64{20, 100} {
				if low, high := p.LowerTail(p.Location()-z*sd), p.UpperTail(p.Location()+z*sd); !(low >= 0 && high >= 0 && low < 1e-2 && high < 1e-2) {
					t.Errorf("%s: tails %v, %v at %v sd", c.name, low, high, z)
				}
			}
		}
	}
}

func TestCountsDontDependOnOrder(t *testing.T) {
	random := source(t)
	for range 4 {
		q := randomQuestion(random, mix{display: true, censored: true, exact: true, own: true}, "learned", true)
		var all []said
		for _, s := range q.readings {
			for range int(s.count) {
				all = append(all, s)
			}
		}
		var want posterior.Posterior
		for shuffle := range 3 {
			var c posterior.Counts
			for _, s := range all {
				c.Add(s.y, s.sd, s.samples)
			}
			got := c.Posterior(q.prior, q.noise, q.bias)
			if shuffle == 0 {
				want = got
			}
			if got.Form() != want.Form() {
				t.Fatal("another form in another order")
			}
			if got.Form() != posterior.FormNone {
				for _, v := range []float64{1e-6, 0.3, 0.999} {
					lo, hi := want.Interval(0.5)
					within(t, "quantile in another order", got.Quantile(v), want.Quantile(v), 1e-6*(hi-lo))
				}
			}
			random.Shuffle(len(all), func(i, j int) { all[i], all[j] = all[j], all[i] })
		}
	}
}

// encodedCounts are encodings to start from.
func encodedCounts() [][]byte {
	var c posterior.Counts
	out := [][]byte{c.AppendBinary(nil)}
	random := rand.New(rand.NewPCG(*seed, 3))
	for range 4 {
		q := randomQuestion(random, mix{display: true, censored: true, exact: true, own: true}, "known", false)
		out = append(out, q.counts().AppendBinary(nil))
	}
	return out
}

func TestCountsComeBackBitForBit(t *testing.T) {
	for _, b := range encodedCounts() {
		c, err := posterior.DecodeCounts(b)
		if err != nil || !bytes.Equal(c.AppendBinary(nil), b) {
			t.Fatalf("%x came back as %x, %v", b, c.AppendBinary(nil), err)
		}
		d := c.Clone()
		y := posterior.Indication{Lower: 3, Upper: 4}
		c.Add(y, 0, 1)
		c.Add(y, 0, 1)
		if d.Count()+2 != c.Count() || bytes.Equal(c.AppendBinary(nil), b) || !bytes.Equal(d.AppendBinary(nil), b) {
			t.Error("a clone follows the original")
		}
		if len(b) > 200 {
			for _, n := range []int{0, 1, 50, len(b) - 1} {
				if _, err := posterior.DecodeCounts(b[:n]); err == nil {
					t.Errorf("%d bytes of %d were read", n, len(b))
				}
			}
			bad := bytes.Clone(b)
			bad[len(bad)-1] = 0x80 // a negative count
			if _, err := posterior.DecodeCounts(bad); err == nil {
				t.Error("a negative count was read")
			}
		}
	}
}

func TestPointsComeBackBitForBit(t *testing.T) {
	var none posterior.Points
	c, _ := displays(5)
	known, learned := c.Points(vaguePrior(), knownNoise(1), posterior.Bias{}), c.Points(vaguePrior(), learnedNoise(1, 2), posterior.Bias{})
	for _, p := range []posterior.Points{none, known, learned} {
		b := p.AppendBinary(nil)
		got, err := posterior.DecodePoints(b)
		if err != nil || !bytes.Equal(got.AppendBinary(nil), b) {
			t.Fatalf("%x came back as %x, %v", b, got.AppendBinary(nil), err)
		}
		clone := p.Clone()
		p.Update(posterior.Exactly(2), 0, 1)
		if !bytes.Equal(clone.AppendBinary(nil), b) {
			t.Error("a clone follows the original")
		}
		for _, n := range []int{0, 2, len(b) - 1} {
			if _, err := posterior.DecodePoints(b[:n]); err == nil {
				t.Errorf("%d bytes of %d were read", n, len(b))
			}
		}
	}
}

func FuzzDecodeCounts(f *testing.F) {
	for _, b := range encodedCounts() {
		f.Add(b)
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		c, err := posterior.DecodeCounts(b)
		if err != nil {
			if c.Count() != 0 {
				t.Error("counts and an error")
			}
			return
		}
		if got := c.AppendBinary(nil); !bytes.Equal(got, b) {
			t.Errorf("%x came back as %x", b, got)
		}
	})
}
