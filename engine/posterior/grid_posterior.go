package posterior

import "math"

// Posterior returns the distribution of the level, with FormGrid; FormNone while it is
// improper.
func (g *Grid) Posterior() Posterior {
	if !g.field.proper() {
		return Posterior{}
	}
	l := g.level()
	return l.posterior(0)
}

// PosteriorAfter returns the distribution of the level after a time of at least 0
// seconds, without moving g on.
func (g *Grid) PosteriorAfter(seconds float64) Posterior {
	if !g.field.proper() || seconds <= 0 || g.motion.Form == MotionConstant {
		return g.Posterior()
	}
	c := g.Clone()
	c.Advance(seconds)
	return c.Posterior()
}

// Predictive returns the distribution of the next indication, before a display rounds
// it: the belief of what the instrument sees, spread by the noise.
func (g *Grid) Predictive(noise Spread) Posterior {
	if !g.field.proper() {
		return Posterior{}
	}
	usual := g.indicated(noise.SD)
	if noise.OutlierProbability == 0 {
		return usual.posterior(g.bias.Mean)
	}
	outlying := g.indicated(noise.SD * noise.Inflation)
	a, b := newDensity(usual), newDensity(outlying)
	return join(a, b, noise.OutlierProbability, g.bias.Mean)
}

// indicated returns what the instrument sees with a noise.
func (g *Grid) indicated(sd float64) lattice {
	l := g.field.clone()
	l.mean, l.variance = nil, nil
	l.spread(sd * sd)
	return l
}

// posterior publishes l, all of it moved by a shift.
func (l *lattice) posterior(shift float64) Posterior {
	d := newDensity(*l)
	d.lattice.origin = d.lattice.origin.Plus(shift)
	return Posterior{form: FormGrid, location: d.origin.Plus(d.mean), scale: d.sd, shape: d}
}

// density is the distribution that a proper lattice holds. Its points never change.
type density struct {
	lattice
	ends      [2]parabola
	low, high []float64 // probabilities below and above each point
	total     float64   // logarithm of the integral
	mean, sd  float64   // from the origin
}

// newDensity integrates l, by the rule of inside between points and in closed form
// beyond them.
func newDensity(l lattice) *density {
	d := &density{lattice: l, ends: [2]parabola{l.end(lower), l.end(upper)}}
	d.lattice.mean, d.lattice.variance = nil, nil
	n := len(l.logs)
	top := l.highest()
	d.total = top
	cells := make([]float64, 2*n)
	d.low, d.high = cells[:n:n], cells[n:]
	d.low[0] = math.Exp(d.rest(lower, l.x(0)))
	d.high[n-1] = math.Exp(d.rest(upper, l.x(n-1)))
	d.cells(top, d.low[1:])
	for i := n - 2; i >= 0; i-- {
		d.high[i] = d.high[i+1] + d.low[i+1]
	}
	for i := range n - 1 {
		d.low[i+1] += d.low[i]
	}
	whole := d.low[n-1] + d.high[n-1]
	for i := range cells {
		cells[i] /= whole
	}
	d.total += math.Log(whole)
	d.gather(top)
	return d
}

// cells integrates between each point and the next, into out: the polynomial through the
// densities at six points, which is off by 2e-6 where these change by less than exp(0.3)
// from one to the next; where they change faster the rule of inside.
func (d *density) cells(top float64, out []float64) {
	n := len(d.logs)
	p := make([]float64, n)
	for i, v := range d.logs {
		p[i] = math.Exp(v - top)
	}
	gentle := 0 // how many changes before were
	for i := range n - 1 {
		next := min(i+3, n-1)
		if math.Abs(d.logs[next]-d.logs[next-1]) < 0.3 {
			gentle++
		} else {
			gentle = 0
		}
		if i < 2 || i > n-4 || gentle < 5 {
			out[i] = d.inside(i, 0, 1)
			continue
		}
		w := p[i-2 : i+4 : i+4]
		out[i] = (11*(w[0]+w[5]) - 93*(w[1]+w[4]) + 802*(w[2]+w[3])) / 1440 * d.step
	}
}

// gather computes mean and standard deviation: sums over points, to which what lies beyond
// adds less than e^-30.
func (d *density) gather(top float64) {
	var m moments
	origin := d.x(len(d.logs) / 2)
	for i, v := range d.logs {
		m.add(math.Exp(v-top), d.x(i)-origin, 0)
	}
	mean, variance := m.about(0)
	d.mean, d.sd = origin+mean, math.Sqrt(variance)
}

// The three-point Gauss-Legendre rule on [0, 1] (DLMF 3.5(v)): nodes 1/2 and 1/2 -+
// sqrt(3/20), weights 8/18 and 5/18.
var (
	cellNodes   = [3]float64{0.1127016653792583, 0.5, 0.8872983346207417}
	cellWeights = [3]float64{5.0 / 18, 8.0 / 18, 5.0 / 18}
)

// inside returns the integral from a to b, fractions of the step that follows point i,
// in units of exp(total).
func (d *density) inside(i int, a, b float64) float64 {
	if rise := d.logs[i+1] - d.logs[i]; !(math.Abs(rise) < 8) {
		// An edge between points, straight in logarithms.
		low, high := d.logs[i]+a*rise-d.total, d.logs[i]+b*rise-d.total
		return (math.Exp(high) - math.Exp(low)) / rise * d.step
	}
	sum := 0.0
	for k, node := range cellNodes {
		sum += cellWeights[k] * math.Exp(interpolate(d.logs, i, a+(b-a)*node)-d.total)
	}
	return sum * (b - a) * d.step
}

// rest returns the logarithm of the integral beyond x, which is no nearer than the last
// point on a side: with falls b and curvature -c there, the density times
//
//	integral of exp(-b t - c t^2 / 2) over t > 0 = Q(z) / phi(z) / sqrt(c),  z = b / sqrt(c)
//
// (DLMF 7.7.1), 1 / b where c vanishes.
func (d *density) rest(s side, x float64) float64 {
	e := d.ends[(s+1)/2]
	value := e.at(x) - d.total
	curvature := math.Abs(e.curvature)
	slope := -float64(s)*e.slope + curvature*math.Abs(x-e.from)
	z := slope / math.Sqrt(curvature)
	if !(z < 1000) {
		return value - math.Log(slope) - math.Log1p(1/z/z)
	}
	return value + logNormalTail(z) + z*z/2 + math.Log(2*math.Pi/curvature)/2
}

func (d *density) moments() (hasMean, hasSD bool) { return true, true }

// logTail returns the logarithm of the probability beyond x from the origin.
func (d *density) logTail(x float64, s side) float64 {
	i, f, outside := d.locate(x)
	switch {
	case outside == s:
		return d.rest(s, x)
	case outside != 0:
		return math.Log1p(-math.Exp(d.rest(outside, x)))
	case f == 0 && s == lower:
		return math.Log(d.low[i])
	case f == 0:
		return math.Log(d.high[i])
	}
	// The cell's two parts, made to sum to it.
	before, after := d.inside(i, 0, f), d.inside(i, f, 1)
	whole := before + after
	if whole == 0 { // a valley so deep that nothing of it is left
		before, after, whole = 1, 1, 2
	}
	if s == lower {
		return math.Log(d.low[i] + (d.low[i+1]-d.low[i])*(before/whole))
	}
	return math.Log(d.high[i+1] + (d.high[i]-d.high[i+1])*(after/whole))
}

func (d *density) tail(x float64, s side) float64 {
	if math.IsInf(x, 0) {
		return atInfinity(x, s)
	}
	return min(1, math.Exp(d.logTail(LevelOf(x).Minus(d.origin), s)))
}

// atInfinity returns the tail beyond an infinite x.
func atInfinity(x float64, s side) float64 {
	if math.IsInf(x, int(s)) {
		return 0
	}
	return 1
}

// between integrates the density where the limits are so close that tails would
// cancel.
func (d *density) between(lo, hi float64) float64 {
	if width := hi - lo; width < 2*d.step {
		from, sum := LevelOf(lo).Minus(d.origin), 0.0
		for k, node := range legendreNodes {
			sum += legendreWeights[k] * math.Exp(d.at(from+width*node)-d.total)
		}
		return sum * width
	}
	return apart(d, d.origin.Plus(d.mean).Value(), lo, hi)
}

// apart returns the probability between limits that aren't close from tails, on
// the side of the centre where they are small.
func apart(p shape, centre, lo, hi float64) float64 {
	switch {
	case lo > centre:
		return p.tail(lo, upper) - p.tail(hi, upper)
	case hi < centre:
		return p.tail(hi, lower) - p.tail(lo, lower)
	}
	return 1 - (p.tail(lo, lower) + p.tail(hi, upper))
}

func (d *density) quantile(p float64, s side) float64 {
	return outwards(p, s, d.origin.Plus(d.mean), d.sd, func(distance float64) float64 {
		return d.logTail(d.mean+distance, s)
	})
}

// outwards returns the point that cuts off the tail probability p: the root of its
// logarithm over asinh of the distance from the mean in standard deviations.
func outwards(p float64, s side, mean Level, sd float64, logTail func(distance float64) float64) float64 {
	target := math.Log(p)
	distance := func(t float64) float64 { return float64(s) * math.Sinh(t) * sd }
	t := zero(math.Asinh(-normalQuantile(p)), func(t float64) float64 { return logTail(distance(t)) - target })
	return mean.Plus(distance(t)).Value()
}

// joined is a mixture of two densities on lattices.
type joined struct {
	parts   [2]*density
	weights [2]float64
	mean    Level
	sd      float64
}

// join mixes b with its share into a, all of it moved by a shift. Mean and variance by the
// law of total variance.
func join(a, b *density, share, shift float64) Posterior {
	a.origin, b.origin = a.origin.Plus(shift), b.origin.Plus(shift)
	j := &joined{parts: [2]*density{a, b}, weights: [2]float64{1 - share, share}}
	gap := b.origin.Plus(b.mean).Minus(a.origin.Plus(a.mean))
	j.mean = a.origin.Plus(a.mean).Plus(share * gap)
	j.sd = math.Sqrt((1-share)*a.sd*a.sd + share*b.sd*b.sd + share*(1-share)*gap*gap)
	return Posterior{form: FormGrid, location: j.mean, scale: j.sd, shape: j}
}

func (j *joined) moments() (hasMean, hasSD bool) { return true, true }

func (j *joined) tail(x float64, s side) float64 {
	return j.weights[0]*j.parts[0].tail(x, s) + j.weights[1]*j.parts[1].tail(x, s)
}

func (j *joined) between(lo, hi float64) float64 {
	return j.weights[0]*j.parts[0].between(lo, hi) + j.weights[1]*j.parts[1].between(lo, hi)
}

func (j *joined) quantile(p float64, s side) float64 {
	return outwards(p, s, j.mean, j.sd, func(distance float64) float64 {
		sum := math.Inf(-1)
		for i, d := range j.parts {
			sum = logAdd(sum, math.Log(j.weights[i])+d.logTail(j.mean.Minus(d.origin)+distance, s))
		}
		return sum
	})
}

// exponentialMoments returns mean and standard deviation of exp(X), and whether they
// exist: the sums over points, and as far beyond them as the weight of exp(2 X) asks
// for. They don't where the density doesn't fall faster than that.
func (d *density) exponentialMoments() (mean, sd float64, ok bool) {
	centre := d.x(len(d.logs) / 2)
	first, ok1 := d.weighted(1, centre)
	second, ok2 := d.weighted(2, centre)
	scale := math.Exp(d.origin.Plus(centre).Value())
	return scale * first, scale * math.Sqrt(max(0, second-first*first)), ok1 && ok2
}

// weighted returns E exp(k (X - centre)).
func (d *density) weighted(k, centre float64) (sum float64, ok bool) {
	top, total := d.highest(), 0.0
	at := func(i int) float64 {
		w := math.Exp(d.lattice.at(d.x(i)) - top)
		total += w
		return w * math.Exp(k*(d.x(i)-centre))
	}
	term := 0.0
	for i := range d.logs {
		term = at(i)
		sum += term
	}
	for i := len(d.logs); i < len(d.logs)+mostPoints && term > 1e-12*sum; i++ {
		term = at(i)
		sum += term
	}
	return sum / total, term <= 1e-12*sum
}

// exponentialMoments mixes those of the parts.
func (j *joined) exponentialMoments() (mean, sd float64, ok bool) {
	a, s, ok1 := j.parts[0].exponentialMoments()
	b, u, ok2 := j.parts[1].exponentialMoments()
	v, w := j.weights[0], j.weights[1]
	return v*a + w*b, math.Sqrt(v*s*s + w*u*u + v*w*(a-b)*(a-b)), ok1 && ok2
}

// logAdd returns ln(exp(a) + exp(b)).
func logAdd(a, b float64) float64 {
	if a < b {
		a, b = b, a
	}
	if math.IsInf(b, -1) {
		return a
	}
	return a + math.Log1p(math.Exp(b-a))
}
