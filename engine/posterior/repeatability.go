package posterior

import "math"

// Repeatability is what is known of r: its value if known, else its posterior
// median and probabilistically symmetric coverage interval, and the sample
// standard deviation of the readings that inform it, sqrt(S / (n - 1)).
type Repeatability struct {
	Known             bool
	StandardDeviation float64

	HasMedian            bool // Median, Lower and Upper exist
	Median, Lower, Upper float64

	HasEstimate bool // there are two readings that inform r
	Estimate    float64
}

// Repeatability returns what is known of r.
func (c *Constant) Repeatability(p Prior, n Noise, coverage float64) Repeatability {
	if n.Known {
		return Repeatability{Known: true, StandardDeviation: n.SD}
	}
	var out Repeatability
	if n.Absent {
		return out
	}
	if l := &c.learned; l.count > 1 {
		out.HasEstimate = true
		out.Estimate = math.Sqrt(l.deviation() / float64(l.count-1))
	}
	s, ok := c.spread(n)
	if !ok {
		return out
	}
	tail := (1 - coverage) / 2
	at := [3]float64{tail, 0.5, 1 - tail}
	var q [3]float64
	if level := c.informed(p, n); level.flat {
		q = s.quantiles(at)
	} else {
		q = newMixture(level, s, false).mixture.spreadQuantiles(at)
	}
	out.HasMedian = true
	out.Lower, out.Median, out.Upper = q[0], q[1], q[2]
	return out
}

// quantiles returns those of r under a flat level, whose own degree of freedom
// is taken out in s already: sum / r^2 ~ chi-squared with worth degrees of
// freedom (Gelman et al. 2013, 3.2), so P(r <= x) = P(chi^2 >= sum / x^2).
func (s *spread) quantiles(p [3]float64) (q [3]float64) {
	for i := range p {
		q[i] = math.Sqrt(s.sum / chiSquaredUpper(p[i], s.worth))
	}
	return q
}

// spreadQuantiles returns the quantiles of r for ascending probabilities. The
// distribution function is summed over cells of one node's width by
// Gauss-Legendre, as the trapezoid rule fails at an end that doesn't vanish.
func (m *mixture) spreadQuantiles(p [3]float64) (q [3]float64) {
	x := m.nodes[0].x
	width := 2 * (m.nodes[1].x - x)
	whole := 0.0
	for a := x; a < m.reach.hi; a += width {
		whole += m.cell(a, width)
	}
	run, next := 0.0, m.cell(x, width)
	for i := range p {
		for run+next < p[i]*whole && x < m.reach.hi {
			run += next
			x += width
			next = m.cell(x, width)
		}
		q[i] = m.r0 * math.Exp(m.within(x, width, p[i]*whole-run))
	}
	return q
}

// cell integrates the density of x, in units of its height, over [a, a+width].
func (m *mixture) cell(a, width float64) float64 {
	sum := 0.0
	for i, t := range legendreNodes {
		sum += legendreWeights[i] * math.Exp(m.logWeight(a+width*t)-m.reach.height)
	}
	return sum * width
}

// within returns the point up to which the cell [a, a+width] holds mass.
func (m *mixture) within(a, width, mass float64) float64 {
	lo, hi := 0.0, width
	t := width / 2
	for range 60 {
		excess := m.cell(a, t) - mass
		if excess > 0 {
			hi = t
		} else {
			lo = t
		}
		next := t - excess/math.Exp(m.logWeight(a+t)-m.reach.height)
		if !(next > lo && next < hi) {
			next = (lo + hi) / 2
		}
		if math.Abs(next-t) <= 1e-15*width {
			return a + next
		}
		t = next
	}
	return a + t
}
