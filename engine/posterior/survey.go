package posterior

import "math"

// span is where an integrand exp(h) may have its maxima: in [lo, hi]; h falls
// outside of it. h is built from logistic functions and exponentials of 2x and
// has no feature narrower than about 1, however narrow exp(h) may be. The marks
// are the points about which a term changes its course. Far from all of them h is
// near to
//
//	a + b x + c exp(2x) + d exp(-2x),
//
// which has one maximum and one minimum at most (its derivative times exp(2x) is
// a quadratic in exp(2x)). So a scan with steps that grow with the
// distance from the marks misses no maximum but one that a steep rise to a much
// higher one hides. Derived for this package.
type span struct {
	lo, hi  float64
	fixed   bool    // further marks don't lower lo
	horizon float64 // where to cut off at the latest
	marks   []float64
}

const (
	scanStep = 0.25
	dense    = 4 // the half-width of the stretch about a mark with steps of scanStep
	growth   = 8 // beyond, the step is the distance over growth
)

// add adds marks, and widens the span to them.
func (s *span) add(marks ...float64) {
	for _, x := range marks {
		s.hi = math.Max(s.hi, x)
		if !s.fixed {
			s.lo = math.Min(s.lo, x)
		}
	}
	s.marks = append(s.marks, marks...)
}

// pace returns the step of the scan at x.
func (s *span) pace(x float64) float64 {
	near := math.Inf(1)
	for _, m := range s.marks {
		near = math.Min(near, math.Abs(x-m))
	}
	return math.Max(scanStep, (near-dense)/growth)
}

// survey finds the region of h.
func (s *span) survey(h func(float64) float64) region {
	var maxima []float64
	end := s.hi + 4
	a, x := s.lo-scanStep, s.lo
	before, here := h(a), h(x)
	for x <= end {
		next := x + s.pace(x)
		after := h(next)
		if here >= before && here > after {
			maxima = append(maxima, climb(h, a, next))
		}
		a, x, before, here = x, next, here, after
	}
	if len(maxima) == 0 {
		maxima = append(maxima, s.lo)
		if h(end) > h(s.lo) {
			maxima[0] = end
		}
	}
	return s.surround(h, maxima)
}

// climb narrows a bracketed maximum by golden sections.
func climb(h func(float64) float64, a, b float64) float64 {
	const golden = 0.6180339887498949
	c, d := b-golden*(b-a), a+golden*(b-a)
	hc, hd := h(c), h(d)
	for b-a > 5e-6 {
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

// surround spans what matters about the maxima, given in ascending order; those
// with a valley between them that doesn't matter come apart, each with its own step.
func (s *span) surround(h func(float64) float64, maxima []float64) region {
	g := region{top: math.Inf(-1)}
	for _, x := range maxima {
		g.top = math.Max(g.top, h(x))
	}
	floor := g.top - dropped
	var last *reach
	var slope float64 // the width of the last maximum
	for _, x := range maxima {
		height := h(x)
		if height < floor {
			continue
		}
		w := width(h, x)
		left := math.Inf(-1)
		if last != nil {
			left = climb(func(x float64) float64 { return -h(x) }, last.hi, x)
			if h(left) > floor {
				last.merge(x, height, w)
				slope = w
				continue
			}
			last.hi = edge(h, last.hi, left, slope, floor)
		}
		g.parts = append(g.parts, reach{lo: edge(h, x, left, w, floor), hi: x, peak: x, height: height, step: w})
		last, slope = &g.parts[len(g.parts)-1], w
	}
	last.hi = edge(h, last.hi, s.horizon, slope, floor)
	last.open = last.hi == s.horizon
	return g
}

// merge takes in a further maximum, the last so far.
func (r *reach) merge(x, height, width float64) {
	r.hi = x
	r.step = math.Min(r.step, width)
	if height > r.height {
		r.peak, r.height = x, height
	}
}

// edge returns where h, going from the maximum x towards the limit, sinks to the
// floor; the limit if it doesn't.
func edge(h func(float64) float64, x, limit, step, floor float64) float64 {
	s := math.Copysign(1, limit-x)
	most := math.Min(math.Abs(limit-x), 1e6)
	near, far := 0.0, math.Min(step, most)
	for h(x+s*far) > floor {
		if far == most {
			return x + s*most
		}
		near, far = far, math.Min(2*far, most)
	}
	for range 6 {
		middle := (near + far) / 2
		if h(x+s*middle) > floor {
			near = middle
		} else {
			far = middle
		}
	}
	return x + s*far
}

// width returns the step to begin with at the maximum x: about one standard
// deviation of a normal peak, at which the halves agree to 5e-9; 0.2 at most.
func width(h func(float64) float64, x float64) float64 {
	d, top := scanStep, h(x)
	for top-math.Min(h(x-d), h(x+d)) > 0.7 && d > 1e-9 {
		d *= 0.7
	}
	return 0.8 * d
}
