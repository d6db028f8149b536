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

	origin float64 // x at which logWeight is 0: the highest maximum of p
	chi    float64 // exp(-2x) there
	logWon float64 // ln(1 / (1 + rho)) there
	won    float64
	share  float64 // rho / (1 + rho) there
	rest   float64 // conflict / sqrt(1 + rho) there

	region  region // of p
	nodes   []node
	total   float64 // ln of the integral of exp(logWeight)
	median  float64 // of x, near enough for a start
	hasMean bool
	hasSD   bool
	work    *int // counts the points at which an integrand is computed, if set
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
	return prepared(before, s, predictive).build()
}

// prepared sets the parameters.
func prepared(before normal, s spread, predictive bool) *mixture {
	m := &mixture{
		before: before, data: s.mean, n: s.n, nu: s.worth,
		r0: math.Sqrt(s.sum / s.worth), predictive: predictive,
	}
	if s.n > 0 {
		m.logC = 2 * (math.Log(m.r0) - math.Log(s.n)/2 - math.Log(before.sd))
		m.difference = s.mean.Minus(before.mean)
		m.conflict = m.difference / before.sd
	}
	return m
}

// build computes the rest.
func (m *mixture) build() Posterior {
	mean, sd := m.built().meanAndSD()
	return Posterior{form: FormMixture, location: mean, scale: sd, shape: m}
}

// built computes what all answers need.
func (m *mixture) built() *mixture {
	m.exist()
	m.locate()
	m.fill()
	return m
}

func (m *mixture) moments() (hasMean, hasSD bool) { return m.hasMean, m.hasSD }

// component returns the normal at x.
func (m *mixture) component(x float64) component {
	c := m.level(x)
	if m.predictive {
		c.sd = math.Hypot(c.sd, m.r(x))
	}
	return c
}

// level returns the normal of the level at x.
func (m *mixture) level(x float64) component {
	c := component{kept: 1, sd: m.before.sd}
	if m.n == 0 {
		return c
	}
	rho := math.Exp(m.logC + 2*x)
	c.won = 1 / (1 + rho)
	c.kept = 1 / (1 + 1/rho)
	if rho < 1 { // it may have vanished
		c.sd = m.r(x) / math.Sqrt(m.n) * math.Sqrt(c.won)
	} else {
		c.sd = m.before.sd * math.Sqrt(c.kept)
	}
	return c
}

// r returns r at x.
func (m *mixture) r(x float64) float64 {
	if x > 600 { // r need not be out of range where exp(x) is
		return math.Exp(x/2) * m.r0 * math.Exp(x/2)
	}
	return m.r0 * math.Exp(x)
}

// start makes x the origin.
func (m *mixture) start(x float64) {
	m.origin = x
	m.chi = math.Exp(-2 * x)
	logRho := m.logC + 2*x
	m.logWon = -softplus(logRho)
	m.won = math.Exp(m.logWon)
	m.share = math.Exp(-softplus(-logRho))
	m.rest = m.conflict * math.Sqrt(m.won)
	if m.won < 1e-200 { // it may have vanished
		m.rest = math.Copysign(math.Exp(math.Log(math.Abs(m.conflict))+m.logWon/2), m.conflict)
	}
}

// softplus returns ln(1 + exp(x)).
func softplus(x float64) float64 { return math.Max(x, 0) + math.Log1p(math.Exp(-math.Abs(x))) }

// logWeight is ln p(x) less its value at the origin, written in differences so
// that large terms of nearly equal size never meet. With
//
//	1 + rho(x) = (1 + rho0) (1 + q),  q = rho0 / (1 + rho0) (exp(2y) - 1)
//
// the normal factor changes by -ln(1 + q) / 2 + rest^2 / 2 * q / (1 + q).
func (m *mixture) logWeight(x float64) float64 {
	if m.work != nil {
		*m.work++
	}
	y := x - m.origin
	w := -m.nu / 2 * m.chiTerm(y)
	switch {
	case m.n == 0:
		return w
	case math.Abs(y) > 150:
		return w + m.logFactorFar(x)
	}
	q := m.share * math.Expm1(2*y)
	whole := m.won + m.share*math.Exp(2*y) // 1 + q, without cancellation
	f := m.rest * math.Sqrt(math.Abs(q)/whole)
	change := math.Log(whole)
	if math.Abs(y) < 1 {
		change = math.Log1p(q)
	}
	return w - change/2 + math.Copysign(f*f/2, q)
}

// logFactorFar is the change of the normal factor where exp(2y) or its inverse
// could leave the range: with 1 - exp(-2|y|) = 1,
//
//	rest^2 q / (1 + q) = conflict^2 rho / ((1 + rho0) (1 + rho)),  y > 0,
//	                   = -conflict^2 rho0 / ((1 + rho0) (1 + rho)), y < 0.
func (m *mixture) logFactorFar(x float64) float64 {
	logRho := m.logC + 2*math.Max(x, m.origin)
	logWon := -softplus(m.logC + 2*x)
	f := math.Exp(math.Log(math.Abs(m.conflict)) + (logRho+m.logWon+logWon)/2)
	return (logWon-m.logWon)/2 + math.Copysign(f*f/2, x-m.origin)
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
