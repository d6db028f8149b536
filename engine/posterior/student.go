package posterior

import "math"

// manyDegrees is where the tail changes from the continued fraction, whose
// length grows as sqrt(dof), to the expansion about the normal, whose error
// grows as (700 / (pi dof))^17 at tails of 1e-300.
const manyDegrees = 2000

// studentTail returns P(T > t) for Student t with dof > 0 degrees of freedom.
func studentTail(t, dof float64) float64 {
	switch {
	case math.IsNaN(t):
		return math.NaN()
	case t < 0:
		return 1 - studentTail(-t, dof)
	case math.IsInf(t, 1):
		return 0
	case dof >= manyDegrees:
		return studentTailExpansion(t, dof)
	}
	return studentTailFraction(t, dof)
}

// studentTailFraction uses P = I_x(dof/2, 1/2) / 2 with x = dof / (dof + t^2),
// or 1 - I where the continued fraction is shorter for the complement (DLMF
// 8.17.4, 8.17.20 and 8.17.22; A&S 26.7.1).
func studentTailFraction(t, dof float64) float64 {
	a := dof / 2
	x, y := studentArgument(t, dof) // y = 1 - x
	front := math.Exp(-a*logGrowth(t, dof)) * math.Sqrt(y) * gammaRatio(a) / math.SqrtPi
	if x < (a+1)/(a+2.5) {
		return front / (2 * a) * betaFraction(a, 0.5, x)
	}
	return 0.5 - front*betaFraction(0.5, a, y)
}

// studentArgument returns dof / (dof + t^2) and its complement.
func studentArgument(t, dof float64) (x, y float64) {
	s := t / math.Sqrt(dof)
	if s > 1e8 {
		return 1 / s / s, 1
	}
	return 1 / (1 + s*s), s * s / (1 + s*s)
}

// logGrowth returns ln(1 + t^2 / dof), t >= 0, without overflow.
func logGrowth(t, dof float64) float64 {
	s := t / math.Sqrt(dof)
	if s > 1e8 {
		return 2 * math.Log(s) // the rest is below 1e-16
	}
	return math.Log1p(s * s)
}

// betaFraction returns the continued fraction of DLMF 8.17.22, so that
// I_x(a, b) = x^a (1 - x)^b / (a B(a, b)) times it, for x < (a+1) / (a+b+2),
// by the modified Lentz method (DLMF 3.10(iii)).
func betaFraction(a, b, x float64) float64 {
	const tiny = 1e-300
	c, d := 1.0, 1/nonzero(1-(a+b)*x/(a+1), tiny)
	h := d
	for m := 1.0; m < 10_000; m++ {
		even := m * (b - m) * x / ((a + 2*m - 1) * (a + 2*m))
		d = 1 / nonzero(1+even*d, tiny)
		c = nonzero(1+even/c, tiny)
		h *= c * d
		odd := -(a + m) * (a + b + m) * x / ((a + 2*m) * (a + 2*m + 1))
		d = 1 / nonzero(1+odd*d, tiny)
		c = nonzero(1+odd/c, tiny)
		h *= c * d
		if math.Abs(c*d-1) < 2e-16 {
			break
		}
	}
	return h
}

func nonzero(x, tiny float64) float64 {
	if math.Abs(x) < tiny {
		return tiny
	}
	return x
}

// gammaRatio returns Gamma(a + 1/2) / Gamma(a), a > 0: from a = 10 by the
// series of the logarithm in odd powers of 1/a, whose coefficients follow from
// DLMF 5.11.8 with h = 1/2 and h = 0 (first omitted term 1e-15 at a = 10).
func gammaRatio(a float64) float64 {
	if a < 10 {
		return math.Gamma(a+0.5) / math.Gamma(a)
	}
	q := 1 / (a * a)
	series := -1.0/8 + q*(1.0/192+q*(-1.0/640+q*(17.0/14336+q*(-31.0/18432+q*(691.0/180224)))))
	return math.Sqrt(a) * math.Exp(series/a)
}

// studentDensity returns the density at t (Gelman et al. 2013, table A.1).
func studentDensity(t, dof float64) float64 { return math.Exp(logStudentDensity(t, dof)) }

func logStudentDensity(t, dof float64) float64 {
	return math.Log(studentPeak(dof)) - (dof+1)/2*logGrowth(math.Abs(t), dof)
}

// studentPeak returns the density at 0.
func studentPeak(dof float64) float64 { return gammaRatio(dof/2) / math.Sqrt(dof*math.Pi) }

// tailSeries holds the power series of sqrt(2v / (1 - exp(-2v))), from the
// generating function of the Bernoulli numbers DLMF 24.2.1 by the square root
// of a series (computed with mpmath, 40 digits); it converges for v < pi.
var tailSeries = [17]float64{
	1, 0.5, 0.041666666666666666667, -0.020833333333333333333, -0.0015625,
	0.0016493055555555555556, 0.000081638558201058201058,
	-0.00014209242724867724868, -5.0356695050705467372e-6,
	0.000012716195780974426808, 3.4781818839436026936e-7,
	-1.1653267115913600289e-6, -2.5957294717612565455e-8,
	1.0855477375695997813e-7, 2.0428159321697162633e-9,
	-1.0233444362037457013e-8, -1.6691944661692560318e-10,
}

// studentTailExpansion is for many degrees of freedom. With
// w = sqrt(dof ln(1 + s^2 / dof)) in place of s the tail of the density is
//
//	P = peak * integral from w(t) of exp(-w^2 / 2) g(w^2 / (2 dof)) dw,
//	g(v) = sqrt(2v / (1 - exp(-2v))),
//
// and with the power series of g each term is an incomplete gamma function,
// M_j = integral of x^(2j) exp(-x^2 / 2), by the upward recurrence of DLMF
// 8.8.2, in which all terms are positive. Derived for this package.
func studentTailExpansion(t, dof float64) float64 {
	w2 := dof * logGrowth(t, dof)
	if w2 > 1520 {
		return 0 // below the smallest double
	}
	w := math.Sqrt(w2)
	edge := math.Exp(-w2/2) * w
	moment := math.Sqrt(2*math.Pi) * normalTail(pair{hi: w})
	sum, scale := 0.0, 1.0
	for j, c := range tailSeries {
		sum += c * scale * moment
		moment = edge + float64(2*j+1)*moment
		edge *= w2
		scale /= 2 * dof
	}
	return studentPeak(dof) * sum
}

// studentBetween returns P(a <= T <= b), width = b - a > 0.
func studentBetween(a, b, width, dof float64) float64 {
	switch {
	case studentNarrow(a, b, width, dof):
		sum := 0.0
		for i, x := range legendreNodes {
			sum += legendreWeights[i] * studentDensity(a+width*x, dof)
		}
		return sum * width
	case a > 0:
		return studentTail(a, dof) - studentTail(b, dof)
	case b < 0:
		return studentTail(-b, dof) - studentTail(-a, dof)
	}
	return 1 - (studentTail(-a, dof) + studentTail(b, dof))
}

// studentNarrow tells whether the density is all but a polynomial between a and b:
// it changes little and its poles, at +-i sqrt(dof), are far.
func studentNarrow(a, b, width, dof float64) bool {
	near := math.Min(math.Abs(a), math.Abs(b))
	if a < 0 && b > 0 {
		near = 0
	}
	slope := math.Max((dof+1)/(dof/math.Abs(a)+math.Abs(a)), (dof+1)/(dof/math.Abs(b)+math.Abs(b)))
	return width < 0.25*math.Hypot(near, math.Sqrt(dof)) && width*math.Max(slope, 0.5) < 1
}

// studentQuantile returns the t >= 0 with P(T > t) = p, 0 < p <= 1/2.
//
// It starts from the smaller of Wallace's (1959) normal approximation, turned
// round, and the power law that bounds the tail from above, and goes on by
// Halley's steps (DLMF 3.8(v)): of ln P against ln t in the tail, where that curve is
// concave, of P against t near the centre, where it is convex, so that Newton's
// step, taken where Halley's is out of its depth, closes in from one side.
func studentQuantile(p, dof float64) float64 {
	if p >= 0.5 {
		return 0
	}
	t := studentStart(p, dof)
	for range 60 {
		next := studentStep(t, p, dof)
		if math.IsNaN(next) || math.IsInf(next, 0) || next < 0 {
			next = t / 2 // beyond the doubles: come back
		}
		step := math.Abs(next - t)
		t = next
		if step <= 1e-5*t { // leaves its cube
			break
		}
	}
	return t
}

// studentStep returns the next approximation.
func studentStep(t, p, dof float64) float64 {
	tail := studentTail(t, dof)
	bend := (dof + 1) / (dof/t + t) // -f'/f
	if p >= 0.2 {
		newton := (tail - p) / studentDensity(t, dof)
		return t + newton/halley(-newton*bend/2)
	}
	// t times the hazard: the density alone can underflow
	slope := t * math.Exp(logStudentDensity(t, dof)-math.Log(tail))
	newton := math.Log(tail/p) / slope
	return t * math.Exp(newton/halley(newton*(1-t*bend+slope)/2))
}

// halley returns the divisor of Newton's step for a correction c, 1 if that is
// not small.
func halley(c float64) float64 {
	if math.Abs(c) < 0.5 {
		return 1 + c
	}
	return 1
}

// studentStart is within some per cent of the quantile but for few degrees of
// freedom.
func studentStart(p, dof float64) float64 {
	w := -normalQuantile(p) * (8*dof + 3) / (8*dof + 1)
	wallace := math.Sqrt(dof * math.Expm1(w*w/dof))
	// P < peak * integral of (s^2 / dof)^(-(dof+1)/2) = peak * dof^((dof-1)/2) t^-dof
	bound := math.Exp((math.Log(studentPeak(dof)/p) + (dof-1)/2*math.Log(dof)) / dof)
	return math.Min(wallace, bound)
}
