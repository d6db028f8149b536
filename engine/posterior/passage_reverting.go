package posterior

import (
	"math"
	"sort"
)

// A reverting level is dx = -k (x - M) dt + sqrt(2 k V) dW. The probability
// u(x, t) that it has crossed a given limit first by t from x solves Kolmogorov's
// backward equation
//
//	u_t = k V u_xx - k (x - M) u_x
//
// with u = 1 on that limit, 0 on the other and 0 inside at t = 0 (Cox & Miller
// 1965, 5.10; Gardiner 2009, Stochastic Methods, 5.2; from memory). One solution serves every
// start, so that a belief of any width, also none, is integrated afterwards.
//
// In space: exponential fitting (Scharfetter & Gummel 1969; Il'in 1969), which
// keeps all rates positive where the drift outweighs the diffusion, on a grid
// that is dense at the limits. In time: the two-stage L-stable diagonally
// implicit rule (Alexander 1977, SIAM Journal on Numerical Analysis 14,
// 1006-1021) with steps that grow with time, as the layers at the limits grow as
// sqrt(t).
const (
	revertNodes  = 500
	revertGrowth = 1.04
	revertSteps  = 600
	reach8       = 8.5 // standard deviations beyond which nothing is looked for: 1e-17
)

// reverting is the equation on its grid.
type reverting struct {
	x           []float64
	left, right []float64 // rates at which a level at node i goes to its neighbours; 0 on a limit
	u           [2][]float64
	rate        [2][]float64
	pivot       []float64
}

// revert solves for the table.
func (p *Passage) revert() *passageTable {
	now := p.now()
	lo, hi, absorbing, some := p.domain()
	if !some {
		return tabulate([]float64{0, p.horizon}, []Crossing{now, now})
	}
	m := p.course.Motion
	layer := math.Sqrt(2 * m.Variance * -math.Expm1(-m.Rate*p.horizon))
	g := newReverting(m, grid(lo, hi, absorbing, 1e-3*math.Min(layer, hi-lo)), absorbing)
	weights := p.hats(g.x)
	times, crossings := []float64{0}, []Crossing{now}
	growth := revertGrowth
	t := 1e-6 * math.Min(p.horizon, 1/m.Rate)
	if long := math.Pow(p.horizon/t, 1.0/revertSteps); long > growth {
		growth = long
	}
	for before := 0.0; before < p.horizon; t *= growth {
		t = math.Min(t, p.horizon)
		g.step(t - before)
		c := now
		for i, w := range weights {
			c.Below += w * g.u[0][i]
			c.Above += w * g.u[1][i]
		}
		times, crossings = append(times, t), append(crossings, c)
		before = t
	}
	return tabulate(times, crossings)
}

// domain returns the levels that may be visited from a start inside the limits,
// whether each end is a limit, and false if there is no such start.
func (p *Passage) domain() (lo, hi float64, absorbing [2]bool, some bool) {
	c, l, m := p.course, p.limits, p.course.Motion
	lo, hi = c.Mean-reach8*c.SD, c.Mean+reach8*c.SD
	if l.HasLower {
		lo = math.Max(lo, l.Lower)
	}
	if l.HasUpper {
		hi = math.Min(hi, l.Upper)
	}
	if lo > hi {
		return 0, 0, absorbing, false
	}
	gone := -math.Expm1(-m.Rate * p.horizon)
	spread := reach8 * math.Sqrt(m.Variance*-math.Expm1(-2*m.Rate*p.horizon))
	lo = math.Min(lo, lo+(m.Mean-lo)*gone) - spread
	hi = math.Max(hi, hi+(m.Mean-hi)*gone) + spread
	if l.HasLower && lo <= l.Lower {
		lo, absorbing[0] = l.Lower, true
	}
	if l.HasUpper && hi >= l.Upper {
		hi, absorbing[1] = l.Upper, true
	}
	return lo, hi, absorbing, lo < hi
}

// grid spreads nodes evenly in the sum of x and, for each limit, the logarithm of
// the distance from it plus finest.
func grid(lo, hi float64, absorbing [2]bool, finest float64) []float64 {
	span := hi - lo
	whole := math.Log1p(span / finest)
	spacing := func(d float64) float64 { // d is the distance from lo over span
		s := d
		if absorbing[0] {
			s += math.Log1p(d*span/finest) / whole
		}
		if absorbing[1] {
			s += 1 - math.Log1p((1-d)*span/finest)/whole
		}
		return s
	}
	x := make([]float64, revertNodes+1)
	top := spacing(1)
	for i := range x {
		a, b := 0.0, 1.0
		for range 50 {
			if middle := (a + b) / 2; spacing(middle)/top < float64(i)/revertNodes {
				a = middle
			} else {
				b = middle
			}
		}
		x[i] = lo + span*b
	}
	x[0], x[revertNodes] = lo, hi
	return distinct(x)
}

// distinct drops the nodes that rounding made equal.
func distinct(x []float64) []float64 {
	out := x[:1]
	for _, v := range x[1:] {
		if v > out[len(out)-1] {
			out = append(out, v)
		}
	}
	return out
}

// newReverting sets the rates. An end that is no limit lets nothing through: no
// path of a start that matters comes there.
func newReverting(m Motion, x []float64, absorbing [2]bool) *reverting {
	n := len(x)
	g := &reverting{x: x, left: make([]float64, n), right: make([]float64, n), pivot: make([]float64, n)}
	for j := range g.u {
		g.u[j], g.rate[j] = make([]float64, n), make([]float64, n)
	}
	diffusion := m.Rate * m.Variance
	for i := range x {
		drift := -m.Rate * (x[i] - m.Mean)
		var before, after float64
		if i > 0 {
			before = x[i] - x[i-1]
		}
		if i < n-1 {
			after = x[i+1] - x[i]
		}
		cell := (before + after) / 2
		if before > 0 {
			g.left[i] = diffusion / (before * cell) * bernoulli(drift*before/diffusion)
		}
		if after > 0 {
			g.right[i] = diffusion / (after * cell) * bernoulli(-drift*after/diffusion)
		}
	}
	if absorbing[0] {
		g.u[0][0], g.right[0] = 1, 0
	}
	if absorbing[1] {
		g.u[1][n-1], g.left[n-1] = 1, 0
	}
	return g
}

// bernoulli returns z / (e^z - 1).
func bernoulli(z float64) float64 {
	if math.Abs(z) < 1e-8 {
		return 1 - z/2
	}
	return z / math.Expm1(z)
}

// step moves both probabilities by dt:
//
//	(1 - g dt A) a = u,  (1 - g dt A) u' = u + (1 - g) dt A a,  g = 1 - 1/sqrt 2.
func (g *reverting) step(dt float64) {
	const gamma = 1 - 0.70710678118654752440
	h := gamma * dt
	n := len(g.x)
	// The elimination's pivots are the same for all four systems.
	g.pivot[0] = 1 + h*g.right[0]
	for i := 1; i < n; i++ {
		g.pivot[i] = 1 + h*(g.left[i]+g.right[i]) - h*g.left[i]*h*g.right[i-1]/g.pivot[i-1]
	}
	for j := range g.u {
		u, old := g.u[j], g.rate[j]
		copy(old, u)
		g.solve(u, h)
		for i := range u {
			u[i] = old[i] + (1-gamma)/gamma*(u[i]-old[i])
		}
		g.solve(u, h)
	}
}

// solve replaces u by the solution of (1 - h A) v = u.
func (g *reverting) solve(u []float64, h float64) {
	n := len(u)
	for i := 1; i < n; i++ {
		u[i] += h * g.left[i] / g.pivot[i-1] * u[i-1]
	}
	u[n-1] /= g.pivot[n-1]
	for i := n - 2; i >= 0; i-- {
		u[i] = (u[i] + h*g.right[i]*u[i+1]) / g.pivot[i]
	}
}

// hats returns the integrals over the level's belief of the functions that are 1
// at one node, 0 at all others and straight between them: with them a polygon is
// integrated exactly.
func (p *Passage) hats(x []float64) []float64 {
	weights := make([]float64, len(x))
	mean, sd := p.course.Mean, p.course.SD
	if sd == 0 {
		i := min(max(sort.SearchFloat64s(x, mean), 1), len(x)-1)
		part := (mean - x[i-1]) / (x[i] - x[i-1])
		weights[i-1], weights[i] = 1-part, part
		return weights
	}
	for i := range len(x) - 1 {
		a, b := (x[i]-mean)/sd, (x[i+1]-mean)/sd
		if !(b > a) {
			continue
		}
		mass := normalBetween(pair{hi: a}, pair{hi: b}, b-a)
		// The mean place within the cell, from its left end, over its width.
		place := (math.Exp(logNormalDensity(a))-math.Exp(logNormalDensity(b)))/math.Sqrt(2*math.Pi) - a*mass
		right := math.Max(0, math.Min(mass, place/(b-a)))
		weights[i] += mass - right
		weights[i+1] += right
	}
	return weights
}
