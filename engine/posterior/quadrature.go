package posterior

import "math"

// The integrals over x = ln r (plus a constant) have smooth integrands exp(h(x))
// that vanish at both ends at least exponentially. The trapezoid rule then
// converges faster than any power of its step (Trefethen & Weideman 2014, SIAM
// Review 56, 385-458, section 5), provided that it covers all that matters and
// resolves the narrowest peak. h itself, being built from logistic functions of
// 2x, has no feature narrower than about 1, however narrow exp(h) may be: a scan
// in steps of scanStep finds every maximum.
const (
	scanStep = 0.25
	// dropped is how far below the highest maximum the integrand is cut off,
	// in natural logarithms: e^-42 is 6e-19.
	dropped = 42
	// maxNodes bounds the rule; only distant narrow double peaks come near.
	maxNodes = 1 << 15
)

// reach is where an integrand matters, with the step that resolves it.
type reach struct {
	lo, hi float64
	peak   float64 // where h is largest
	height float64 // h there
	step   float64
}

// survey finds the reach of h, knowing that all maxima lie in [lo, hi] and that
// h falls outside of it.
func survey(h func(float64) float64, lo, hi float64) reach {
	steps := math.Max(8, math.Ceil((hi-lo)/scanStep))
	d := (hi - lo) / steps
	var maxima []float64
	before, here := h(lo-d), h(lo)
	for i := range int(steps) + 1 {
		after := h(lo + float64(i+1)*d)
		if here >= before && here > after {
			maxima = append(maxima, climb(h, lo+float64(i-1)*d, lo+float64(i+1)*d))
		}
		before, here = here, after
	}
	if len(maxima) == 0 {
		maxima = append(maxima, lo)
		if h(hi) > h(lo) {
			maxima[0] = hi
		}
	}
	return surround(h, maxima)
}

// climb narrows a bracketed maximum by golden sections.
func climb(h func(float64) float64, a, b float64) float64 {
	const golden = 0.6180339887498949
	c, d := b-golden*(b-a), a+golden*(b-a)
	hc, hd := h(c), h(d)
	for range 24 {
		if hc >= hd {
			b, d, hd = d, c, hc
			c = b - golden*(b-a)
			hc = h(c)
			continue
		}
		a, c, hc = c, d, hd
		d = a + golden*(b-a)
		hd = h(d)
	}
	return (a + b) / 2
}

// surround spans what matters about the maxima, given in ascending order.
func surround(h func(float64) float64, maxima []float64) reach {
	r := reach{height: math.Inf(-1), step: math.Inf(1)}
	for _, x := range maxima {
		if v := h(x); v > r.height {
			r.peak, r.height = x, v
		}
	}
	floor := r.height - dropped
	first := true
	for _, x := range maxima {
		if h(x) < floor {
			continue
		}
		if first {
			r.lo = x - fall(h, x, -1, floor)
			first = false
		}
		r.hi = x + fall(h, x, 1, floor)
		r.step = math.Min(r.step, width(h, x))
	}
	return r
}

// fall returns how far from x, going in direction s, h sinks to the floor.
func fall(h func(float64) float64, x, s, floor float64) float64 {
	far := scanStep
	for h(x+s*far) > floor && far < 1e6 {
		far *= 2
	}
	near := 0.0
	for range 12 {
		middle := (near + far) / 2
		if h(x+s*middle) > floor {
			near = middle
		} else {
			far = middle
		}
	}
	return far
}

// width returns the distance in which h drops by about 1/2 from the maximum x:
// one standard deviation of a normal peak; scanStep at most.
func width(h func(float64) float64, x float64) float64 {
	d, top := scanStep, h(x)
	for top-math.Min(h(x-d), h(x+d)) > 0.7 && d > 1e-9 {
		d *= 0.7
	}
	return d
}

// trapezoid returns ln of the integral of exp(h) over the reach. It halves the
// step until the two halves of the nodes agree to 1e-8, which makes the whole
// good to the square of that.
func (r reach) trapezoid(h func(float64) float64) float64 {
	if math.IsInf(r.height, -1) {
		return r.height
	}
	step := r.step
	even := r.sum(h, step, 0)
	for {
		odd := r.sum(h, step, step/2)
		if agree(even, odd) || (r.hi-r.lo)/step > maxNodes {
			return r.height + math.Log((even+odd)*step/2)
		}
		even += odd
		step /= 2
	}
}

// agree tells whether the sums over even and odd nodes are close enough for
// their mean to be exact.
func agree(even, odd float64) bool { return math.Abs(odd-even) <= 1e-8*(odd+even) }

// sum adds exp(h - height) over the points peak + shift + i step in reach.
func (r reach) sum(h func(float64) float64, step, shift float64) float64 {
	total := 0.0
	first := math.Ceil((r.lo - r.peak - shift) / step)
	for x := r.peak + shift + first*step; x <= r.hi; first, x = first+1, r.peak+shift+(first+1)*step {
		total += math.Exp(h(x) - r.height)
	}
	return total
}

// join returns the reach of both, around the peak of r.
func (r reach) join(s reach) reach {
	r.lo, r.hi, r.step = math.Min(r.lo, s.lo), math.Max(r.hi, s.hi), math.Min(r.step, s.step)
	return r
}
