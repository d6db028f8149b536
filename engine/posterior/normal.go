package posterior

import (
	"math"

	"gonum.org/v1/gonum/mathext"
)

// sqrtHalf is 1/sqrt(2) to 32 digits.
var sqrtHalf = pair{0.7071067811865476, -4.833646656726457e-17}

// normalTail returns P(Z > z) = erfc(z / sqrt(2)) / 2 for a standard normal Z
// (DLMF 7.2.2 and 7.18.12 notation; JCGM 106:2012, A.3).
//
// erfc amplifies a relative error of its argument a by 2 a^2, some 1e3 at
// 1e-300; so a is carried to twice the digits and what a double can't hold is
// added by the derivative
//
//	d ln erfc / da = -2 exp(-a^2) / (sqrt(pi) erfc(a)),
//
// between -(a + sqrt(a^2 + 2)) and -(a + sqrt(a^2 + 4/pi)) for a > 0 (DLMF
// 7.8.2); any value between serves, as it multiplies 1e-16.
func normalTail(z pair) float64 {
	if z.hi > 39 {
		return 0 // below the smallest double
	}
	if z.hi < 1 {
		return math.Erfc(z.hi*sqrtHalf.hi) / 2
	}
	a := z.times(sqrtHalf.hi)
	a = quickSum(a.hi, a.lo+z.hi*sqrtHalf.lo)
	p := math.Erfc(a.hi) / 2
	return p - p*a.lo*(a.hi+math.Sqrt(a.hi*a.hi+1.6))
}

// logNormalTail returns ln P(Z > z), finite for every finite z whose square is.
// Beyond 37 by the asymptotic series DLMF 7.12.1, whose next term is 1e-13.
func logNormalTail(z float64) float64 {
	if z < 37 {
		return math.Log(math.Erfc(z*sqrtHalf.hi) / 2)
	}
	q := 1 / (z * z)
	return -z*z/2 - math.Log(z*math.Sqrt(2*math.Pi)) + math.Log1p(-q*(1-3*q*(1-5*q*(1-7*q))))
}

// normalQuantile returns the z with P(Z < z) = p for 0 < p <= 1/2, by Wichura
// (1988), Applied Statistics 37, algorithm AS 241.
func normalQuantile(p float64) float64 { return mathext.NormalQuantile(p) }

// logNormalDensity is the logarithm of the standard normal density without its
// constant.
func logNormalDensity(z float64) float64 { return -z * z / 2 }

// normalBetween returns P(a <= Z <= b), width = b - a > 0.
func normalBetween(a, b pair, width float64) float64 {
	switch {
	case narrow(a.hi, b.hi, width):
		return width * meanNormalDensity(a.hi, width)
	case a.hi > 0:
		return normalTail(a) - normalTail(b)
	case b.hi < 0:
		return normalTail(b.negative()) - normalTail(a.negative())
	}
	return 1 - (normalTail(a.negative()) + normalTail(b))
}

// narrow tells whether the density hardly changes between a and b, so that
// integrating it is better than subtracting tails.
func narrow(a, b, width float64) bool {
	return width*math.Max(1, math.Max(math.Abs(a), math.Abs(b))) < 1
}

// meanNormalDensity averages the standard normal density over [a, a + width].
func meanNormalDensity(a, width float64) float64 {
	sum := 0.0
	for i, x := range legendreNodes {
		sum += legendreWeights[i] * math.Exp(logNormalDensity(a+width*x))
	}
	return sum / math.Sqrt(2*math.Pi)
}

// logNormalBetween returns ln P(a <= Z <= b), width = b - a > 0.
func logNormalBetween(a, b, width float64) float64 {
	switch {
	case narrow(a, b, width):
		sum := 0.0
		for i, x := range legendreNodes {
			d := width * x
			sum += legendreWeights[i] * math.Exp(-d*(a+d/2))
		}
		return logNormalDensity(a) + math.Log(width*sum/math.Sqrt(2*math.Pi))
	case b < 0:
		return logNormalBetween(-b, -a, width)
	case a > 0:
		top := logNormalTail(a)
		if math.IsInf(top, -1) {
			return top
		}
		return top + math.Log1p(-math.Exp(logNormalTail(b)-top))
	}
	return math.Log1p(-(normalTail(pair{hi: -a}) + normalTail(pair{hi: b})))
}

// Standard returns (x - mean) / standard deviation of a normal distribution; NaN of
// others. Relative error 1e-15, however large x is beside the standard deviation.
func (p Posterior) Standard(x float64) float64 {
	if p.form != FormNormal {
		return math.NaN()
	}
	return p.standard(pair{hi: x}).value()
}
