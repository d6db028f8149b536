package posterior

import (
	"math"
	"slices"
)

// How a lattice is laid.
const (
	// depthKept is how far below its highest value a log density is tabulated: to
	// 8.9 standard deviations of a normal one.
	depthKept = 40
	// depthServed is how far below it shall be exact: e^-30 is beyond what a tail of
	// 1e-9 rests on.
	depthServed = 30
	// fewestPoints is how many points a belief has at least, mostPoints at most; one
	// of which neither serves (a peak 1e4 times narrower than its pedestal) keeps the
	// most, and its depth gives way, then its step.
	fewestPoints = 256
	mostPoints   = 8192
)

// lattice is a density on the line: its logarithm at points step apart, the first of
// which lies first steps from the origin. Between them the logarithm is the
// polynomial through the six nearest points. Beyond the last point on either side
// it goes on as the parabola through the last ones; or, on a side that is open,
// stays as it is, and the density is improper. Without points it is flat.
//
// The obvious way, to tabulate the density, leaves a truncated zero where later
// readings may need it. The logarithm of what readings say is near to a parabola,
// which the polynomial follows exactly at any step, so the step must only resolve
// the density well enough for sums over it: see resolves.
type lattice struct {
	origin Level
	step   float64
	first  int
	logs   []float64
	open   [2]bool // below, above

	// The bias given each point, normal, less what it was thought to be: nil if
	// nobody knows of one.
	mean, variance []float64
}

// normalLattice tabulates N(mean, sd^2).
func normalLattice(mean Level, sd float64) lattice {
	step := powerOfTwo(sd / 14)
	reach := int(math.Ceil(math.Sqrt(2*depthKept) * sd / step))
	l := lattice{origin: mean, step: step, first: -reach, logs: make([]float64, 2*reach+1)}
	for i := range l.logs {
		l.logs[i] = logNormalDensity(l.x(i) / sd)
	}
	l.normalise()
	return l
}

// powerOfTwo returns the largest power of two not above x > 0.
func powerOfTwo(x float64) float64 {
	_, exponent := math.Frexp(x)
	return math.Ldexp(1, exponent-1)
}

// flat tells whether l has no points.
func (l *lattice) flat() bool { return len(l.logs) == 0 }

// proper tells whether the density has an integral.
func (l *lattice) proper() bool { return !l.flat() && !l.open[0] && !l.open[1] }

// x is point i as seen from the origin.
func (l *lattice) x(i int) float64 { return float64(l.first+i) * l.step }

// clone returns a copy that shares nothing.
func (l *lattice) clone() lattice {
	c := *l
	c.logs, c.mean, c.variance = slices.Clone(l.logs), slices.Clone(l.mean), slices.Clone(l.variance)
	return c
}

// bare is a lattice of n points laid as l is, with room for the bias if l has one.
func (l *lattice) bare(first, n int) lattice {
	b := lattice{origin: l.origin, step: l.step, first: first, open: l.open, logs: make([]float64, n)}
	if l.mean != nil {
		b.mean, b.variance = make([]float64, n), make([]float64, n)
	}
	return b
}

// parabola is how a log density goes on beyond a point: value + slope t + curvature
// t^2 / 2 at t from it.
type parabola struct{ from, value, slope, curvature float64 }

func (p parabola) at(x float64) float64 {
	t := x - p.from
	return max(lowest, p.value+t*(p.slope+t*p.curvature/2))
}

// end returns how l goes on beyond its last point on a side. Unless that is open it falls
// outwards, at least by 1 in the width of l, so that it has an integral.
func (l *lattice) end(s side) parabola {
	n := len(l.logs)
	last, apart := n-1, min(2, (n-1)/2)
	open := l.open[1]
	if s == lower {
		last, open = 0, l.open[0]
	}
	p := parabola{from: l.x(last), value: l.logs[last]}
	switch {
	case open:
		return p
	case apart == 0: // what was lumped together is all there is
		p.slope = -1000 * float64(s) / l.step
		return p
	}
	one, two := l.logs[last-int(s)*apart], l.logs[last-2*int(s)*apart]
	h := float64(apart) * l.step
	p.curvature = max(lowest, min(0, (p.value-2*one+two)/h/h))
	outward := min((p.value-one)/h+p.curvature*h/2, -1/(float64(n)*l.step))
	p.slope = float64(s) * outward
	return p
}

// at returns the log density at x from the origin.
func (l *lattice) at(x float64) float64 {
	n := len(l.logs)
	if n == 0 {
		return 0
	}
	i, f, outside := l.locate(x)
	switch {
	case outside != 0:
		return l.end(outside).at(x)
	case f == 0:
		return l.logs[i]
	}
	return interpolate(l.logs, i, f)
}

// locate returns the point at or next below x and the fraction of a step from there,
// or the side beyond which x lies.
func (l *lattice) locate(x float64) (i int, f float64, outside side) {
	t := x/l.step - float64(l.first)
	switch n := len(l.logs); {
	case !(t >= 0):
		return 0, 0, lower
	case t > float64(n-1):
		return n - 1, 0, upper
	}
	i = int(t)
	return i, t - float64(i), 0
}

// interpolate returns v at i + f, 0 < f < 1, by the polynomial through six points
// (Lagrange: DLMF 3.3.1), or on a straight line where the points don't resolve what
// they tabulate: there the polynomial would overshoot.
func interpolate(v []float64, i int, f float64) float64 {
	k := min(max(i-2, 0), len(v)-6)
	if k < 0 {
		return v[i] + f*(v[i+1]-v[i])
	}
	w := v[k : k+6 : k+6]
	if fifth := w[5] - w[0] - 5*(w[4]-w[1]) + 10*(w[3]-w[2]); !(math.Abs(fifth) < 1) {
		return v[i] + f*(v[i+1]-v[i])
	}
	u := f + float64(i-k)
	a, b, c, d, e, g := u, u-1, u-2, u-3, u-4, u-5
	ab, cd, eg := a*b, c*d, e*g
	return (ab*cd*(w[5]*e-5*w[4]*g) + 10*ab*eg*(w[3]*c-w[2]*d) + cd*eg*(5*w[1]*a-w[0]*b)) / 120
}

// biasAt returns mean and variance of the bias at x. Beyond the points the mean goes
// on straight.
func (l *lattice) biasAt(x float64) (mean, variance float64) {
	i, f, outside := l.locate(x)
	n := len(l.logs)
	switch {
	case outside != 0 && n > 1:
		k := max(0, min(n-2, i-1))
		if outside == lower {
			k = 0
		}
		slope := (l.mean[k+1] - l.mean[k]) / l.step
		return l.mean[i] + slope*(x-l.x(i)), l.variance[i]
	case f == 0:
		return l.mean[i], l.variance[i]
	}
	v := interpolate(l.variance, i, f)
	return interpolate(l.mean, i, f), max(v, min(l.variance[i], l.variance[i+1]))
}

// highest returns the highest log density at a point.
func (l *lattice) highest() float64 {
	top := l.logs[0]
	for _, v := range l.logs[1:] {
		if v > top {
			top = v
		}
	}
	return top
}

// normalise makes the sum over the points times the step 1, and returns the
// logarithm of what it was.
func (l *lattice) normalise() float64 {
	top, sum := l.highest(), 0.0
	for _, v := range l.logs {
		sum += math.Exp(v - top)
	}
	total := top + math.Log(sum*l.step)
	l.raise(-total)
	return total
}

// raise adds to all log densities.
func (l *lattice) raise(d float64) {
	for i := range l.logs {
		l.logs[i] += d
	}
}

// resolves tells whether every stride-th point is enough.
//
// The sum over points h apart of a normal density of standard deviation s is exact
// to 2 exp(-2 pi^2 s^2 / h^2) (Poisson summation: Trefethen & Weideman 2014, SIAM
// Review 56, section 5): 1e-9 where second differences of the logarithm, h^2 / s^2, are
// below 0.9. So 0.3 is asked near the top; less below, where the density is the rest
// of what edges left of it. Polynomials through six points are off by 0.005 sixth
// differences in the middle (DLMF 3.3.3, for an even spacing).
func (l *lattice) resolves(stride int, top float64) bool {
	v := l.logs
	if len(v) < 16*stride {
		return false
	}
	for i := stride; i < len(v)-stride; i += stride {
		depth := top - v[i]
		if depth > depthServed {
			continue
		}
		a := v[i-stride] + v[i+stride]
		if second := math.Abs(a - 2*v[i]); second > 1.5 || second > 0.3 && depth < 8 {
			return false
		}
		if i < 3*stride || i >= len(v)-3*stride {
			continue
		}
		b, c := v[i-2*stride]+v[i+2*stride], v[i-3*stride]+v[i+3*stride]
		if math.Abs(c-6*b+15*a-20*v[i]) > 0.05 {
			return false
		}
	}
	return true
}

// cut leaves the points from i to before j.
func (l *lattice) cut(i, j int) {
	l.first += i
	l.logs = l.logs[i:j]
	if l.mean != nil {
		l.mean, l.variance = l.mean[i:j], l.variance[i:j]
	}
}

// served returns the first point and the one after the last within a depth of the
// top, with one more that isn't, so that an edge between two points is seen; on an open
// side all until the density stays the same.
func (l *lattice) served(top, depth float64) (i, j int) {
	v := l.logs
	i, j = 0, len(v)
	if l.open[0] {
		for i+9 < j && math.Abs(v[i+8]-v[0]) < settled {
			i++
		}
	} else {
		for i+9 < j && v[i] < top-depth {
			i++
		}
		i = max(0, i-1)
	}
	if l.open[1] {
		for i+9 < j && math.Abs(v[j-9]-v[len(v)-1]) < settled {
			j--
		}
	} else {
		for i+9 < j && v[j-1] < top-depth {
			j--
		}
		j = min(len(v), j+1)
	}
	return i, j
}

// settled is a change of log density that is none.
const settled = 1e-13

// trim leaves out what lies too deep, halves the number of points while there are
// more than needed, doubles it while there are too few, and moves the origin if it is far.
func (l *lattice) trim() {
	top := l.highest()
	l.cut(l.served(top, depthKept))
	for depth := depthKept - 3.0; len(l.logs) > mostPoints && depth >= depthServed; depth -= 3 {
		l.cut(l.served(top, depth))
	}
	for len(l.logs) > mostPoints || len(l.logs) > 2*fewestPoints+64 && l.resolves(2, top) {
		l.thin()
	}
	for l.proper() && len(l.logs) < fewestPoints {
		l.densify()
	}
	if centre := l.first + len(l.logs)/2; centre > 1<<20 || centre < -1<<20 {
		l.origin = l.origin.Plus(float64(centre) * l.step)
		l.first -= centre
	}
}

// thin keeps every second point, and one beyond each end.
func (l *lattice) thin() {
	s := l.stretch(1, math.Inf(-1))
	start := s.first & 1
	b := s.bare((s.first+start)/2, (len(s.logs)-start+1)/2)
	b.step *= 2
	for i := range b.logs {
		b.logs[i] = s.logs[start+2*i]
		if s.mean != nil {
			b.mean[i], b.variance[i] = s.mean[start+2*i], s.variance[start+2*i]
		}
	}
	*l = b
}

// densify halves the step.
func (l *lattice) densify() {
	b := l.bare(2*l.first, 2*len(l.logs)-1)
	b.step /= 2
	halfway(l.logs, b.logs)
	if l.mean != nil {
		halfway(l.mean, b.mean)
		halfway(l.variance, b.variance)
	}
	for i, v := range b.variance {
		b.variance[i] = max(0, v)
	}
	*l = b
}

// halfway puts the values and what interpolate returns halfway between them into out.
func halfway(v, out []float64) {
	n := len(v)
	for i, at := range v {
		out[2*i] = at
	}
	for i := range n - 1 {
		if i < 2 || i > n-4 {
			out[2*i+1] = interpolate(v, i, 0.5)
			continue
		}
		w := v[i-2 : i+4 : i+4]
		if fifth := w[5] - w[0] - 5*(w[4]-w[1]) + 10*(w[3]-w[2]); math.Abs(fifth) < 1 {
			out[2*i+1] = (3*(w[0]+w[5]) - 25*(w[1]+w[4]) + 150*(w[2]+w[3])) / 256
		} else {
			out[2*i+1] = (w[2] + w[3]) / 2
		}
	}
}

// stretch adds below and above points, at most, on either side, where the log density is
// above floor.
func (l *lattice) stretch(points int, floor float64) lattice {
	low, high := l.end(lower), l.end(upper)
	below, above := 0, 0
	for below < points && (l.open[0] || low.at(low.from-float64(below+1)*l.step) > floor) {
		below++
	}
	for above < points && (l.open[1] || high.at(high.from+float64(above+1)*l.step) > floor) {
		above++
	}
	n := len(l.logs)
	b := l.bare(l.first-below, below+n+above)
	copy(b.logs[below:], l.logs)
	copy(b.mean[min(below, len(b.mean)):], l.mean)
	copy(b.variance[min(below, len(b.mean)):], l.variance)
	fill := func(i int, p parabola) {
		b.logs[i] = p.at(b.x(i))
		if l.mean != nil {
			b.mean[i], b.variance[i] = l.biasAt(b.x(i))
		}
	}
	for i := range below {
		fill(i, low)
	}
	for i := below + n; i < len(b.logs); i++ {
		fill(i, high)
	}
	return b
}
