package posterior

import "math"

// exist tells which moments the distribution has. The level always has both, as it
// is bounded by what was known before; the predictive has them if E r and
// E r^2 exist.
func (m *mixture) exist() {
	m.hasMean = !m.predictive || m.falls() > 1
	m.hasSD = !m.predictive || m.falls() > 2
}

// falls returns the exponent with which p falls in the end: as r^-(nu+1), or
// r^-nu without readings.
func (m *mixture) falls() float64 {
	if m.n > 0 {
		return m.nu + 1
	}
	return m.nu
}

// span returns where p(x) can have its maxima and the points at which it, or the
// standard deviation given r, changes its course.
func (m *mixture) span() span {
	s := span{horizon: math.Inf(1), marks: make([]float64, 0, 32)}
	s.add(0)
	if m.n > 0 {
		even := -m.logC / 2 // rho = 1
		s.add(even, even+math.Log(math.Max(1, math.Abs(m.conflict))))
	}
	s.lo, s.fixed = m.below(s.lo), true
	if m.predictive { // r begins to outweigh the level
		s.add(math.Log(m.before.sd) - math.Log(m.r0))
	}
	return s
}

// below returns an x under which the exponential has won for good: nu/2 exp(-2x)
// exceeds by far all that any other term can gain.
func (m *mixture) below(first float64) float64 {
	gain := 1600 + m.nu + math.Max(0, m.logC)
	return math.Min(first-1, -math.Log(2*gain/m.nu+1)/2-1)
}

// locate finds the highest maximum of p(x), makes it the origin and finds where
// p matters. It begins with an origin at which no term is out of range.
func (m *mixture) locate() {
	s := m.span()
	m.start(s.hi)
	g := s.survey(m.logWeight)
	m.start(g.peak())
	g.lift(-g.top)
	m.region = g
}

// fill sets nodes, weights and the total.
func (m *mixture) fill() {
	for _, r := range m.region.parts {
		step, _ := r.resolve(m.logWeight, 0)
		for x := range r.points(step, 0) {
			m.nodes = append(m.nodes, node{m.component(x), x, step * math.Exp(m.logWeight(x))})
		}
	}
	whole := 0.0
	for i := range m.nodes {
		whole += m.nodes[i].weight
	}
	m.total = math.Log(whole)
	run := 0.0
	for i := range m.nodes {
		k := &m.nodes[i]
		k.weight /= whole
		if run < 0.5 {
			m.median = k.x
		}
		run += k.weight
	}
}

// meanAndSD returns the mean and, if it exists, the standard deviation. The
// variance is that within the normals, E sd^2, and that between their means.
// Given r they lie at the anchor nearer in weight, plus difference times the
// weight of the other one, a(x):
//
//	variance = E (sd^2 + difference^2 (a - E a)^2)
//
// The integrand of sd^2 + difference^2 a^2 can matter where p has long vanished:
// it is surveyed apart from p, in logarithms, and both are summed over the
// points that serve either. In the predictive it falls in the end as
// exp(-(falls - 2) x), no faster than that where the second moment barely exists.
// From the span's horizon on, where all else has died away to exp(-60), the sum
// over equidistant points is a geometric series and is closed as such. Derived
// for this package; the trapezoid rule on the line as in quadrature.go.
func (m *mixture) meanAndSD() (Level, float64) {
	if m.n == 0 {
		return m.before.mean, m.withoutReadings()
	}
	var won float64
	for i := range m.nodes {
		won += m.nodes[i].weight * m.nodes[i].won
	}
	anchor, difference, other := m.before.mean, m.difference, func(c *component) float64 { return c.won }
	if won > 0.5 {
		anchor, difference, other = m.data, -m.difference, func(c *component) float64 { return c.kept }
	}
	terms := m.terms(difference, other)
	a := 0.0
	for i := range terms {
		a += math.Exp(terms[i].logWeight) * other(&terms[i].component)
	}
	mean := anchor.Plus(difference * a)
	if !m.hasSD {
		return mean, math.NaN()
	}
	variance := 0.0
	for i := range terms {
		k := &terms[i]
		d := math.Hypot(k.sd, difference*(other(&k.component)-a))
		variance += k.beyond * math.Exp(k.logWeight+2*math.Log(d))
	}
	return mean, math.Sqrt(variance)
}

// withoutReadings returns the standard deviation before any reading informs r:
// E r^2 = r0^2 nu / (nu - 2) (Gelman et al. 2013, table A.1).
func (m *mixture) withoutReadings() float64 {
	switch {
	case !m.hasSD:
		return math.NaN()
	case m.predictive:
		return math.Hypot(m.before.sd, m.r0*math.Sqrt(m.nu/(m.nu-2)))
	}
	return m.before.sd
}

// term is a normal of the sum for the moments.
type term struct {
	component
	logWeight float64 // of weights that sum to 1
	beyond    float64 // factor that closes the sum for sd^2
}

// terms returns the normals that serve the moments.
func (m *mixture) terms(difference float64, other func(*component) float64) []term {
	component, decay := m.component, m.falls()
	switch {
	case !m.hasSD:
		component = m.level
	case m.predictive:
		decay = m.nu - 1 // falls - 2, not rounded on the way
	}
	h := func(x float64) float64 {
		c := component(x)
		return m.logWeight(x) + 2*math.Log(math.Hypot(c.sd, difference*other(&c)))
	}
	s := m.span()
	s.horizon = s.hi + 30
	g := s.survey(h)
	var out []term
	for _, r := range g.join(m.region, decay) {
		step, _ := r.resolve(h, g.top)
		for x := range r.points(step, 0) {
			out = append(out, term{component(x), m.logWeight(x) + math.Log(step) - m.total, 1})
		}
		if r.decay > 0 {
			out[len(out)-1].beyond += 1 / math.Expm1(r.decay*step)
		}
	}
	return out
}
