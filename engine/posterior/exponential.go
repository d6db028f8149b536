package posterior

import "math"

// exponentials is a shape that knows mean and standard deviation of exp(X), if they
// exist.
type exponentials interface {
	exponentialMoments() (mean, sd float64, ok bool)
}

// Exp returns the distribution of exp(X) where p is that of X: that of a quantity
// held on a logarithmic scale. All of its methods answer for exp(X), but Location,
// Scale and DegreesOfFreedom, which remain those of X. If p is normal so that
// exp(X) is lognormal,
//
//	mean = exp(m + s^2/2),  standard deviation = mean sqrt(exp(s^2) - 1)
//
// (Johnson, Kotz & Balakrishnan 1994, Continuous Univariate Distributions vol. 1,
// chapter 14, from memory); of a Blend the parts' are summed. They are absent
// where they don't exist, as if X is Student t or a mixture over a learned r, whose
// tails fall more slowly than exponentially, and where they exceed the doubles.
// The exponential of what is on a logarithmic scale already is that itself.
func (p Posterior) Exp() Posterior {
	p.logarithmic = true
	return p
}

// Logarithmic tells whether the distribution is one that Exp made.
func (p Posterior) Logarithmic() bool { return p.logarithmic }

// Logarithm returns the distribution of X where p is that of exp(X), as Exp made
// it; one that is on no logarithmic scale is returned as it is.
func (p Posterior) Logarithm() Posterior {
	p.logarithmic = false
	return p
}

// WithoutExponentialMoments returns p, of which Exp then says that exp(X) has no
// moments. A blend of normals that stands for the integral over a learned r is
// such: E exp(s^2/2) diverges under the inverse chi-squared tail of r^2, though
// not over any finite number of normals. It holds for a Blend of such parts also.
func (p Posterior) WithoutExponentialMoments() Posterior {
	p.momentless = true
	return p
}

// GeometricMean returns exp(E X), and whether it exists; NaN and false if p is on
// no logarithmic scale.
func (p Posterior) GeometricMean() (float64, bool) {
	mean, has := p.mean()
	return existing(p.value(mean), has && p.logarithmic)
}

// GeometricStandardDeviation returns the exponential of the standard deviation of
// X, at least 1 and without unit, and whether it exists; NaN and false if p is on
// no logarithmic scale.
func (p Posterior) GeometricStandardDeviation() (float64, bool) {
	sd, has := p.sd()
	return existing(math.Exp(sd), has && p.logarithmic)
}

func (p Posterior) exponentialMean() (float64, bool) {
	mean, _ := p.exponentialMoments()
	return existing(mean, true)
}

func (p Posterior) exponentialSD() (float64, bool) {
	_, sd := p.exponentialMoments()
	return existing(sd, true)
}

// existing returns x if it is there and finite.
func existing(x float64, has bool) (float64, bool) {
	if has && isFinite(x) {
		return x, true
	}
	return math.NaN(), false
}

// isFinite tells whether x is a number.
func isFinite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

// exponentialMoments returns mean and standard deviation of exp(X), NaN or infinite
// where they are absent.
func (p Posterior) exponentialMoments() (mean, sd float64) {
	e, knows := p.shape.(exponentials)
	switch {
	case p.momentless:
		return math.NaN(), math.NaN()
	case p.form == FormNormal:
		return lognormal(p.location, p.scale)
	case knows:
		if mean, sd, ok := e.exponentialMoments(); ok {
			return mean, sd
		}
	}
	return math.NaN(), math.NaN()
}

// lognormal returns mean and standard deviation of exp(X), X ~ N(m, s^2). With
// exp(s^2) - 1 = exp(s^2) (1 - exp(-s^2)) nothing overflows that the result doesn't.
func lognormal(m Level, s float64) (mean, sd float64) {
	v := s * s
	return exponential(m.Plus(v / 2)), exponential(m.Plus(v)) * math.Sqrt(-math.Expm1(-v))
}

// value returns a point of X as one of the scale.
func (p Posterior) value(x Level) float64 {
	if p.logarithmic {
		return exponential(x)
	}
	return x.Value()
}

// exponential returns exp(x).
func exponential(x Level) float64 {
	if math.IsInf(x.Hi, 0) {
		return math.Exp(x.Hi)
	}
	return math.Exp(x.Hi) * (1 + x.Lo)
}

// point returns a point of the scale as one of X.
func (p Posterior) point(x float64) pair {
	if p.logarithmic {
		return logarithm(x)
	}
	return pair{hi: x}
}

// breadth returns the distance of lo and hi, lo < hi, in X.
func (p Posterior) breadth(lo, hi float64) float64 {
	switch {
	case !p.logarithmic:
		return hi - lo
	case lo <= 0:
		return math.Inf(1)
	case hi-lo < lo:
		return math.Log1p((hi - lo) / lo)
	}
	return math.Log(hi) - math.Log(lo)
}

// ln2 is the natural logarithm of 2 to 32 digits (computed with mpmath).
var ln2 = pair{0.6931471805599453, 2.3190468138462996e-17}

// oddReciprocals holds 1/3, 1/5 and 1/7 to 32 digits.
var oddReciprocals = [3]pair{
	{0.3333333333333333, 1.850371707708594e-17},
	{0.2, -1.1102230246251566e-17},
	{0.14285714285714285, 7.93016446160826e-18},
}

// logarithm returns ln x with a relative error of some 1e-21, -Inf for x <= 0: a
// tail amplifies what a double would lose, |ln x| / s units of its last place. With
// x = 2^k f, f within a factor sqrt(2) of 1, and s = (f - 1) / (f + 1), of which
// s^2 < 0.03,
//
//	ln f = 2 atanh s = 2 s (1 + s^2/3 + s^4/5 + ...)
//
// (DLMF 4.6.4), the terms from s^8 on in plain doubles.
func logarithm(x float64) pair {
	switch {
	case x <= 0:
		return pair{hi: math.Inf(-1)}
	case math.IsNaN(x) || math.IsInf(x, 1):
		return pair{hi: x}
	}
	f, k := math.Frexp(x)
	if f < sqrtHalf.hi {
		f, k = 2*f, k-1
	}
	s := pair{hi: f - 1}.ratio(twoSum(f, 1))
	q := s.squared()
	rest := 0.0
	for n := 27.0; n >= 9; n -= 2 {
		rest = rest*q.hi + 1/n
	}
	sum := pair{hi: rest}
	for i := range oddReciprocals {
		sum = q.product(sum).plus(oddReciprocals[len(oddReciprocals)-1-i])
	}
	sum = q.product(sum).plus(pair{hi: 1})
	return s.product(sum).times(2).plus(ln2.times(float64(k)))
}

// product multiplies, relative error about 2^-102.
func (p pair) product(q pair) pair {
	t := twoProd(p.hi, q.hi)
	return quickSum(t.hi, t.lo+(p.hi*q.lo+p.lo*q.hi))
}
