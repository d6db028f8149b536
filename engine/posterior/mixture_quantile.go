package posterior

import "math"

// quantile returns the point that cuts off the tail probability p <= 1/2 on the
// given side: the root of the logarithm of the tail, by bracketing and then the
// Illinois variant of the false position (Dowell & Jarratt 1971, BIT 11).
//
// The search goes by the distance from a centre, so that it has more digits than
// a double near the centre could have, and in t = asinh(distance / sd): where the
// tail is a power, its logarithm is a straight line in t.
func (m *mixture) quantile(p float64, s side) float64 {
	target := math.Log(p)
	c := m.component(m.median)
	centre := m.before.mean.Plus(m.difference * c.won)
	if c.won > 0.5 {
		centre = m.data.Plus(-m.difference * c.kept)
	}
	distance := func(t float64) float64 { return float64(s) * math.Sinh(t) * c.sd }
	t := zero(math.Asinh(-normalQuantile(p)), func(t float64) float64 {
		return m.logTail(m.placed(centre, distance(t)), s) - target
	})
	return centre.Plus(distance(t)).Value()
}

// mostSearched is asinh of a distance beyond all others.
const mostSearched = 690

// zero returns the zero of a falling function, searching outwards from a.
func zero(a float64, f func(float64) float64) float64 {
	fa := f(a)
	if math.Abs(fa) <= closeEnough {
		return a
	}
	step := math.Copysign(math.Max(0.1, math.Abs(a)/8), fa)
	b := a + step
	fb := f(b)
	for fa*fb > 0 && math.Abs(b) < mostSearched {
		step *= 2
		a, fa = b, fb
		b = math.Max(-mostSearched, math.Min(mostSearched, b+step))
		fb = f(b)
	}
	return falsePosition(f, a, fa, b, fb)
}

// closeEnough is how near in logarithms a tail must be to its target: what
// its own error leaves to find.
const closeEnough = 1e-13

// falsePosition returns the zero of f between a and b, where f has different
// signs. Where three steps haven't halved the interval it is bisected. A step
// below 1e-9 is followed by a last one, which leaves about its square.
func falsePosition(f func(float64) float64, a, fa, b, fb float64) float64 {
	width := math.Abs(b - a)
	for i := range 100 {
		if math.Abs(fb) <= closeEnough || math.Abs(b-a) <= 1e-14*math.Max(math.Abs(a), math.Abs(b))+1e-16 {
			return b
		}
		x := b - fb*(b-a)/(fb-fa)
		slow := false
		if i%3 == 2 {
			slow = math.Abs(b-a) > width/2
			width = math.Abs(b - a)
		}
		if slow || math.IsNaN(x) || x <= math.Min(a, b) || x >= math.Max(a, b) {
			x = a + (b-a)/2
		}
		fx := f(x)
		if last := x - fx*(x-b)/(fx-fb); math.Abs(x-b) <= 1e-9*math.Abs(x) && math.Abs(last-x) <= math.Abs(x-b) {
			return last
		}
		if (fx > 0) != (fb > 0) {
			a, fa = b, fb
		} else {
			fa /= 2
		}
		b, fb = x, fx
	}
	return b
}
