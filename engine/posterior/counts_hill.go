package posterior

import (
	"math"
	"slices"
)

// hill is a density exp(h) whose logarithm h is concave, tabulated where it matters.
//
// h is held as polynomials of degree 8 through Chebyshev points on stretches, which are
// halved until the last coefficients vanish; so a normal density takes two stretches,
// and one that is flat between two steep edges a few about each edge. Integrals are
// taken over the polynomials, h itself is not needed any more. Beyond the stretches, h
// having fallen by fallen, it goes on as a parabola: the stated tail.
//
// Sources: Trefethen 2013, Approximation Theory and Approximation Practice, chapters 3
// and 8, for interpolation and the decay of coefficients (from memory). Products of
// concave densities and marginals of them are concave (Prekopa 1973, Acta Sci. Math.
// 34, from memory), so each has one maximum and one level set of any height.
type hill struct {
	at, top   float64 // a point near the maximum, and h there
	stretches []stretch
	below     []float64 // mass left of stretch i, divided by exp(top); one more than stretches
	above     []float64 // mass right of the stretch before i
	ends      [2]ending // at the lower and the upper end
	mass      float64   // the whole, divided by exp(top)
	mean      float64
	sd        float64
}

const (
	degree    = 8
	fallen    = 36   // e^-36 is 2e-16
	mostSplit = 20   // halvings of a stretch
	mostParts = 120  // stretches
	smooth    = 1e-6 // what a polynomial's last coefficients may be
	steep     = 6    // how much h may change in one application of the Gauss rule
)

// stretch is an interval with the Chebyshev coefficients of h - top there.
type stretch struct {
	lo, hi float64
	c      [degree + 1]float64
}

// ending is how h - top goes on beyond an end, as a function of the distance t:
// height - slope t - bend t^2 / 2, slope > 0.
type ending struct{ at, height, slope, bend float64 }

// newHill tabulates h so that the last coefficients stay below smooth. start and
// scale > 0 say where to begin looking and in what steps.
func newHill(h func(float64) float64, start, scale, smooth float64) *hill {
	g := new(hill)
	g.at, g.top = summit(h, start, scale)
	lo := g.at - descend(h, g.at, -scale, g.top-fallen)
	hi := g.at + descend(h, g.at, scale, g.top-fallen)
	b := builder{h: h, top: g.top, smooth: smooth}
	first, middle, last := h(lo)-g.top, 0., h(hi)-g.top
	b.split(lo, g.at, first, middle, 0)
	b.split(g.at, hi, middle, last, 0)
	g.stretches = b.stretches
	g.ends[0] = b.ending(lo, lo-g.at, first)
	g.ends[1] = b.ending(hi, hi-g.at, last)
	g.sum()
	return g
}

// summit returns a point near the maximum of a concave h and its value there: near
// enough for h to fall, from there, by less than 2 in a step in which it may rise.
func summit(h func(float64) float64, x, step float64) (at, top float64) {
	top = h(x)
	for range 400 {
		l, r := h(x-step), h(x+step)
		if l > top || r > top {
			way := step
			if l > r {
				way, r = -step, l
			}
			for r > top {
				x, top = x+way, r
				way *= 2
				r = h(x + way)
			}
			step = math.Abs(way) / 4
			continue
		}
		if bend := 2*top - l - r; bend > 0 {
			v := x + step*(r-l)/bend/2
			if hv := h(v); hv > top {
				x, top = v, hv
			}
		}
		if top-math.Min(l, r) < 2 || x+step/8 == x {
			break
		}
		step /= 4
	}
	return x, top
}

// descend returns the distance from the maximum x, in the direction of step, at which
// h has sunk to the floor, to some tenth of it and rather beyond.
func descend(h func(float64) float64, x, step, floor float64) float64 {
	near, far := 0.0, step
	for h(x+far) > floor && math.Abs(far) < farthest {
		near, far = far, 2*far
	}
	for math.Abs(far-near) > 0.12*math.Abs(far) {
		middle := near + (far-near)/2
		if middle == near || middle == far {
			break
		}
		if h(x+middle) > floor {
			near = middle
		} else {
			far = middle
		}
	}
	return math.Abs(far)
}

// builder makes the stretches of a hill.
type builder struct {
	h         func(float64) float64
	top       float64
	smooth    float64
	stretches []stretch
}

// split appends the stretches of [lo, hi], at whose ends h - top is known.
func (b *builder) split(lo, hi, first, last float64, depth int) {
	var f [degree + 1]float64
	f[0], f[degree] = last, first
	middle, half := lo+(hi-lo)/2, (hi-lo)/2
	for k := 1; k < degree; k++ {
		f[k] = b.h(middle+half*chebyshev[k]) - b.top
	}
	p := stretch{lo: lo, hi: hi, c: coefficients(&f)}
	height := math.Max(first, math.Max(last, f[degree/2]))
	rest := math.Max(math.Abs(p.c[degree-2])/8, math.Abs(p.c[degree-1])) + math.Abs(p.c[degree])
	done := rest <= b.smooth*(1-height/8)+1e-13*math.Abs(b.top)
	if !done && (depth == mostSplit || len(b.stretches) >= mostParts) { // the chord: concave h lies above it
		p.c, done = [degree + 1]float64{(first + last) / 2, (last - first) / 2}, true
	}
	if done {
		b.stretches = append(b.stretches, p)
		return
	}
	b.split(lo, middle, first, f[degree/2], depth+1)
	b.split(middle, hi, f[degree/2], last, depth+1)
}

// ending returns how h goes on beyond an end at a signed distance from the maximum,
// from second differences.
func (b *builder) ending(at, distance, height float64) ending {
	d := distance / 8
	f1, f2 := b.h(at+d)-b.top, b.h(at+2*d)-b.top
	bend := math.Max(0, -(f2 - 2*f1 + height))
	slope := math.Max(height-f1-bend/2, -height/16)
	d = math.Abs(d)
	return ending{at, height, slope / d, bend / d / d}
}

// chebyshev holds cos(k pi / 8), cosines the same for k j.
var chebyshev = [degree + 1]float64{
	1, 0.92387953251128675613, 0.70710678118654752440, 0.38268343236508977173, 0,
	-0.38268343236508977173, -0.70710678118654752440, -0.92387953251128675613, -1,
}

// coefficients returns those of the polynomial through f at the Chebyshev points.
func coefficients(f *[degree + 1]float64) (c [degree + 1]float64) {
	for j := range c {
		sum := f[0] / 2
		sign := 1.0
		if j&1 == 1 {
			sign = -1
		}
		sum += sign * f[degree] / 2
		for k := 1; k < degree; k++ {
			i := j * k % (2 * degree)
			if i > degree {
				i = 2*degree - i
			}
			sum += f[k] * chebyshev[i]
		}
		c[j] = sum * 2 / degree
	}
	c[0] /= 2
	c[degree] /= 2
	return c
}

// log returns h - top at x of the stretch, by Clenshaw's recurrence (DLMF 3.11(ii)).
func (p *stretch) log(x float64) float64 {
	t := ((x - p.lo) - (p.hi - x)) / (p.hi - p.lo)
	t2 := 2 * t
	b1, b2 := p.c[degree], 0.0
	for k := degree - 1; k > 0; k-- {
		b1, b2 = p.c[k]+t2*b1-b2, b1
	}
	return p.c[0] + t*b1 - b2
}

// each calls f with points of [a, b] within the stretch and their shares of the mass
// there, by the 8-point Gauss rule on parts in which h changes little.
func (p *stretch) each(a, b float64, f func(x, mass float64)) {
	if !(b > a) {
		return
	}
	parts := 1 + int(math.Min(1e3, math.Abs(p.log(b)-p.log(a)))/steep)
	width := (b - a) / float64(parts)
	for i := range parts {
		left := a + float64(i)*width
		for k, t := range legendreNodes {
			x := left + width*t
			f(x, width*legendreWeights[k]*math.Exp(p.log(x)))
		}
	}
}

// within returns the mass of [a, b] within the stretch.
func (p *stretch) within(a, b float64) float64 {
	sum := 0.0
	p.each(a, b, func(_, mass float64) { sum += mass })
	return sum
}

// log returns h - top at a distance t >= 0 from the end.
func (e *ending) log(t float64) float64 { return e.height - t*(e.slope+e.bend*t/2) }

// logBeyond returns ln of the mass beyond a distance t >= 0 from the end: with the
// square completed it is a normal tail, written as exp(h(t)) times Mills' ratio (DLMF
// 7.8.1), and 1 / (slope + bend t) where h is all but straight.
func (e *ending) logBeyond(t float64) float64 {
	slope, root := e.slope+e.bend*t, math.Sqrt(e.bend)
	if z := slope / root; z < 1e4 {
		return e.log(t) + logNormalTail(z) + z*z/2 + logRootTwoPi - math.Log(root)
	}
	return e.log(t) - math.Log(slope)
}

// beyond returns the mass itself.
func (e *ending) beyond(t float64) float64 { return math.Exp(e.logBeyond(t)) }

// sum computes the masses and moments.
func (g *hill) sum() {
	n := len(g.stretches)
	g.below, g.above = make([]float64, n+1), make([]float64, n+1)
	masses := make([]float64, n)
	var first, second float64
	for i := range g.stretches {
		p := &g.stretches[i]
		p.each(p.lo, p.hi, func(x, mass float64) {
			d := x - g.at
			masses[i] += mass
			first += mass * d
			second += mass * d * d
		})
	}
	g.below[0], g.above[n] = g.ends[0].beyond(0), g.ends[1].beyond(0)
	for i := range masses {
		g.below[i+1] = g.below[i] + masses[i]
		g.above[n-1-i] = g.above[n-i] + masses[n-1-i]
	}
	g.mass = g.below[n] + g.ends[1].beyond(0)
	first /= g.mass
	g.mean = g.at + first
	g.sd = math.Sqrt(math.Max(0, second/g.mass-first*first))
}

// log returns h - top at x.
func (g *hill) log(x float64) float64 {
	switch n := len(g.stretches); {
	case x < g.stretches[0].lo:
		return g.ends[0].log(g.stretches[0].lo - x)
	case x > g.stretches[n-1].hi:
		return g.ends[1].log(x - g.stretches[n-1].hi)
	}
	return g.stretches[g.stretch(x)].log(x)
}

// stretch returns the index of the stretch that holds x.
func (g *hill) stretch(x float64) int {
	i, _ := slices.BinarySearchFunc(g.stretches, x, func(p stretch, x float64) int {
		if p.hi < x {
			return -1
		}
		return 1
	})
	return min(i, len(g.stretches)-1)
}

// tail returns the share of the mass beyond x on the given side.
func (g *hill) tail(x float64, s side) float64 {
	n := len(g.stretches)
	lo, hi := g.stretches[0].lo, g.stretches[n-1].hi
	switch {
	case x <= lo && s == lower:
		return g.ends[0].beyond(lo-x) / g.mass
	case x >= hi && s == upper:
		return g.ends[1].beyond(x-hi) / g.mass
	case x < lo:
		return 1 - g.ends[0].beyond(lo-x)/g.mass
	case x > hi:
		return 1 - g.ends[1].beyond(x-hi)/g.mass
	}
	i := g.stretch(x)
	p := &g.stretches[i]
	if s == lower {
		return (g.below[i] + p.within(p.lo, x)) / g.mass
	}
	return (g.above[i+1] + p.within(x, p.hi)) / g.mass
}

// logTail returns the logarithm of tail, also where that vanishes.
func (g *hill) logTail(x float64, s side) float64 {
	switch lo, hi := g.stretches[0].lo, g.stretches[len(g.stretches)-1].hi; {
	case s == lower && x < lo:
		return g.ends[0].logBeyond(lo-x) - math.Log(g.mass)
	case s == upper && x > hi:
		return g.ends[1].logBeyond(x-hi) - math.Log(g.mass)
	}
	return math.Log(g.tail(x, s))
}

// between returns the share of the mass of [a, b], a < b.
func (g *hill) between(a, b float64) float64 {
	n := len(g.stretches)
	lo, hi := g.stretches[0].lo, g.stretches[n-1].hi
	switch {
	case b <= lo:
		return (g.ends[0].beyond(lo-b) - g.ends[0].beyond(lo-a)) / g.mass
	case a >= hi:
		return (g.ends[1].beyond(a-hi) - g.ends[1].beyond(b-hi)) / g.mass
	}
	sum := 0.0
	if a < lo {
		sum += g.below[0] - g.ends[0].beyond(lo-a)
	}
	if b > hi {
		sum += g.above[n] - g.ends[1].beyond(b-hi)
	}
	for i := g.stretch(math.Max(a, lo)); i < n && g.stretches[i].lo < b; i++ {
		p := &g.stretches[i]
		sum += p.within(math.Max(a, p.lo), math.Min(b, p.hi))
	}
	return sum / g.mass
}
