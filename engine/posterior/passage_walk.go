package posterior

import "math"

// Let a level start at distance x > 0 from the lower limit and a = L - x from
// the upper one, with drift v ~ N(mu, tau^2) and a walk of variance sigma^2 a
// second. In units of w = sigma sqrt(T) (so x, L and h are lengths over w,
// V = v T / w ~ N(nu, kappa^2)) the lower limit is the first crossed by T with
// probability
//
//	sum over n >= 0 of G(x + 2 n L) - sum over n >= 1 of G(2 n L - x),
//	G(h) = E[exp(-V (x + h)) Phi(V - h) + exp(V (h - x)) Phi(-V - h)],
//
// by the method of images and Girsanov's factor (Cox & Miller 1965, The Theory of
// Stochastic Processes, 5.7; Borodin & Salminen 2002, Handbook of Brownian
// Motion, 2.3.0; from memory). With one limit G(x) alone is left: the
// Bachelier-Levy formula, the inverse Gaussian law with its defect; with V = 0
// the reflection principle 2 Phi(-x).
//
// The expectation over V tilts a normal: with R^2 = 1 + kappa^2,
//
//	E[exp(c V) Phi(e V - h)] = exp(c nu + c^2 kappa^2 / 2) Phi(-z),
//	z = (h - e (nu + c kappa^2)) / R,  e = 1 or -1.
//
// For z > 0 the factors would overflow and vanish. Their product has
//
//	exp(-(h^2 - x^2)/2 - (x + nu)^2 / (2 R^2)) erfcx(z / sqrt 2) / 2
//
// for both terms of G (completing the square; derived here), which shows too
// that images farther than some 9 w don't matter, whatever the drift.

// longest is the w / L beyond which no path is left inside: survival is below
// exp(-pi^2/2 (w/L)^2 + (L/w)^2 / 2), here 2e-17 (the first eigenfunction).
const longest = 2.8

// outermost bounds the images: exp(-outermost) is 3e-20.
const outermost = 45

// drifting is the law of crossings of a level that starts at a known point with
// normal drift, at one time.
type drifting struct {
	w     float64 // sigma sqrt(T) in the quantity's unit, > 0
	kappa float64 // tau T / w
	width float64 // L / w, or infinite
}

// below returns the probability that the lower limit is crossed first, from x
// above it with mean drift nu, both over w; and the size of its largest term.
func (d drifting) below(x, nu float64) (p, size float64) {
	size = d.image(x, x, nu)
	sum := size
	if math.IsInf(d.width, 1) {
		return sum, size
	}
	for n := 1.0; ; n++ {
		near := 2*n*d.width - x
		if !((near-x)*(near+x)/2 <= outermost) {
			return math.Max(0, sum), size
		}
		sum += d.image(x, x+2*n*d.width, nu) - d.image(x, near, nu)
	}
}

// image is G(h).
func (d drifting) image(x, h, nu float64) float64 {
	k := d.kappa * d.kappa
	r := math.Sqrt(1 + k)
	common := math.Exp(-(h-x)*(h+x)/2 - (x+nu)/r*((x+nu)/r)/2)
	return tilted(common, (h-nu+(x+h)*k)/r, -(x+h), nu, k) +
		tilted(common, (h+nu+(h-x)*k)/r, h-x, nu, k)
}

// tilted is exp(c nu + c^2 k / 2) Phi(-z), common that product less its erfcx.
func tilted(common, z, c, nu, k float64) float64 {
	if z > 0 {
		return common * scaledTail(z)
	}
	// Here c nu < -c^2 k: nothing overflows.
	return math.Exp(c*(nu+c*k/2)) * normalTail(pair{hi: z})
}

// scaledTail returns exp(z^2/2) P(Z > z) = erfcx(z / sqrt 2) / 2, for z > 0, to
// 1e-13. Beyond 14 by the series DLMF 7.12.1, whose terms left out are below
// 1e-15.
func scaledTail(z float64) float64 {
	if z < 14 {
		return math.Exp(z*z/2) * normalTail(pair{hi: z})
	}
	q := 1 / (z * z)
	sum := 1.0
	for k := 19.0; k > 0; k -= 2 {
		sum = 1 - k*q*sum
	}
	return sum / (z * math.Sqrt(2*math.Pi))
}

// closed integrates the crossings by T over the level's belief.
func (p *Passage) closed(seconds float64) Crossing {
	c, m := p.course, p.course.Motion
	switch {
	case m.Form == MotionConstant:
		return p.now()
	case m.Form == MotionTrend && m.Walk == 0:
		return p.ballistic(seconds)
	case m.Form == MotionReverting: // without spread
		left := math.Exp(-m.Rate * seconds)
		return p.straight(m.Mean+(c.Mean-m.Mean)*left, c.SD*left)
	case m.Walk == 0:
		return p.now()
	}
	t, w := seconds, math.Sqrt(m.Walk)*math.Sqrt(seconds)
	if widest := longest * p.width(); w > widest {
		// In two steps, as the square might be no double.
		t, w = widest/math.Sqrt(m.Walk)*(widest/math.Sqrt(m.Walk)), widest
	}
	tau := c.SlopeSD * math.Sqrt(math.Max(0, (1-c.Correlation)*(1+c.Correlation)))
	d := drifting{w: w, kappa: tau * t / w, width: p.width() / w}
	if w == 0 {
		return p.now()
	}
	spread := math.Hypot(1, d.kappa)
	o := overlay{time: t, finest: w * spread / (1 + 2*d.kappa*d.kappa), smear: w * spread}
	return p.over(o,
		func(x, drift float64) (p, size float64) { return d.below(x/w, drift/w) },
		func(x, drift float64) (p, size float64) { return d.below(x/w, -drift/w) })
}

// width is the distance between the limits.
func (p *Passage) width() float64 {
	if l := p.limits; l.HasLower && l.HasUpper {
		return l.Upper - l.Lower
	}
	return math.Inf(1)
}

// ballistic is the trend without a walk: a straight line crosses one limit at
// most, the upper one if level + slope T is beyond it or level is.
func (p *Passage) ballistic(seconds float64) Crossing {
	c := p.course
	tau := c.SlopeSD * math.Sqrt(math.Max(0, (1-c.Correlation)*(1+c.Correlation)))
	if s := tau * seconds; s > 0 {
		return p.over(overlay{time: seconds, finest: s, smear: s},
			func(x, drift float64) (p, size float64) { return certain(normalTail(pair{hi: (x + drift) / s})) },
			func(x, drift float64) (p, size float64) { return certain(normalTail(pair{hi: (x - drift) / s})) })
	}
	// The slope is a linear function of the level, so what crosses is a stretch.
	return p.straight(c.Mean+c.Slope*seconds, c.SD+c.Correlation*c.SlopeSD*seconds)
}

// certain is a kernel of one term.
func certain(p float64) (float64, float64) { return p, p }

// straight is the law where a level mean + sd Z goes without turning to
// at + rise Z.
func (p *Passage) straight(at, rise float64) Crossing {
	now := p.now()
	below, above := now.Below, now.Above
	if p.limits.HasUpper {
		above += p.strip(p.limits.Upper-at, rise)
	}
	if p.limits.HasLower {
		below += p.strip(at-p.limits.Lower, -rise)
	}
	return crossing(below, above)
}

// strip returns the probability that rise Z > gap for a level inside its limits,
// mean + sd Z.
func (p *Passage) strip(gap, rise float64) float64 {
	lo, hi := p.inside(math.Inf(1))
	switch {
	case rise > 0:
		lo = math.Max(lo, gap/rise)
	case rise < 0:
		hi = math.Min(hi, gap/rise)
	case gap >= 0:
		return 0
	}
	if !(lo < hi) {
		return 0
	}
	if lo > 0 {
		return normalTail(pair{hi: lo}) - normalTail(pair{hi: hi})
	}
	return normalTail(pair{hi: -hi}) - normalTail(pair{hi: -lo})
}

// inside returns the part of [-most, most] in which a level of mean + sd z is
// inside its limits.
func (p *Passage) inside(most float64) (lo, hi float64) {
	c, l := p.course, p.limits
	if c.SD == 0 {
		if l.HasLower && c.Mean < l.Lower || l.HasUpper && c.Mean > l.Upper {
			return 0, 0
		}
		return -most, most
	}
	lo, hi = -most, most
	if l.HasLower {
		lo = math.Max(lo, (l.Lower-c.Mean)/c.SD)
	}
	if l.HasUpper {
		hi = math.Min(hi, (l.Upper-c.Mean)/c.SD)
	}
	return lo, hi
}
