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
		q = prepared(level, s, false).built().spreadQuantiles(at)
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
// distribution function is summed over cells of two nodes' width by
// Gauss-Legendre, as the trapezoid rule fails at an end that doesn't vanish.
func (m *mixture) spreadQuantiles(p [3]float64) (q [3]float64) {
	cells := m.cells()
	whole := 0.0
	for _, c := range cells {
		whole += c.mass
	}
	run, i := 0.0, 0
	for j, c := range cells {
		for i < len(p) && (run+c.mass >= p[i]*whole || j == len(cells)-1) {
			q[i] = m.r0 * math.Exp(m.within(c.x, c.width, p[i]*whole-run))
			i++
		}
		run += c.mass
	}
	return q
}

// cell is an interval of x and its share of p.
type cell struct{ x, width, mass float64 }

// cells divides the region of p.
func (m *mixture) cells() []cell {
	out := make([]cell, 0, len(m.nodes)/2+len(m.region.parts))
	i := 0
	for _, r := range m.region.parts {
		for i < len(m.nodes) && m.nodes[i].x < r.lo {
			i++
		}
		width := (r.hi - r.lo) / 8
		if i+1 < len(m.nodes) && m.nodes[i+1].x < r.hi {
			width = 2 * (m.nodes[i+1].x - m.nodes[i].x)
		}
		for a := r.lo; a < r.hi; a += width {
			out = append(out, cell{a, width, m.cell(a, width)})
		}
	}
	return out
}

// cell integrates the density of x, in units of its height, over [a, a+width].
func (m *mixture) cell(a, width float64) float64 {
	sum := 0.0
	for i, t := range legendreNodes {
		sum += legendreWeights[i] * math.Exp(m.logWeight(a+width*t))
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
		next := t - excess/math.Exp(m.logWeight(a+t))
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
