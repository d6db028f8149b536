package posterior

import "math"

// The integrals over x = ln r (plus a constant) have smooth integrands exp(h(x))
// that vanish at both ends at least exponentially. The trapezoid rule then
// converges faster than any power of its step (Trefethen & Weideman 2014, SIAM
// Review 56, 385-458, section 5), provided that it covers all that matters and
// resolves the narrowest peak.
const (
	// dropped is how far below the highest maximum the integrand is cut off,
	// in natural logarithms: e^-42 is 6e-19.
	dropped = 42
	// maxNodes bounds the rule; a merged pair of narrow peaks may come near.
	maxNodes = 1 << 12
)

// reach is an interval in which an integrand matters, with the step that
// resolves it. Where decay > 0 the integrand goes on beyond hi as exp(-decay x).
type reach struct {
	lo, hi float64
	peak   float64 // where h is largest
	height float64 // h there
	step   float64
	decay  float64
	open   bool // cut off at the horizon
}

// region is all the intervals in which an integrand matters, in ascending order
// and disjoint.
type region struct {
	top   float64 // the largest value of h
	parts []reach
}

// peak returns where h is largest.
func (g region) peak() float64 {
	for _, r := range g.parts {
		if r.height == g.top {
			return r.peak
		}
	}
	return g.parts[0].peak
}

// lift adds to all heights.
func (g *region) lift(d float64) {
	g.top += d
	for i := range g.parts {
		g.parts[i].height += d
	}
}

// integral returns ln of the integral of exp(h).
func (g region) integral(h func(float64) float64) float64 {
	if math.IsInf(g.top, -1) {
		return g.top
	}
	total := 0.0
	for _, r := range g.parts {
		step, sum := r.resolve(h, g.top)
		total += step * sum
	}
	return g.top + math.Log(total)
}

// join returns the parts of g and f, those that overlap made one. Where a part
// of g was cut off, decay tells how it goes on.
func (g region) join(f region, decay float64) []reach {
	var out []reach
	a, b := g.parts, f.parts
	for len(a) > 0 || len(b) > 0 {
		var r reach
		if len(b) == 0 || len(a) > 0 && a[0].lo < b[0].lo {
			r, a = a[0], a[1:]
			if r.open {
				r.decay = decay
			}
		} else {
			r, b = b[0], b[1:]
		}
		if n := len(out); n > 0 && r.lo <= out[n-1].hi {
			last := &out[n-1]
			last.hi = math.Max(last.hi, r.hi)
			last.step = math.Min(last.step, r.step)
			last.decay = math.Max(last.decay, r.decay)
			continue
		}
		out = append(out, r)
	}
	return out
}

// resolve returns the sum of exp(h - top) over equidistant points and their
// step. It halves the step until the two halves of the points agree to 1e-8,
// which makes the whole good to the square of that; or until they agree to 1e-6
// and halving no longer helps: what is left is the rounding of x, which a
// peak that is narrow and far from x = 0 brings out. Of a part much lower than
// top no more is asked than the ends that were cut off, e^-dropped, allow.
func (r reach) resolve(h func(float64) float64, top float64) (step, sum float64) {
	step = math.Max(r.step, (r.hi-r.lo)/maxNodes)
	even := r.sum(h, top, step, 0)
	before := 1.0
	for {
		odd := r.sum(h, top, step, step/2)
		apart := math.Abs(odd-even) / (odd + even)
		done := agree(even, odd) || math.Abs(odd-even) < 1e-17 || apart < 1e-6 && apart > before/8 || (r.hi-r.lo)/step > maxNodes
		before = apart
		even += odd
		step /= 2
		if done {
			return step, even
		}
	}
}

// agree tells whether the sums over even and odd nodes are close enough for
// their mean to be exact.
func agree(even, odd float64) bool { return math.Abs(odd-even) <= 1e-8*(odd+even) }

// points yields peak + shift + i step inside the reach.
func (r reach) points(step, shift float64) func(yield func(float64) bool) {
	return func(yield func(float64) bool) {
		i := math.Ceil((r.lo - r.peak - shift) / step)
		for x := r.peak + shift + i*step; x <= r.hi; i, x = i+1, r.peak+shift+(i+1)*step {
			if !yield(x) {
				return
			}
		}
	}
}

// sum adds exp(h - top) over the points; what follows beyond hi is a geometric
// series.
func (r reach) sum(h func(float64) float64, top, step, shift float64) float64 {
	total, last := 0.0, 0.0
	for x := range r.points(step, shift) {
		last = math.Exp(h(x) - top)
		total += last
	}
	if r.decay > 0 {
		total += last / math.Expm1(r.decay*step)
	}
	return total
}
