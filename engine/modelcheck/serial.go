package modelcheck

import (
	"math"
	"math/cmplx"
)

// serialProbability returns P(|R| > |r|) for the lag-1 serial correlation
//
//	R = (z_1 z_2 + ... + z_{n-1} z_n) / (z_1^2 + ... + z_n^2)
//
// of n >= 16 independent standard normal scores: exact at any r, relative error 1e-9
// down to 1e-30. R is independent of its denominator, on which the chi-squared tests
// rest (Pitman 1937 for ratios that a scale doesn't change, from memory).
//
// P(R > r) is that of Q = sum (a_k - r) z_k^2 > 0 with a_k = cos(k pi / (n + 1)) the eigenvalues of
// the form above (Anderson 1971, The Statistical Analysis of Time Series, 6.5, from memory). With
// K(s) = ln E exp(s Q) it is an integral up a line in the complex plane,
//
//	P(Q > 0) = 1/(2 pi i) int_{c - i inf}^{c + i inf} exp(K(s)) / s ds,   c > 0,
//
// taken through the saddle point, where nothing cancels however small it is (Rice 1980, SIAM J.
// Sci. Stat. Comput. 1, 438-448, from memory), by the trapezoid rule. On Imhof's line c = 0 (Biometrika
// 1961) a probability of 1e-9 is a difference from 1/2.
func serialProbability(n int, r float64) float64 {
	q := serialForm{n: n, r: math.Abs(r)}
	top := math.Cos(math.Pi / float64(n+1))
	if q.r >= top {
		return 0
	}
	return math.Min(1, 2*q.tail(1/(2*(top-q.r))))
}

// serialForm is the quadratic form Q.
type serialForm struct {
	n int
	r float64
}

// tail returns P(Q > 0); K is finite from 0 to pole.
func (q serialForm) tail(pole float64) float64 {
	c := q.saddle(pole)
	height := math.Exp(-real(q.logDeterminant(complex(c, 0)))/2) / c
	if height == 0 {
		return 0 // below 1e-300
	}
	// Integrand and pole at 0 are mirrored at multiples of 2 pi / step, so the rule
	// errs by exp(-2 pi distance / step), relative to 1 at the pole.
	digits := 28 - math.Min(0, math.Log(height*c))
	step := 2 * math.Pi * math.Min(c, pole-c) / digits
	sum := height / 2
	for j := 1; j < 1<<16; j++ {
		s := complex(c, step*float64(j))
		f := cmplx.Exp(-q.logDeterminant(s)/2) / s
		sum += real(f)
		if math.Hypot(real(f), imag(f)) < 1e-13*sum {
			break
		}
	}
	return sum * step / math.Pi
}

// saddle returns the c between 0 and pole at which exp(K(c)) / c is least: K'(c) = 1/c, by
// Newton's method kept inside by bisection. A few digits suffice.
func (q serialForm) saddle(pole float64) float64 {
	lo, hi, c := 0.0, pole, pole/2
	for range 60 {
		slope, curvature := -1/c, 1/(c*c)
		for k := 1; k <= q.n; k++ {
			a := math.Cos(math.Pi*float64(k)/float64(q.n+1)) - q.r
			u := a / (1 - 2*c*a)
			slope += u
			curvature += 2 * u * u
		}
		if slope > 0 {
			hi = c
		} else {
			lo = c
		}
		next := c - slope/curvature
		if !(next > lo && next < hi) {
			next = (lo + hi) / 2
		}
		if math.Abs(next-c) < 1e-4*math.Min(c, pole-c) {
			return next
		}
		c = next
	}
	return c
}

// logDeterminant returns -2 K(s) = ln det(1 - 2 s (A - r)) for the tridiagonal A with 1/2 beside
// its diagonal, continuous on lines Re s = const between the poles: a Chebyshev
// polynomial of the second kind in d / 2s, d = 1 + 2 r s (DLMF 18.5.2), in terms of the larger root of
// x^2 - d x + s^2 and the ratio q of the smaller one to it.
func (q serialForm) logDeterminant(s complex128) complex128 {
	d := 1 + complex(2*q.r, 0)*s
	w := 2 * s / d
	root := 1 + cmplx.Sqrt(1-w*w)
	ratio := w / root
	ratio *= ratio
	n := complex(float64(q.n), 0)
	return n*(cmplx.Log(d)+cmplx.Log(root/2)) + cmplx.Log(1-cmplx.Pow(ratio, n+1)) - cmplx.Log(1-ratio)
}
