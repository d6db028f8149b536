package posterior_test

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine/posterior"
)

// blendCase is an entry of blend.json, which blend.py beside it makes with mpmath
// and 50 digits.
type blendCase struct {
	Name             string
	LogWeights       []float64      `json:"log_weights"`
	Parts            [][3]float64   // location, scale, degrees of freedom or 0
	Tails            [][3]jsonPoint // x, lower, upper
	Between          [][3]jsonPoint // lo, hi, probability
	Quantiles        [][2]jsonPoint // p, x
	Anchor           float64
	MeanOffset       string         `json:"mean_offset"`
	SD               string         `json:"sd"`
	ExponentialTails [][3]jsonPoint `json:"exponential_tails"`
	ExponentialMean  *string        `json:"exponential_mean"`
	ExponentialSD    string         `json:"exponential_sd"`
}

// jsonPoint is a number, given as such or with more digits in a string.
type jsonPoint float64

func (p *jsonPoint) UnmarshalJSON(b []byte) error {
	if b[0] == '"' {
		b = b[1 : len(b)-1]
	}
	return json.Unmarshal(b, (*float64)(p))
}

func (c blendCase) build() posterior.Posterior {
	var parts []posterior.Posterior
	for _, p := range c.Parts {
		part := posterior.Normal(posterior.LevelOf(p[0]), p[1])
		if p[2] > 0 {
			part = posterior.Student(posterior.LevelOf(p[0]), p[1], p[2])
		}
		parts = append(parts, part)
	}
	return posterior.Blend(c.LogWeights, parts)
}

func blendCases(t testing.TB) []blendCase {
	var cases []blendCase
	load(t, "reference/blend.json", &cases)
	return cases
}

// nearTail is near for a probability, which the doubles may not hold.
func nearTail(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if want < 1e-300 {
		within(t, what, got, want, 1e-299)
		return
	}
	near(t, what, got, want, tolerance)
}

func TestBlendsAgainstReference(t *testing.T) {
	for _, c := range blendCases(t) {
		t.Run(c.Name, func(t *testing.T) {
			p := c.build()
			if p.Form() != posterior.FormMixture {
				t.Errorf("form %v", p.Form())
			}
			for _, r := range c.Tails {
				x := float64(r[0])
				nearTail(t, fmt.Sprint("lower tail at ", x), p.LowerTail(x), float64(r[1]), 1e-12)
				nearTail(t, fmt.Sprint("upper tail at ", x), p.UpperTail(x), float64(r[2]), 1e-12)
			}
			for _, r := range c.Between {
				nearTail(t, fmt.Sprint("between ", r[0], " and ", r[1]), p.Between(float64(r[0]), float64(r[1])), float64(r[2]), 1e-11)
			}
			width := math.Inf(1)
			for _, part := range c.Parts {
				width = min(width, part[1])
			}
			for _, r := range c.Quantiles {
				x := float64(r[1])
				within(t, fmt.Sprint("quantile of ", r[0]), p.Quantile(float64(r[0])), x, 1e-12*math.Abs(x)+1e-12*width)
			}
			checkBlendMoments(t, c, p)
		})
	}
}

func checkBlendMoments(t *testing.T, c blendCase, p posterior.Posterior) {
	mean, hasMean := p.Mean()
	sd, hasSD := p.StandardDeviation()
	if c.SD == "" {
		if hasMean || hasSD {
			t.Errorf("mean %v, sd %v, want none", mean, sd)
		}
		return
	}
	near(t, "sd", sd, number(t, c.SD), 1e-13)
	offset := number(t, c.MeanOffset)
	within(t, "mean less its anchor", mean-c.Anchor, offset, 1e-14*sd+math.Abs(mean)*0x1p-52)
}

// A blend whose parts are all the same is that part; of any order it is the same blend.
func TestBlendOfEqualPartsIsThePart(t *testing.T) {
	for name, p := range map[string]posterior.Posterior{
		"normal":  posterior.Normal(posterior.Level{Hi: 1e6, Lo: 3e-11}, 1e-3),
		"student": posterior.Student(posterior.LevelOf(-3), 0.5, 4),
		"mixture": learnedAll([]float64{4.1, 4.4, 3.9}).Posterior(posterior.Prior{Mean: 4, SD: 0.2}, learnedNoise(0.3, 2)),
	} {
		b := posterior.Blend([]float64{-1, -2, math.Inf(-1), 0.5}, []posterior.Posterior{p, p, {}, p})
		m, _ := p.Mean()
		s, _ := p.StandardDeviation()
		sameBelief(t, name, b, posterior.Blend([]float64{3, 1}, []posterior.Posterior{p, p}))
		mean, _ := b.Mean()
		sd, _ := b.StandardDeviation()
		within(t, name+" mean", mean, m, 1e-15*s)
		near(t, name+" sd", sd, s, 1e-14)
		for _, q := range []float64{1e-100, 1e-9, 0.025, 0.4, 0.5, 0.9} {
			x := p.Quantile(q)
			within(t, name+" quantile", b.Quantile(q), x, 1e-12*math.Abs(x))
			near(t, name+" tail", b.LowerTail(x), p.LowerTail(x), 1e-13)
			near(t, name+" between", b.Between(x, x+s), p.Between(x, x+s), 1e-13)
		}
	}
}

func TestBlendOfOnePartIsThatPart(t *testing.T) {
	p := posterior.Normal(posterior.LevelOf(3), 0.5)
	q := posterior.Student(posterior.LevelOf(4), 0.5, 3)
	for _, logs := range [][]float64{{-1e6, math.Inf(-1)}, {1e6, -1e6}, {0, -691}} {
		if got := posterior.Blend(logs, []posterior.Posterior{p, q}); got != p {
			t.Errorf("weights %v: %+v", logs, got)
		}
	}
}

func TestBlendOfNothingIsNothing(t *testing.T) {
	p := posterior.Normal(posterior.LevelOf(3), 0.5)
	inf := math.Inf(-1)
	for name, got := range map[string]posterior.Posterior{
		"no part":              posterior.Blend(nil, nil),
		"no weight":            posterior.Blend([]float64{inf, inf}, []posterior.Posterior{p, p}),
		"a part of no content": posterior.Blend([]float64{0, -50}, []posterior.Posterior{p, {}}),
	} {
		if got.Form() != posterior.FormNone {
			t.Errorf("%s: form %v", name, got.Form())
		}
	}
}

// randomBlend draws normals that spread over orders of magnitude.
func randomBlend(random *rand.Rand) ([]float64, []posterior.Posterior) {
	var logs []float64
	var parts []posterior.Posterior
	unit := math.Exp(20 * random.NormFloat64())
	centre := posterior.LevelOf(unit * math.Exp(10*random.NormFloat64()))
	for range 2 + random.IntN(40) {
		sd := unit * math.Exp(3*random.NormFloat64())
		logs = append(logs, -5+3*random.NormFloat64())
		parts = append(parts, posterior.Normal(centre.Plus(3*sd*random.NormFloat64()), sd))
	}
	return logs, parts
}

// However the parts lie: quantiles invert tails, tails rise, what lies between
// two points is what their tails leave, and an offset of the weights is nothing.
func TestBlendsAreDistributions(t *testing.T) {
	random := source(t)
	for range 300 {
		logs, parts := randomBlend(random)
		p := posterior.Blend(logs, parts)
		for i := range logs {
			logs[i] += 1000
		}
		shifted := posterior.Blend(logs, parts)
		logs[0], parts[0] = 1e9, posterior.Posterior{} // both were copied
		mean, _ := p.Mean()
		before := math.Inf(-1)
		for _, q := range []float64{1e-280, 1e-30, 1e-9, 0.01, 0.3, 0.5, 0.8, 0.999} {
			x := p.Quantile(q)
			if !(x >= before) {
				t.Fatalf("quantile of %v at %v, below %v", q, x, before)
			}
			rounding := p.Between(math.Nextafter(x, -1e300), math.Nextafter(x, 1e300))
			within(t, fmt.Sprint("tail at the quantile of ", q), p.LowerTail(x), q, 1e-12*q+2*rounding)
			within(t, "whole", p.LowerTail(x)+p.UpperTail(x), 1, 1e-14)
			near(t, "tail with weights shifted", shifted.LowerTail(x), p.LowerTail(x), 1e-11)
			near(t, "below", p.Between(math.Inf(-1), x), p.LowerTail(x), 1e-12)
			if before > math.Inf(-1) {
				within(t, "between two quantiles", p.Between(before, x), p.LowerTail(x)-p.LowerTail(before), 1e-14)
			}
			before = x
		}
		if lo, hi := p.Interval(1 - 1e-12); !(lo < mean && mean < hi) {
			t.Errorf("mean %v outside of [%v, %v]", mean, lo, hi)
		}
	}
}

func TestTailsOfABlendOfNormalsAllocateNothing(t *testing.T) {
	logs, parts := randomBlend(source(t))
	p := posterior.Blend(logs, parts)
	e := p.Exp()
	x := p.Quantile(0.3)
	if n := testing.AllocsPerRun(100, func() { p.UpperTail(x); p.LowerTail(x); p.Between(x, x+1); e.UpperTail(1); e.Mean() }); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

func BenchmarkBlend(b *testing.B) {
	for _, n := range []int{1, 16, 60} {
		logs, parts := make([]float64, n), make([]posterior.Posterior, n)
		for i := range parts {
			logs[i] = -float64((i-n/2)*(i-n/2)) / float64(n*n) * 8
			parts[i] = posterior.Normal(posterior.LevelOf(3), math.Exp(float64(i)/float64(n)))
		}
		p := posterior.Blend(logs, parts)
		for name, f := range map[string]func(){
			"make": func() { posterior.Blend(logs, parts) }, "tail": func() { p.UpperTail(6) }, "interval": func() { p.Interval(0.95) },
			"exp-tail": func() { p.Exp().UpperTail(403) },
		} {
			b.Run(fmt.Sprintf("%s/parts=%d", name, n), func(b *testing.B) {
				b.ReportAllocs()
				for b.Loop() {
					f()
				}
			})
		}
	}
}
