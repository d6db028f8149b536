package posterior

import "math"

// mixture is the distribution of a level known beforehand as N(m, s^2),
// independently of r, after n readings with mean ybar and sum of squares S that
// inform r; or of the next indication. With nu the degrees of freedom and
// A = Worth Guess^2 + S, integrating the level out leaves for u = ln r
//
//	p(u) ~ r^-nu exp(-A / (2 r^2)) N(ybar; m, s^2 + r^2 / n),  nu = Worth + n - 1
//
// (without the last factor and with nu = Worth if n = 0), and given r the level
// is normal by precision weighting (Gelman et al. 2013, 2.5 and 5.4 for the same
// algebra; derived for this package: prior r^-Worth exp(-Worth Guess^2 / 2 r^2)
// for u, likelihood r^-n exp(-(S + n (ybar - level)^2) / 2 r^2)).
//
// The variable is x = u - ln(A/nu)/2, and rho = r^2 / (n s^2) = c exp(2x) tells
// how much less the readings say of the level than what was known before.
type mixture struct {
	before     normal
	data       Level
	n          float64
	nu         float64
	r0         float64 // sqrt(A / nu): r at x = 0
	logC       float64 // ln rho at x = 0
	conflict   float64 // (ybar - m) / s
	difference float64 // ybar - m
	predictive bool

	origin   float64 // x at which logWeight is 0: the highest maximum of p
	chi      float64 // exp(-2x) there
	logShare float64 // ln(rho / (1 + rho)) there
	rest     float64 // conflict / sqrt(1 + rho) there
	reach    reach
	nodes    []node
	total    float64 // ln of the integral of exp(logWeight)
	median   float64 // of x, near enough for a start
	hasMean  bool
	hasSD    bool
}

// node is one normal of the mixture.
type node struct {
	component
	x      float64
	weight float64 // sums to 1
}

// component is the normal given r.
type component struct {
	kept float64 // weight of what was known before in the mean: rho / (1 + rho)
	won  float64 // weight of the readings: 1 / (1 + rho)
	sd   float64
}

// newMixture computes the nodes and moments.
func newMixture(before normal, s spread, predictive bool) Posterior {
	m := &mixture{
		before: before, data: s.mean, n: s.n, nu: s.worth,
		r0: math.Sqrt(s.sum / s.worth), predictive: predictive,
	}
	if s.n > 0 {
		m.logC = 2 * math.Log(m.r0/math.Sqrt(s.n)/before.sd)
		m.difference = s.mean.Minus(before.mean)
		m.conflict = m.difference / before.sd
	}
	m.moments()
	m.locate()
	m.fill()
	return m.publish()
}

// component returns the normal at x.
func (m *mixture) component(x float64) component {
	c := component{kept: 1, sd: m.before.sd}
	if m.n > 0 {
		rho := math.Exp(m.logC + 2*x)
		c.won = 1 / (1 + rho)
		c.kept = 1 / (1 + 1/rho)
		if rho < 1 { // it may have vanished
			c.sd = m.r0 * math.Exp(x) / math.Sqrt(m.n) * math.Sqrt(c.won)
		} else {
			c.sd = m.before.sd * math.Sqrt(c.kept)
		}
	}
	if m.predictive {
		c.sd = math.Hypot(c.sd, m.r0*math.Exp(x))
	}
	return c
}

// start makes x the origin.
func (m *mixture) start(x float64) {
	m.origin = x
	m.chi = math.Exp(-2 * x)
	logRho := m.logC + 2*x
	m.rest = m.conflict / math.Sqrt(1+math.Exp(logRho))
	m.logShare = logRho - math.Log1p(math.Exp(logRho))
	if logRho > 0 {
		m.logShare = -math.Log1p(math.Exp(-logRho))
	}
}

// logWeight is ln p(x) less its value at the origin, written in differences so
// that large terms of nearly equal size never meet. With
//
//	1 + rho(x) = (1 + rho0) (1 + q),  q = rho0 / (1 + rho0) (exp(2y) - 1)
//
// the normal factor changes by -ln(1 + q) / 2 + rest^2 / 2 * q / (1 + q).
func (m *mixture) logWeight(x float64) float64 {
	y := x - m.origin
	w := -m.nu / 2 * m.chiTerm(y)
	switch {
	case m.n == 0:
		return w
	case y > 150: // exp(2y) could overflow
		e := m.logShare + 2*y
		return w - math.Max(e, 0)/2 - math.Log1p(math.Exp(-math.Abs(e)))/2 + m.rest*m.rest/2/(1+math.Exp(-e))
	}
	q := math.Exp(m.logShare) * math.Expm1(2*y)
	f := m.rest * math.Sqrt(math.Abs(q/(1+q)))
	return w - math.Log1p(q)/2 + math.Copysign(f*f/2, q)
}

// chiTerm returns exp(-2x) - exp(-2 origin) + 2y, x = origin + y.
func (m *mixture) chiTerm(y float64) float64 {
	switch {
	case math.Abs(y) < 0.02 && math.Abs(m.chi-1) < 0.5:
		// exp(-2y) - 1 + 2y by its series, then the rest
		t := -2 * y
		series := t * t / 2 * (1 + t/3*(1+t/4*(1+t/5*(1+t/6*(1+t/7*(1+t/8))))))
		return series + (m.chi-1)*math.Expm1(t)
	case m.chi < 1e-200: // it may have vanished
		return math.Exp(-2*(m.origin+y)) - m.chi + 2*y
	}
	return m.chi*math.Expm1(-2*y) + 2*y
}

// locate finds the highest maximum of p(x), makes it the origin and finds the
// reach of p, widened to that of the second moment, which falls more slowly. It
// begins with an origin at which no term is out of range.
func (m *mixture) locate() {
	first, last := m.features()
	m.start(last)
	r := survey(m.logWeight, m.below(first), last+4)
	m.start(r.peak)
	r.height = 0
	if m.hasSD {
		r = r.join(survey(func(x float64) float64 {
			return m.logWeight(x) + 2*math.Log(m.component(x).sd)
		}, m.below(first), math.Max(last, m.overtaken())+4))
	}
	m.reach = r
}

// overtaken returns the x at which r begins to outweigh the level in the
// predictive's standard deviation, if it does.
func (m *mixture) overtaken() float64 {
	if !m.predictive {
		return 0
	}
	return math.Log(m.before.sd / m.r0)
}

// moments tells which the distribution has. The level always has both, as it
// is bounded by what was known before; the predictive has them if E r and
// E r^2 exist: p falls as r^-(nu+1), or r^-nu without readings.
func (m *mixture) moments() {
	falls := m.nu
	if m.n > 0 {
		falls++
	}
	m.hasMean = !m.predictive || falls > 1
	m.hasSD = !m.predictive || falls > 2
}

// features returns the smallest and largest x at which p(x) changes its course.
func (m *mixture) features() (first, last float64) {
	if m.n == 0 {
		return 0, 0
	}
	even := -m.logC / 2 // rho = 1
	split := even + math.Log(math.Max(1, math.Abs(m.conflict)))
	return math.Min(0, even), math.Max(0, math.Max(even, split))
}

// below returns an x under which the exponential has won for good: nu/2 exp(-2x)
// exceeds by far all that any other term can gain.
func (m *mixture) below(first float64) float64 {
	gain := 1600 + m.nu + math.Max(0, m.logC)
	return math.Min(first-1, -math.Log(2*gain/m.nu+1)/2-1)
}

// fill sets nodes, weights and the total.
func (m *mixture) fill() {
	r := m.reach
	step := r.step
	even := r.sum(m.logWeight, step, 0)
	for {
		odd := r.sum(m.logWeight, step, step/2)
		done := agree(even, odd) || (r.hi-r.lo)/step > maxNodes
		even += odd
		step /= 2
		if done {
			break
		}
	}
	m.total = r.height + math.Log(even*step)
	run := 0.0
	first := math.Ceil((r.lo - r.peak) / step)
	m.nodes = make([]node, 0, int((r.hi-r.peak)/step-first)+2)
	for x := r.peak + first*step; x <= r.hi; first, x = first+1, r.peak+(first+1)*step {
		w := math.Exp(m.logWeight(x)-r.height) / even
		m.nodes = append(m.nodes, node{m.component(x), x, w})
		if run < 0.5 {
			m.median = x
		}
		run += w
	}
}

// publish sums the moments: of the mean in terms of whichever anchor is nearer,
// of the variance as that within and that between the normals.
func (m *mixture) publish() Posterior {
	var kept, won float64
	for i := range m.nodes {
		k := &m.nodes[i]
		kept += k.weight * k.kept
		won += k.weight * k.won
	}
	var variance float64
	for i := range m.nodes {
		k := &m.nodes[i]
		shift := m.difference * (k.won - won)
		if won > 0.5 {
			shift = m.difference * (k.kept - kept)
		}
		variance += k.weight * (k.sd*k.sd + shift*shift)
	}
	mean := m.before.mean.Plus(m.difference * won)
	if won > 0.5 {
		mean = m.data.Plus(-m.difference * kept)
	}
	return Posterior{form: FormMixture, location: mean, scale: math.Sqrt(variance), mixture: m}
}

// place is a point of the line, as seen from both anchors of the mean.
type place struct{ fromBefore, fromData float64 }

func (m *mixture) place(x float64) place { return m.placed(LevelOf(x), 0) }

// placed is the place at some distance from l.
func (m *mixture) placed(l Level, distance float64) place {
	p := place{fromBefore: l.Minus(m.before.mean) + distance}
	if m.n > 0 {
		p.fromData = l.Minus(m.data) + distance
	}
	return p
}

// standard returns (place - mean) / sd of the component; from whichever anchor
// is nearer in weight.
func (m *mixture) standard(p place, c *component) float64 {
	if c.won > 0.5 {
		return (p.fromData + m.difference*c.kept) / c.sd
	}
	return (p.fromBefore - m.difference*c.won) / c.sd
}

// tail returns P(X > x), or P(X < x) for the lower side.
func (m *mixture) tail(x float64, s side) float64 {
	switch {
	case math.IsNaN(x):
		return math.NaN()
	case math.IsInf(x, int(s)):
		return 0
	case math.IsInf(x, 0):
		return 1
	}
	return math.Exp(m.logTail(m.place(x), s))
}

// logTail returns the logarithm of the tail.
func (m *mixture) logTail(p place, s side) float64 {
	var half [2]float64
	for i := range m.nodes {
		k := &m.nodes[i]
		half[i&1] += k.weight * math.Erfc(float64(s)*m.standard(p, &k.component)*sqrtHalf.hi) / 2
	}
	if served(half) {
		return math.Log(half[0] + half[1])
	}
	h := func(x float64) float64 {
		c := m.component(x)
		return m.logWeight(x) + logNormalTail(float64(s)*m.standard(p, &c))
	}
	return math.Min(0, m.integral(h, p)-m.total)
}

// served tells whether p's own nodes serve for a probability that was averaged
// over the even and the odd ones. They are as good for it as for p itself
// unless it is small, when its integrand peaks where the nodes end, or
// the probability given r changes faster than their step, which shows as a
// difference between the halves.
func served(half [2]float64) bool {
	return half[0]+half[1] > 1e-7 && agree(half[0], half[1])
}

// integral returns ln of the integral of exp(h), where h is logWeight plus the
// logarithm of a probability that concerns the place p.
func (m *mixture) integral(h func(float64) float64, p place) float64 {
	first, last := m.features()
	last = math.Max(last, m.spread(p))
	return survey(h, m.below(first), last+4).trapezoid(h)
}

// spread returns an x beyond which the probabilities at p no longer change
// their course: r or r / sqrt(n) exceeds every distance.
func (m *mixture) spread(p place) float64 {
	d := math.Max(math.Abs(p.fromBefore), math.Max(math.Abs(p.fromData), math.Abs(m.difference)))
	return math.Log(math.Max(d, m.before.sd) * math.Sqrt(math.Max(m.n, 1)) / m.r0)
}

// between returns P(lo <= X <= hi), lo < hi.
func (m *mixture) between(lo, hi float64) float64 {
	if math.IsInf(lo, -1) {
		return m.tail(hi, lower)
	}
	if math.IsInf(hi, 1) {
		return m.tail(lo, upper)
	}
	a, b := m.place(lo), m.place(hi)
	var half [2]float64
	for i := range m.nodes {
		k := &m.nodes[i]
		za, zb := m.standard(a, &k.component), m.standard(b, &k.component)
		half[i&1] += k.weight * normalBetween(pair{hi: za}, pair{hi: zb}, (hi-lo)/k.sd)
	}
	if served(half) {
		return half[0] + half[1]
	}
	h := func(x float64) float64 {
		c := m.component(x)
		return m.logWeight(x) + logNormalBetween(m.standard(a, &c), m.standard(b, &c), (hi-lo)/c.sd)
	}
	far := a
	if math.Abs(b.fromBefore)+math.Abs(b.fromData) > math.Abs(a.fromBefore)+math.Abs(a.fromData) {
		far = b
	}
	return math.Exp(math.Min(0, m.integral(h, far)-m.total))
}
