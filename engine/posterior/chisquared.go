package posterior

import (
	"math"

	"gonum.org/v1/gonum/mathext"
)

// chiSquaredUpper returns the x that a chi-squared variable with dof degrees of
// freedom exceeds with probability p in (0, 1), dof > 0; relative error about
// 1e-12. Halley's iteration on the incomplete gamma function (DLMF 8.2.4) from
// the cube-root approximation of Wilson and Hilferty (1931). gonum's inverse
// wants the last bit and falls back to hundreds of bisections for it.
func chiSquaredUpper(p, dof float64) float64 {
	a := dof / 2
	lgamma, _ := math.Lgamma(a)
	x := chiSquaredStart(p, a)
	lo, hi := 0.0, math.Inf(1)
	for range 100 {
		excess := mathext.GammaIncRegComp(a, x) - p
		if excess > 0 {
			lo = x
		} else {
			hi = x
		}
		slope := -math.Exp((a-1)*math.Log(x) - x - lgamma)
		u := excess / slope
		next := x - u/(1-math.Max(-0.5, math.Min(0.5, u*((a-1)/x-1)/2)))
		if !(next > lo && next < hi) {
			next = between(lo, hi)
		}
		if math.Abs(next-x) <= 1e-13*x {
			return 2 * next
		}
		x = next
	}
	return 2 * x
}

// chiSquaredStart is half a chi-squared quantile, roughly; a is dof / 2. Where
// the cube would be near 0, the head of the distribution is
// P(X < x) = x^a / Gamma(a + 1) (DLMF 8.7.1).
func chiSquaredStart(p, a float64) float64 {
	d := 1 / (9 * a)
	if y := 1 - d - normalQuantile(p)*math.Sqrt(d); y > 0.3 {
		return a * y * y * y
	}
	lgamma, _ := math.Lgamma(a + 1)
	return math.Max(math.Exp((math.Log1p(-p)+lgamma)/a), math.SmallestNonzeroFloat64)
}

// between bisects, on the logarithmic scale where it can.
func between(lo, hi float64) float64 {
	switch {
	case math.IsInf(hi, 1):
		return 2*lo + 1
	case lo == 0:
		return hi / 16
	}
	return math.Sqrt(lo) * math.Sqrt(hi)
}
