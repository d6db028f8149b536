package posterior

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// uniform is a form that has shape but no formula of Posterior's own.
type uniform struct {
	lo, hi      float64
	exponential bool // its moments are known
}

func (u uniform) posterior() Posterior {
	return Posterior{form: FormGrid, location: LevelOf((u.lo + u.hi) / 2), scale: (u.hi - u.lo) / math.Sqrt(12), shape: u}
}

func (u uniform) moments() (hasMean, hasSD bool) { return true, true }

func (u uniform) tail(x float64, s side) float64 {
	part := (u.hi - x) / (u.hi - u.lo)
	if s == lower {
		part = (x - u.lo) / (u.hi - u.lo)
	}
	return math.Max(0, math.Min(1, part))
}

func (u uniform) between(lo, hi float64) float64 {
	return math.Max(0, math.Min(hi, u.hi)-math.Max(lo, u.lo)) / (u.hi - u.lo)
}

func (u uniform) quantile(p float64, s side) float64 {
	if s == lower {
		return u.lo + p*(u.hi-u.lo)
	}
	return u.hi - p*(u.hi-u.lo)
}

// The moments of exp(X): (e^hi - e^lo) / (hi - lo) and (e^2hi - e^2lo) / 2(hi - lo).
func (u uniform) exponentialMoments() (mean, sd float64, ok bool) {
	mean = (math.Exp(u.hi) - math.Exp(u.lo)) / (u.hi - u.lo)
	square := (math.Exp(2*u.hi) - math.Exp(2*u.lo)) / (u.hi - u.lo) / 2
	return mean, math.Sqrt(square - mean*mean), u.exponential
}

// Blends of half and half over [0, 1] and [0.5, 2.5]: a density of 1/2, 3/4 and 1/4.
func TestBlendOfGrids(t *testing.T) {
	a, b := uniform{0, 1, true}, uniform{0.5, 2.5, true}
	p := Blend([]float64{2, 2}, []Posterior{a.posterior(), b.posterior()})
	if p.Form() != FormGrid {
		t.Errorf("form %v", p.Form())
	}
	mean, _ := p.Mean()
	sd, _ := p.StandardDeviation()
	square := (1.0/3 + (2.5*2.5*2.5-0.125)/6) / 2
	for _, c := range []struct {
		name      string
		got, want float64
	}{
		{"mean", mean, 1},
		{"sd", sd, math.Sqrt(square - 1)},
		{"lower tail", p.LowerTail(0.25), 0.125},
		{"upper tail", p.UpperTail(2), 0.125},
		{"between", p.Between(0.25, 0.75), 0.125 + 0.1875},
		{"lower quartile", p.Quantile(0.25), 0.5},
		{"quantile in the tail", p.Quantile(1e-9), 2e-9},
		{"tail of the exponential", p.Exp().LowerTail(math.Exp(0.25)), 0.125},
		{"quantile of the exponential", p.Exp().Quantile(0.25), math.Exp(0.5)},
	} {
		if math.Abs(c.got-c.want) > 1e-12*c.want {
			t.Errorf("%s is %v, want %v", c.name, c.got, c.want)
		}
	}
	checkGridExponentials(t, p)
}

func checkGridExponentials(t *testing.T, p Posterior) {
	first := (math.Expm1(1) + (math.Exp(2.5)-math.Exp(0.5))/2) / 2
	second := (math.Expm1(2)/2 + (math.Exp(5)-math.Exp(1))/4) / 2
	mean, hasMean := p.Exp().Mean()
	sd, hasSD := p.Exp().StandardDeviation()
	if want := math.Sqrt(second - first*first); !hasMean || !hasSD || math.Abs(mean-first) > 1e-14*first || math.Abs(sd-want) > 1e-14*want {
		t.Errorf("of the exponential mean %v, sd %v, want %v and %v", mean, sd, first, want)
	}
	mute := uniform{0, 1, false}.posterior()
	for name, q := range map[string]Posterior{
		"a shape that knows none":  mute.Exp(),
		"a blend with one":         Blend([]float64{0, 0}, []Posterior{mute, p}).Exp(),
		"one that stands for more": Blend([]float64{0, 0}, []Posterior{p.WithoutExponentialMoments(), p}).Exp(),
	} {
		_, hasMean := q.Mean()
		if _, hasSD := q.StandardDeviation(); hasMean || hasSD {
			t.Errorf("%s has moments", name)
		}
	}
}

// Parts that differ by hundreds of orders of magnitude give no NaN and no answer
// outside of what the parts give. The seed is fixed: no run differs from another.
func TestBlendsAtTheEndsOfTheirRange(t *testing.T) {
	random := rand.New(rand.NewPCG(11, 0))
	for round := range 2000 {
		var logs []float64
		var parts []Posterior
		for range 2 + random.IntN(5) {
			mean, sd := signed(random, logUniform(random, -100, 100)), logUniform(random, -100, 100)
			part := Normal(LevelOf(mean), sd)
			if random.IntN(4) == 0 {
				part = Student(LevelOf(mean), sd, logUniform(random, 0, 4))
			}
			logs, parts = append(logs, signed(random, logUniform(random, -2, 2.9))), append(parts, part)
		}
		p := Blend(logs, parts)
		rounding := 1e-12 * parts[slices.Index(logs, slices.Max(logs))].scale
		name := fmt.Sprintf("round %d: %v, %+v", round, logs, parts)
		for _, q := range []float64{1e-100, 1e-12, 0.3, 0.5, 0.7} {
			x := p.Quantile(q)
			low, high := math.Inf(1), math.Inf(-1)
			for i := range parts {
				at := parts[i].Quantile(q)
				low, high = math.Min(low, at), math.Max(high, at)
			}
			if !(x >= low-rounding-1e-12*math.Abs(low) && x <= high+rounding+1e-12*math.Abs(high)) {
				t.Fatalf("%s: quantile of %v at %v, outside of [%v, %v]", name, q, x, low, high)
			}
			lo, up := p.LowerTail(x), p.UpperTail(x)
			if !(math.Abs(lo+up-1) < 1e-12) {
				t.Fatalf("%s: tails %v and %v at %v", name, lo, up, x)
			}
		}
		sd, has := p.StandardDeviation()
		if has && !(sd > 0 && !math.IsInf(sd, 0)) {
			t.Fatalf("%s: sd %v", name, sd)
		}
	}
}
