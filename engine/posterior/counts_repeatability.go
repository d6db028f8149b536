package posterior

import "math"

// Repeatability returns what is known of r: its value if known; else median and
// probabilistically symmetric interval of its posterior, if that exists, and the
// standard deviation of the exact readings, sqrt(S / (n - 1)), from two on.
// Quantiles keep some 4 digits: ln p(w) is interpolated between the nodes.
func (c *Counts) Repeatability(p Prior, n Noise, b Bias, coverage float64) Repeatability {
	if n.Known {
		return Repeatability{Known: true, StandardDeviation: n.SD}
	}
	var out Repeatability
	if n.Absent {
		return out
	}
	if k := &c.shared; k.count > 1 {
		out.HasEstimate = true
		out.Estimate = math.Sqrt(k.deviation() / float64(k.count-1))
	}
	s := c.standing(p, n)
	if !s.mixed && n.Worth > 0 {
		s = standing{proper: true, falls: n.Worth} // readings don't matter to r
		p = Prior{SD: 1}
		c = new(Counts)
	}
	if !s.proper || !s.mixed && n.Worth == 0 {
		return out
	}
	e := c.centred(p, n, b)
	q := quantilesOf(e.nodesOf(n, s.falls), (1-coverage)/2, 0.5, (1+coverage)/2)
	out.HasMedian = true
	out.Lower, out.Median, out.Upper = n.Floor+math.Exp(q[0]), n.Floor+math.Exp(q[1]), n.Floor+math.Exp(q[2])
	return out
}

// quantilesOf returns the quantiles of w for ascending probabilities.
func quantilesOf(nodes []ruled, p ...float64) []float64 {
	cells := cellsOf(nodes)
	whole := 0.0
	for i := range cells {
		whole += cells[i].within(1)
	}
	q := make([]float64, 0, len(p))
	run := 0.0
	for i := range cells {
		mass := cells[i].within(1)
		for len(q) < len(p) && (run+mass >= p[len(q)]*whole || i == len(cells)-1) {
			q = append(q, cells[i].at(p[len(q)]*whole-run))
		}
		run += mass
	}
	return q
}

// gap is the interval between two nodes, where ln p(w) is the cubic through those two
// and their neighbours (Lagrange; DLMF 3.3(i)).
type gap struct {
	first    int // of the four nodes
	w, width float64
	f        [4]float64 // ln p at -1, 0, 1, 2 widths, less the top
}

// cellsOf returns the gaps between nodes of the same rule.
func cellsOf(nodes []ruled) []gap {
	top := math.Inf(-1)
	for i := range nodes {
		top = math.Max(top, nodes[i].logWeight)
	}
	var out []gap
	for i := 1; i+2 < len(nodes); i++ {
		g := gap{first: i - 1, w: nodes[i].w, width: nodes[i].step}
		near := true
		for k := range g.f {
			g.f[k] = nodes[i-1+k].logWeight - top
			near = near && math.Abs(nodes[i-1+k].w-g.w-float64(k-1)*g.width) < 0.1*g.width
		}
		if near {
			out = append(out, g)
		}
	}
	return out
}

// log returns the cubic at t widths from the left node.
func (g *gap) log(t float64) float64 { return cubic(&g.f, t) }

// cubic returns the cubic through f at -1, 0, 1 and 2.
func cubic(f *[4]float64, t float64) float64 {
	a, b, c, d := t+1, t, t-1, t-2
	return -f[0]*b*c*d/6 + f[1]*a*c*d/2 - f[2]*a*b*d/2 + f[3]*a*b*c/6
}

// within returns the mass of the first t widths.
func (g *gap) within(t float64) float64 {
	sum := 0.0
	for i, x := range legendreNodes {
		sum += legendreWeights[i] * math.Exp(g.log(t*x))
	}
	return sum * t * g.width
}

// at returns the w up to which the gap holds mass, by bisection.
func (g *gap) at(mass float64) float64 {
	lo, hi := 0.0, 1.0
	for range 40 {
		t := (lo + hi) / 2
		if g.within(t) < mass {
			lo = t
		} else {
			hi = t
		}
	}
	return g.w + lo*g.width
}
