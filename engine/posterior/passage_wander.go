package posterior

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/floats"
)

// A trend whose slope wanders is an integrated walk: no closed form, and two
// dimensions on a grid. So paths are drawn, from a fixed sequence (the answer is a
// function of the course), and nearly all of their scatter is taken out:
//
//   - The level's own walk between two times is a Brownian bridge, which crosses a
//     line at distances a and b from its ends with probability exp(-2 a b / q), q
//     the bridge's variance over the whole step (Glasserman 2003, Monte Carlo
//     Methods in Financial Engineering, 6.4; from memory): no bias from looking at
//     times only.
//   - One normal direction is integrated out. With D the final level, x(t) = y(t) +
//     e(t) Z, e(t) = Cov[x(t), D] / sd[D] and Z ~ N(0, 1) independent of y: given y
//     the Z that haven't crossed by t are an interval, which shrinks with t.
//     Where e would be negative at the start, D is the final level less its
//     regression on the first.
//   - Every path has its mirror image about the mean; where they start, and how
//     steeply, is spread evenly over the belief.
//   - The same path with a steady slope, whose law is known in closed form, is
//     subtracted as far as it correlates (a control variate, Glasserman 4.1).
//
// What stays is a standard error of at most 1e-3 (seen over shifted sequences and
// other seeds, where the wander dominates), mostly of 1e-4 to 4e-4.
const (
	wanderSteps = 32
	wanderPairs = 3072
)

// wandering is the course on its times.
type wandering struct {
	course Course
	limits Limits
	times  [wanderSteps + 1]float64
	steps  [wanderSteps]stride
	rest   float64 // sqrt(1 - correlation^2)
}

// stride is what a path needs of the time between two times.
type stride struct {
	length float64 // seconds
	root   float64 // sqrt(length)
	walk   float64 // standard deviation of the level's own walk
	slack  float64 // its variance over 2
}

// beam is the direction that is integrated out, at each time: x = y + e Z.
type beam struct {
	e     [wanderSteps + 1]float64
	sd    float64 // of D
	first float64 // the regression of the final level on the first, where D has it taken off
}

// wander draws the paths for the table. Times grow as squares, since a level near
// a limit crosses at once.
func (p *Passage) wander() *passageTable {
	g := wandering{course: p.course, limits: p.limits}
	for i := range g.times {
		r := float64(i) / wanderSteps
		g.times[i] = p.horizon * r * r
	}
	m := p.course.Motion
	g.rest = math.Sqrt(math.Max(0, (1-p.course.Correlation)*(1+p.course.Correlation)))
	for i := range g.steps {
		h := g.times[i+1] - g.times[i]
		g.steps[i] = stride{length: h, root: math.Sqrt(h), walk: math.Sqrt(m.Walk * h), slack: m.Walk * h / 2}
	}
	// The control: the same course without the wander.
	steady := *p
	steady.course.Motion.Wander = 0
	loose, fixed := g.beam(m.Wander), g.beam(0)
	var sums [2]control
	random := rand.New(rand.NewPCG(20, 26))
	var noise pathNoise
	lead := g.leading()
	for i := range wanderPairs {
		noise.draw(random, i, &lead)
		var a, b [2]track
		for k, sign := range [...]float64{1, -1} {
			a[k] = g.follow(&loose, &noise, sign, math.Sqrt(m.Wander))
			b[k] = g.follow(&fixed, &noise, sign, 0)
		}
		for j := range sums {
			sums[j].add(&a[0][j], &a[1][j], &b[0][j], &b[1][j])
		}
	}
	crossings := make([]Crossing, len(g.times))
	crossings[0] = p.now()
	for i := 1; i < len(crossings); i++ {
		known := steady.closed(g.times[i])
		crossings[i] = Crossing{Below: sums[0].estimate(i, known.Below), Above: sums[1].estimate(i, known.Above)}
	}
	return tabulate(g.times[:], crossings)
}

// beam returns the direction for a slope that wanders by the given variance a
// second. From independent increments, for t <= T,
//
//	Cov[x(t), x(T)] = s^2 + c (t + T) + tau^2 t T + sigma^2 t + omega^2 (t^2 T / 2 - t^3 / 6).
func (g *wandering) beam(wander float64) beam {
	c := g.course
	last := g.times[wanderSteps]
	cov := c.Correlation * c.SD * c.SlopeSD
	with := func(t float64) float64 {
		return c.SD*c.SD + cov*(t+last) + c.SlopeSD*c.SlopeSD*t*last + c.Motion.Walk*t + wander*t*t*(last/2-t/6)
	}
	var b beam
	first := with(0)
	if first < 0 {
		b.first = first / (c.SD * c.SD)
	}
	variance := with(last) - b.first*first
	if !(variance > 0) {
		return b
	}
	b.sd = math.Sqrt(variance)
	for i, t := range g.times {
		// Rounding aside none is negative.
		b.e[i] = math.Max(0, (with(t)-b.first*(c.SD*c.SD+cov*t))/b.sd)
	}
	if b.first != 0 {
		b.e[0] = 0
	}
	return b
}

// pathNoise is what a path is made of: standard normal and exponential numbers.
type pathNoise struct {
	level, slope float64
	walk         [wanderSteps]float64
	wander, lag  [wanderSteps]float64
	upper, lower [wanderSteps]float64
}

// primes have square roots that no rational combination ties.
var primes = [6]float64{2, 3, 5, 7, 11, 13}

// draw takes the path with number i. What matters most of it - level and slope now,
// the first two of leading for wander and walk - comes from the fractional parts
// of i sqrt(prime), which fill the cube evenly (Weyl 1916; Niederreiter 1992,
// Random Number Generation and Quasi-Monte Carlo Methods, chapter 3; from memory);
// the level from its upper half, the mirror image being the lower.
func (n *pathNoise) draw(random *rand.Rand, i int, lead *leading) {
	var even [6]float64
	for j, prime := range primes {
		_, u := math.Modf(0.5 + math.Sqrt(prime)*float64(i))
		if j == 0 {
			u = 0.5 + u/2
		}
		even[j] = normalQuantile(math.Min(math.Max(u, 1e-9), 1-1e-9))
	}
	n.level, n.slope = even[0], even[1]
	for i := range wanderSteps {
		n.walk[i], n.wander[i], n.lag[i] = random.NormFloat64(), random.NormFloat64(), random.NormFloat64()
		n.upper[i], n.lower[i] = random.ExpFloat64(), random.ExpFloat64()
	}
	for j := range 2 {
		replace(&n.wander, &lead.wander[j], even[2+j])
		replace(&n.walk, &lead.walk[j], even[4+j])
	}
}

// replace gives z the coordinate to along a unit vector; a standard normal z stays
// one.
func replace(z, along *[wanderSteps]float64, to float64) {
	for i := range z {
		to -= z[i] * along[i]
	}
	for i := range z {
		z[i] += to * along[i]
	}
}

// leading holds pairs of orthogonal unit vectors in the space of the steps' noise:
// those that move the level at the end and, beyond that, at an earlier time.
type leading struct{ wander, walk [2][wanderSteps]float64 }

func (g *wandering) leading() (l leading) {
	last := g.times[wanderSteps]
	for i, s := range g.steps {
		middle := g.times[i] + s.length/2
		l.wander[0][i] = s.root * (last - middle)
		l.wander[1][i] = s.root * math.Max(0, last/2-middle)
		l.walk[0][i] = s.root
		if middle < last/4 {
			l.walk[1][i] = s.root
		}
	}
	for _, pair := range []*[2][wanderSteps]float64{&l.wander, &l.walk} {
		floats.Scale(1/floats.Norm(pair[0][:], 2), pair[0][:])
		floats.AddScaled(pair[1][:], -floats.Dot(pair[0][:], pair[1][:]), pair[0][:])
		floats.Scale(1/floats.Norm(pair[1][:], 2), pair[1][:])
	}
	return l
}

// track holds the probabilities of having crossed below and above by each time.
type track [2][wanderSteps + 1]float64

// follow returns the probabilities given one path, over Z. Sign -1 mirrors it.
func (g *wandering) follow(b *beam, n *pathNoise, sign, omega float64) (out track) {
	y := g.path(n, sign, omega)
	if b.sd > 0 {
		c := g.course
		last := g.times[wanderSteps]
		z := (y[wanderSteps] - (c.Mean + c.Slope*last) - b.first*(y[0]-c.Mean)) / b.sd
		for i := range y {
			y[i] -= b.e[i] * z
		}
	}
	// The alive Z are those between -lower.at and upper.at.
	upper, lower := shutter{at: math.Inf(1)}, shutter{at: math.Inf(1)}
	for i := range y {
		if g.limits.HasUpper && upper.at > -lower.at {
			upper.shut(g.edge(b, i, g.limits.Upper, &y, 1, &n.upper), lower.at)
		}
		if g.limits.HasLower && upper.at > -lower.at {
			lower.shut(g.edge(b, i, g.limits.Lower, &y, -1, &n.lower), upper.at)
		}
		out[0][i], out[1][i] = lower.mass, upper.mass
	}
	return out
}

// shutter is one end of the alive Z, as seen from its side.
type shutter struct {
	at   float64 // Z beyond have crossed
	tail float64 // the mass beyond
	mass float64 // of those that crossed here
}

// shut moves the end to the edge, if that is farther in, but not past the other
// end.
func (s *shutter) shut(edge, other float64) {
	if edge >= s.at {
		return
	}
	s.at = math.Max(edge, -other)
	tail := normalTail(pair{hi: s.at})
	s.mass += tail - s.tail
	s.tail = tail
}

// path draws the levels. The slope's integral over a step of length h is, given
// its ends, normal about the mean of them times h with variance omega^2 h^3 / 12.
func (g *wandering) path(n *pathNoise, sign, omega float64) (y [wanderSteps + 1]float64) {
	c := g.course
	x := c.Mean + sign*c.SD*n.level
	v := c.Slope + sign*c.SlopeSD*(c.Correlation*n.level+g.rest*n.slope)
	y[0] = x
	lag := math.Sqrt(1.0 / 12)
	for i, s := range g.steps {
		dv := sign * omega * s.root * n.wander[i]
		x += (v+dv/2)*s.length + sign*(s.walk*n.walk[i]+omega*s.length*s.root*lag*n.lag[i])
		v += dv
		y[i+1] = x
	}
	return y
}

// edge returns the Z (times sign) from which on the path crosses the limit in the
// step that ends at i, or is beyond it at i = 0. With distances p - e Z at the ends
// of the step the bridge crosses if their product is below q E / 2, E a standard
// exponential variable: Z from the smaller root of
//
//	e0 e1 Z^2 - (p0 e1 + p1 e0) Z + p0 p1 - q E / 2.
func (g *wandering) edge(b *beam, i int, limit float64, y *[wanderSteps + 1]float64, sign float64, exponential *[wanderSteps]float64) float64 {
	p1 := sign * (limit - y[i])
	e1 := b.e[i]
	if i == 0 {
		return clears(p1, e1)
	}
	p0, e0 := sign*(limit-y[i-1]), b.e[i-1]
	q := g.steps[i-1].slack * exponential[i-1]
	if e0 == 0 && (p0 < 0 || e1 == 0) {
		if p0 < 0 || p1 < 0 || p0*p1 < q {
			return math.Inf(-1)
		}
		return math.Inf(1)
	}
	sum, product := p0*e1+p1*e0, p0*p1-q
	root := math.Sqrt((p0*e1-p1*e0)*(p0*e1-p1*e0) + 4*e0*e1*q)
	if sum > 0 {
		return 2 * product / (sum + root)
	}
	if e0*e1 == 0 {
		return math.Inf(-1)
	}
	return (sum - root) / (2 * e0 * e1)
}

// clears returns the Z from which on p - e Z < 0.
func clears(p, e float64) float64 {
	if e > 0 {
		return p / e
	}
	return math.Inf(int(math.Copysign(1, p)))
}

// control sums, at each time, a and b and their products, each the mean of a path
// and its mirror image.
type control struct {
	n            float64
	a, b, ab, bb [wanderSteps + 1]float64
}

func (c *control) add(a, mirroredA, b, mirroredB *[wanderSteps + 1]float64) {
	c.n++
	for i := range a {
		u, v := (a[i]+mirroredA[i])/2, (b[i]+mirroredB[i])/2
		c.a[i] += u
		c.b[i] += v
		c.ab[i] += u * v
		c.bb[i] += v * v
	}
}

// estimate returns the mean of a, corrected by how far that of b misses its known
// value.
func (c *control) estimate(i int, known float64) float64 {
	a, b := c.a[i]/c.n, c.b[i]/c.n
	variance := c.bb[i]/c.n - b*b
	if !(variance > 1e-12*b) {
		return a + known - b
	}
	return a + (c.ab[i]/c.n-a*b)/variance*(known-b)
}
