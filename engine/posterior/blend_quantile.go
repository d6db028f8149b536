package posterior

import "math"

// quantile returns the point that cuts off the tail probability p <= 1/2 on the
// given side: to 1e-12 of the width of what is there, or to rounding. Whatever the
// weights, it lies between the smallest and the largest of the parts' quantiles,
// where every part's tail is at least, or at most, p.
func (b *blend) quantile(p float64, s side) float64 {
	h := &b.parts[b.heaviest()]
	r := search{blend: b, side: s, centre: h.location, width: h.width(), target: normalQuantile(p)}
	near, far := h.quantile(p, s), h.quantile(p, s)
	for i := range b.parts {
		x := b.parts[i].at(-float64(s) * r.target)
		if !b.normals {
			x = b.parts[i].quantile(p, s)
		}
		switch d := float64(s); {
		case d*x.Minus(near) < 0:
			near = x
		case d*x.Minus(far) > 0:
			far = x
		}
	}
	return r.root(near, far).Value()
}

// width is a length over which X spreads, whether or not it has a standard deviation.
func (p Posterior) width() float64 {
	if p.scale > 0 { // neither NaN nor absent
		return p.scale
	}
	return p.quantile(0.25, upper).Minus(p.quantile(0.25, lower))
}

// search looks for a quantile.
type search struct {
	*blend
	side
	centre Level
	width  float64
	target float64 // normal quantile of the tail
}

// excess returns by how much the tail beyond x exceeds the target, both as normal
// quantiles: a straight line if the blend is all but normal.
func (r *search) excess(x Level) float64 {
	p := r.tailAt(x.pair(), r.side)
	if p > 0.5 {
		return -normalQuantile(math.Max(0, 1-p)) - r.target
	}
	return normalQuantile(p) - r.target
}

// root returns the quantile, which lies between a and b. It is found by the false
// position as modified by Anderson & Björck (1973, BIT 13, 253-264, from memory),
// halving where five steps have made less than three quarters of the way: parts that
// are narrow and far apart leave plateaus with steps between.
func (r *search) root(a, b Level) Level {
	fa, fb := r.excess(a), r.excess(b)
	if !(fa > 0) { // the parts agree but for rounding
		return a
	}
	way := r.way(a, b)
	enough := math.Max(closeEnough/math.Max(1, -r.target), -0x1p-51*r.target)
	for i := range 200 {
		if math.Abs(fb) <= enough || math.Abs(b.Minus(a)) <= 0x1p-56*math.Abs(b.Value()) {
			break
		}
		part := fb / (fb - fa)
		if i%5 == 4 {
			now := r.way(a, b)
			if now > way/4 {
				part = 0.5
			}
			way = now
		}
		x := r.step(b, a, part)
		fx := r.excess(x)
		if (fx > 0) != (fb > 0) {
			a, fa = b, fb
		} else if m := 1 - fx/fb; m > 0 {
			fa *= m
		} else {
			fa /= 2
		}
		b, fb = x, fx
	}
	return b
}

// way returns the distance of a and b as the long steps see it.
func (r *search) way(a, b Level) float64 { return math.Abs(r.bent(a) - r.bent(b)) }

// step goes the given part of the way from a to b, half of it if that is no number.
// A long way it goes by t = asinh(distance / width), the distance being that from
// the heaviest part: in t orders of magnitude are equal steps.
func (r *search) step(a, b Level, part float64) Level {
	if !(part > 0 && part < 1) {
		part = 0.5
	}
	d := b.Minus(a)
	if math.Abs(d) < 0.1*math.Max(r.width, math.Abs(a.Minus(r.centre))) {
		return a.Plus(part * d)
	}
	t := r.bent(a)
	return r.centre.Plus(r.unbent(t + part*(r.bent(b)-t)))
}

func (r *search) bent(x Level) float64 {
	d := x.Minus(r.centre)
	if y := d / r.width; math.Abs(y) < 1e150 {
		return math.Asinh(y)
	}
	return math.Copysign(math.Log(math.Abs(d))-math.Log(r.width)+math.Ln2, d) // y may be out of range
}

// unbent returns the distance at t.
func (r *search) unbent(t float64) float64 {
	if math.Abs(t) < 345 {
		return r.width * math.Sinh(t)
	}
	return math.Copysign(math.Exp(math.Abs(t)+math.Log(r.width)-math.Ln2), t)
}
