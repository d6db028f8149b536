package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

func TestExponentialsAgainstReference(t *testing.T) {
	for _, c := range blendCases(t) {
		t.Run(c.Name, func(t *testing.T) {
			p := c.build()
			e := p.Exp()
			for _, r := range c.ExponentialTails {
				x := float64(r[0])
				nearTail(t, fmt.Sprint("lower tail at ", x), e.LowerTail(x), float64(r[1]), 1e-11)
				nearTail(t, fmt.Sprint("upper tail at ", x), e.UpperTail(x), float64(r[2]), 1e-11)
			}
			for _, r := range c.Quantiles {
				if x := float64(r[1]); math.Abs(x) < 600 {
					near(t, fmt.Sprint("quantile of ", r[0]), e.Quantile(float64(r[0])), math.Exp(x), 1e-12*math.Max(1, math.Abs(x)))
				}
			}
			mean, hasMean := e.Mean()
			sd, hasSD := e.StandardDeviation()
			switch {
			case c.ExponentialMean == nil:
			case *c.ExponentialMean == "":
				if hasMean || hasSD {
					t.Errorf("mean %v, sd %v, want none", mean, sd)
				}
			default:
				near(t, "mean", mean, number(t, *c.ExponentialMean), 1e-13)
				near(t, "sd", sd, number(t, c.ExponentialSD), 1e-12)
			}
		})
	}
}

// Of a lognormal from nearly normal to where only quantiles are left; the integral
// of x^k over its density is summed over equidistant points of z = (ln x - m) / s.
func TestLognormalMoments(t *testing.T) {
	for _, c := range []struct{ m, s float64 }{{0.5, 1e-8}, {-3, 0.01}, {2, 0.7}, {-300, 3}, {400, 1}, {0, 9}} {
		var mean, variance float64
		root := func(z float64) float64 { return math.Exp(-z*z/4) / math.Sqrt(math.Sqrt(2*math.Pi)) } // of the density
		const step = 0.02
		for z := -40.0; z < 40; z += step {
			mean += step * math.Exp(c.s*z) * root(z) * root(z)
		}
		for z := -40.0; z < 40; z += step {
			d := math.Expm1(c.s*z) - (mean - 1)
			if c.s < 1e-3 {
				d = math.Expm1(c.s * z) // less the square of s^2 / 2
			}
			d *= root(z)
			variance += step * d * d
		}
		e := posterior.Normal(posterior.LevelOf(c.m), c.s).Exp()
		name := fmt.Sprintf("ln X of N(%v, %v^2): ", c.m, c.s)
		got, _ := e.Mean()
		near(t, name+"mean", got, math.Exp(c.m)*mean, 1e-12)
		got, _ = e.StandardDeviation()
		near(t, name+"sd", got, math.Exp(c.m)*math.Sqrt(variance), 1e-9)
		got, _ = e.GeometricMean()
		near(t, name+"geometric mean", got, math.Exp(c.m), 1e-15)
		got, _ = e.GeometricStandardDeviation()
		near(t, name+"geometric sd", got, math.Exp(c.s), 1e-15)
	}
}

// What exceeds the doubles, and what doesn't exist, is absent.
func TestAbsentExponentialMoments(t *testing.T) {
	normal := func(m, s float64) posterior.Posterior { return posterior.Normal(posterior.LevelOf(m), s) }
	learned := learnedAll([]float64{4.1, 4.4, 3.9}).Posterior(posterior.Prior{Mean: 4, SD: 0.2}, learnedNoise(0.3, 2))
	far := posterior.Blend([]float64{0, -1}, []posterior.Posterior{normal(0, 1), normal(0, 40)})
	for _, c := range []struct {
		name                     string
		p                        posterior.Posterior
		mean, sd, geometricMean  bool
		geometricSD, logarithmic bool
	}{
		{name: "nothing", p: posterior.Posterior{}.Exp(), logarithmic: true},
		{name: "normal, not of a logarithm", p: normal(0, 1), mean: true, sd: true},
		{name: "normal", p: normal(0, 1).Exp(), mean: true, sd: true, geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "twice", p: normal(0, 1).Exp().Exp(), mean: true, sd: true, geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "sd too large", p: normal(0, 30).Exp(), mean: true, geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "mean too large", p: normal(0, 40).Exp(), geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "all too large", p: normal(1000, 1000).Exp(), logarithmic: true},
		{name: "a part too large", p: far.Exp(), geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "learned", p: learned.Exp(), geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "stands for learned", p: normal(0, 1).WithoutExponentialMoments().Exp(), geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "student 3", p: posterior.Student(posterior.Level{}, 1, 3).Exp(), geometricMean: true, geometricSD: true, logarithmic: true},
		{name: "student 2", p: posterior.Student(posterior.Level{}, 1, 2).Exp(), geometricMean: true, logarithmic: true},
		{name: "student 1", p: posterior.Student(posterior.Level{}, 1, 1).Exp(), logarithmic: true},
	} {
		check := func(what string, want bool, x float64, has bool) {
			if has != want || has == math.IsNaN(x) || math.IsInf(x, 0) {
				t.Errorf("%s: %s is %v, %v", c.name, what, x, has)
			}
		}
		x, has := c.p.Mean()
		check("mean", c.mean, x, has)
		x, has = c.p.StandardDeviation()
		check("sd", c.sd, x, has)
		x, has = c.p.GeometricMean()
		check("geometric mean", c.geometricMean, x, has)
		x, has = c.p.GeometricStandardDeviation()
		check("geometric sd", c.geometricSD, x, has)
		if c.p.Logarithmic() != c.logarithmic {
			t.Errorf("%s: logarithmic is %v", c.name, c.p.Logarithmic())
		}
	}
}

// Whatever the form, the exponential says of exp(x) what the belief says of x.
func TestExponentialsAnswerForTheLogarithm(t *testing.T) {
	random := source(t)
	for name, p := range beliefs(t) {
		if x, y := p.Quantile(1e-9), p.Quantile(1-1e-9); !(x > -300 && y < 300) {
			continue
		}
		e := p.Exp()
		if e.Form() != p.Form() || e.Logarithm() != p || e.Location() != p.Location() {
			t.Errorf("%s: %+v", name, e)
		}
		for range 20 {
			q, r := random.Float64(), random.Float64()
			x, y := p.Quantile(min(q, r)), p.Quantile(max(q, r))
			if !(y-x > 1e-6) {
				continue
			}
			lo, hi := math.Exp(x), math.Exp(y)
			near(t, name+" quantile", e.Quantile(min(q, r)), lo, 1e-13)
			rounding := p.Between(x-1e-15*(1+math.Abs(x)), x+1e-15*(1+math.Abs(x)))
			within(t, name+" lower tail", e.LowerTail(lo), p.LowerTail(x), rounding+1e-15)
			within(t, name+" upper tail", e.UpperTail(lo), p.UpperTail(x), rounding+1e-15)
			within(t, name+" between", e.Between(lo, hi)+e.UpperTail(hi), e.UpperTail(lo), 1e-12)
		}
		lo, hi := e.Interval(0.9)
		near(t, name+" interval", lo, e.Quantile(0.05), 1e-13)
		near(t, name+" interval", hi, e.Quantile(0.95), 1e-13)
	}
}

func TestEndsOfALogarithmicScale(t *testing.T) {
	p := posterior.Normal(posterior.LevelOf(-1), 0.5)
	for name, e := range map[string]posterior.Posterior{
		"normal": p.Exp(), "student": posterior.Student(posterior.LevelOf(-1), 0.5, 3).Exp(),
		"blend":   posterior.Blend([]float64{0, 0}, []posterior.Posterior{p.Exp(), posterior.Student(posterior.LevelOf(0), 0.5, 3).Exp()}),
		"learned": learnedAll([]float64{-1.1, -1.4}).Posterior(posterior.Prior{Mean: -1, SD: 0.2}, learnedNoise(0.3, 2)).Exp(),
	} {
		for _, c := range []struct {
			what      string
			got, want float64
		}{
			{"lower tail at 0", e.LowerTail(0), 0}, {"upper tail at 0", e.UpperTail(0), 1},
			{"lower tail at -3", e.LowerTail(-3), 0}, {"upper tail at -3", e.UpperTail(-3), 1},
			{"lower tail at infinity", e.LowerTail(math.Inf(1)), 1}, {"upper tail at infinity", e.UpperTail(math.Inf(1)), 0},
			{"quantile of 0", e.Quantile(0), 0}, {"quantile of 1", e.Quantile(1), math.Inf(1)},
			{"between negative points", e.Between(-3, -1), 0}, {"up to 0", e.Between(-3, 0), 0},
			{"from below 0", e.Between(-3, 0.5), e.LowerTail(0.5)}, {"from 0 on", e.Between(0, math.Inf(1)), 1},
		} {
			if !(math.Abs(c.got-c.want) <= 1e-14) && c.got != c.want {
				t.Errorf("%s: %s is %v, want %v", name, c.what, c.got, c.want)
			}
		}
		if x := e.LowerTail(math.NaN()); !math.IsNaN(x) {
			t.Errorf("%s: lower tail at NaN is %v", name, x)
		}
	}
}

// A gap of a millionth of a millionth of x, in a tail: its width over x times the density.
func TestNarrowGapOnALogarithmicScale(t *testing.T) {
	p := posterior.Normal(posterior.LevelOf(2), 0.5)
	q := posterior.Blend([]float64{0, 0}, []posterior.Posterior{p, posterior.Normal(posterior.LevelOf(2), 0.5)})
	for _, x := range []float64{8, 300, 1e4} {
		z := (math.Log(x) - 2) / 0.5
		hi := x * (1 + 1e-12)
		want := (hi - x) / x * math.Exp(-z*z/2) / math.Sqrt(2*math.Pi) / 0.5
		near(t, fmt.Sprint("normal at ", x), p.Exp().Between(x, hi), want, 1e-10)
		near(t, fmt.Sprint("blend at ", x), q.Exp().Between(x, hi), want, 1e-10)
	}
}

// The logarithm of x has digits beyond those of a double: the belief in ln x is so
// sharp here that 1e-20 of it is half a standard deviation. ln x is found by a step of
// Newton's from the double, with the exponential in 96 digits.
func TestLogarithmsHaveMoreDigits(t *testing.T) {
	random := source(t)
	for i := range 400 {
		x := math.Exp(200 * random.NormFloat64())
		switch i % 4 {
		case 1:
			x = 1 + random.NormFloat64()*1e-3
		case 2:
			x = 1 + 0.2*random.NormFloat64()
		}
		y := math.Log(x)
		e := div(num(1), decay(num(math.Abs(y)))) // exp |y|
		if y > 0 {
			e = div(num(1), e)
		}
		d, _ := sub(mul(num(x), e), num(1)).Float64() // x exp(-y) - 1
		sd := 2e-20 * math.Abs(y)
		p := posterior.Normal(posterior.Level{Hi: y, Lo: d - d*d/2}, sd).Exp()
		within(t, fmt.Sprint("upper tail at the median ", x), p.UpperTail(x), 0.5, 0.05)
	}
}
