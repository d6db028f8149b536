package modelcheck

import "math"

// Nodes and weights of the 8-point Gauss-Legendre rule on [0, 1] (DLMF 3.5(v)),
// by symmetry the lower half: node i and 1 - node i have weight i.
var (
	legendreNodes   = [4]float64{0.019855071751231884158, 0.1016667612931866302, 0.23723379504183550709, 0.40828267875217509753}
	legendreWeights = [4]float64{0.050614268145188129576, 0.11119051722668723527, 0.15685332293894364367, 0.18134189168918099148}
)

// upperTail returns P(Z > z) for a standard normal Z (DLMF 7.2.2).
func upperTail(z float64) float64 { return math.Erfc(z/math.Sqrt2) / 2 }

// density is that of a standard normal.
func density(z float64) float64 { return math.Exp(-z*z/2) / math.Sqrt(2*math.Pi) }

// normalBetween returns P(a < Z < b) for a standard normal Z and a <= b; relative error
// 1e-13 where a or b is within 3 of 0.
func normalBetween(a, b float64) float64 {
	if -a > b {
		a, b = -b, -a
	}
	switch {
	case narrow(a, b):
		mass, _, _ := narrowMoments(a, b-a)
		return mass * density(a)
	case a > 0:
		return upperTail(a) - upperTail(b)
	}
	return 1 - (upperTail(-a) + upperTail(b))
}

// truncatedMoments returns the means of Z and of Z^2 for a standard normal Z known to lie
// between a and b, a < b, of magnitude 38 at most:
//
//	E Z   = (f(a) - f(b)) / P
//	E Z^2 = 1 + (a f(a) - b f(b)) / P
//
// with f the density and P = P(a < Z < b) (Johnson, Kotz & Balakrishnan 1994, 13.10.1,
// from memory). In a tail all is divided by f(a), so that Mills' ratios stand for
// probabilities and nothing underflows. Relative error 1e-12; of E Z where a = -b nearly,
// the same of max(|a|, 1).
func truncatedMoments(a, b float64) (mean, square float64) {
	if -a > b {
		mean, square = truncatedMoments(-b, -a)
		return -mean, square
	}
	switch {
	case narrow(a, b):
		mass, first, second := narrowMoments(a, b-a)
		first /= mass
		return a + first, a*a + 2*a*first + second/mass
	case a > 0:
		fall := math.Exp(-(b - a) * (b + a) / 2)
		mass := mills(a) - fall*mills(b)
		return (1 - fall) / mass, 1 + (a-b*fall)/mass
	}
	mass := normalBetween(a, b)
	return (density(a) - density(b)) / mass, 1 + (a*density(a)-b*density(b))/mass
}

// narrow tells whether the density changes so little from a to b, |a| <= b, that
// the quadrature below is exact; else differences of tails keep their digits.
func narrow(a, b float64) bool { return (b-a)*math.Max(1, b) < 1 }

// narrowMoments returns the integrals of 1, d and d^2 against f(a + d) / f(a) over
// 0 < d < width, f being the standard normal density.
func narrowMoments(a, width float64) (mass, first, second float64) {
	for i, x := range legendreNodes {
		w := legendreWeights[i] * width
		for _, d := range [2]float64{width * x, width * (1 - x)} {
			p := w * math.Exp(-d*(a+d/2))
			mass += p
			first += p * d
			second += p * d * d
		}
	}
	return mass, first, second
}

// mills returns P(Z > a) / f(a) for a standard normal Z of density f and a >= 0; relative
// error 1e-14. Beyond 4 by Laplace's continued fraction (DLMF 7.9.1).
func mills(a float64) float64 {
	if a < 4 {
		return upperTail(a) / density(a)
	}
	tail := a
	for k := 40.0; k > 0; k-- {
		tail = a + k/tail
	}
	return 1 / tail
}
