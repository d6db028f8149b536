package posterior

import "math"

// shrink moves each point x to about + left (x - about), 0 < left < 1. This is exact:
// the lattice shrinks with its points.
func (l *lattice) shrink(about Level, left float64) {
	l.origin = about.Plus(l.origin.Minus(about) * left)
	l.step *= left
	l.raise(-math.Log(left))
}

// spread adds to the level an independent normal step of variance q >= 0.
func (l *lattice) spread(q float64) {
	if q == 0 || l.flat() {
		return
	}
	// A step much longer than the lattice is wide needs no lattice so fine. Lumping
	// adds half the square of the step to the variance, which q then lacks.
	whole := false
	for q > lumped*lumped*l.step*l.step {
		q -= l.step * l.step / 2
		l.lump()
		whole = true
	}
	if q >= l.step*l.step {
		l.convolve(q, whole)
	} else {
		l.nudge(q)
	}
	l.trim()
}

// lumped is how many steps of a lattice a standard deviation has at most. Lumping
// leaves the fourth cumulant: at z standard deviations a relative error of (z /
// lumped)^4 / 24.
const lumped = 256

// lump halves the number of points. Each keeps its mass and half of that of each
// neighbour that goes, so mass and mean stay. Derived for this package.
func (l *lattice) lump() {
	s := l.stretch(2, math.Inf(-1))
	for i, n := 0, len(s.logs); i < 2; i++ { // no mass comes from where the lattice ends
		if !l.open[0] {
			s.logs[i] = lowest
		}
		if !l.open[1] {
			s.logs[n-1-i] = lowest
		}
	}
	first := s.first + 1
	first += first & 1
	at := first - s.first
	b := s.bare(first/2, (len(s.logs)-at-1+1)/2)
	b.step *= 2
	for i := range b.logs {
		k := at + 2*i
		top := max(s.logs[k], max(s.logs[k-1], s.logs[k+1]))
		w := [3]float64{math.Exp(s.logs[k-1]-top) / 2, math.Exp(s.logs[k] - top), math.Exp(s.logs[k+1]-top) / 2}
		b.logs[i] = top + math.Log((w[0]+w[1]+w[2])/2)
		if s.mean != nil {
			var m moments
			for j, w := range w {
				m.add(w, s.mean[k-1+j]-s.mean[k], s.variance[k-1+j])
			}
			b.mean[i], b.variance[i] = m.about(s.mean[k])
		}
	}
	*l = b
}

// moments gathers the first two moments of normals with weights.
type moments struct{ weight, first, second float64 }

func (m *moments) add(weight, mean, variance float64) {
	m.weight += weight
	m.first += weight * mean
	m.second += weight * (variance + mean*mean)
}

// about returns mean and variance, the means having been taken from an origin.
func (m *moments) about(origin float64) (mean, variance float64) {
	d := m.first / m.weight
	return origin + d, max(0, m.second/m.weight-d*d)
}

// The five-point Gauss-Hermite rule for the standard normal: nodes 0 and sqrt(5 -+
// sqrt 10), weights 8/15 and (7 +- 2 sqrt 10) / 60 (Abramowitz & Stegun 1964, table
// 25.10, from memory; they match the moments to order 9).
var (
	hermiteNodes   = [2]float64{1.3556261799742659, 2.8569700138728056}
	hermiteWeights = [3]float64{8.0 / 15, 0.22207592200561263, 0.011257411327720693}
)

// nudge adds a normal step of variance q below the square of the lattice's step, too
// narrow for a sum over points: a Gauss-Hermite rule over the polynomial through
// seven points of the logarithm. So no term is negative, and a parabola remains one.
// The rule is off by 3e-5 s^10 for a slope of s by standard deviation of
// the step, so a step that is too long for the slopes is taken in parts.
func (l *lattice) nudge(q float64) {
	ratio := math.Sqrt(q) / l.step
	parts := 1.0
	if s := l.steepest(depthServed) * ratio; s > 1 {
		parts = math.Ceil(s * s)
	}
	for range int(parts) {
		l.step7(ratio / math.Sqrt(parts))
	}
}

// steepest returns the largest change between points no deeper than that, but for edges
// that the points don't resolve.
func (l *lattice) steepest(depth float64) float64 {
	floor, most := l.highest()-depth, 0.0
	for i, v := range l.logs[1:] {
		if change := math.Abs(v - l.logs[i]); v > floor && change < 4 {
			most = max(most, change)
		}
	}
	return most
}

// step7 is a part of nudge, of a standard deviation of so many steps.
func (l *lattice) step7(ratio float64) {
	s, floor := l.stretch(6, math.Inf(-1)), l.highest()-depthKept-depthServed
	out := s.bare(s.first+3, len(s.logs)-6)
	even, odd := interpolants(ratio*hermiteNodes[0]), interpolants(ratio*hermiteNodes[1])
	for i := range out.logs {
		w := s.logs[i : i+7 : i+7]
		sixth := w[0] + w[6] - 6*(w[1]+w[5]) + 15*(w[2]+w[4]) - 20*w[3]
		if !(math.Abs(sixth) < 1) || w[3] < floor {
			s.exchange(&out, i, ratio*ratio/2)
			continue
		}
		near, far := even.at(w), odd.at(w)
		v := [5]float64{math.Exp(far[0]), math.Exp(near[0]), 1, math.Exp(near[1]), math.Exp(far[1])}
		for k := range v {
			v[k] *= hermiteWeights[max(2-k, k-2)]
		}
		out.logs[i] = w[3] + math.Log(v[0]+v[1]+v[2]+v[3]+v[4])
		if s.mean != nil {
			s.mixNear(&out, i, v, even, odd)
		}
	}
	*l = out
}

// exchange is step7 for a point next to an edge between points, where no polynomial
// follows the logarithm, or beyond one: a share goes to either neighbour.
func (s *lattice) exchange(out *lattice, i int, share float64) {
	top := max(s.logs[i+2], s.logs[i+3], s.logs[i+4])
	var m moments
	out.logs[i] = s.logs[i+3]
	if s.mean != nil {
		out.mean[i], out.variance[i] = s.mean[i+3], s.variance[i+3]
	}
	for k, w := range [3]float64{share, 1 - 2*share, share} {
		w *= math.Exp(s.logs[i+2+k] - top)
		mean, variance := 0.0, 0.0
		if s.mean != nil {
			mean, variance = s.mean[i+2+k]-s.mean[i+3], s.variance[i+2+k]
		}
		m.add(w, mean, variance)
	}
	if m.weight == 0 {
		return
	}
	out.logs[i] = top + math.Log(m.weight)
	if s.mean != nil {
		out.mean[i], out.variance[i] = m.about(s.mean[i+3])
	}
}

// mixNear is mix for the five places from which point i of out is reached.
func (s *lattice) mixNear(out *lattice, i int, weights [5]float64, near, far interpolant) {
	var m moments
	mean, variance := s.mean[i:i+7], s.variance[i:i+7]
	m1, m2 := near.at(mean), far.at(mean)
	v1, v2 := near.at(variance), far.at(variance)
	means := [5]float64{m2[0], m1[0], 0, m1[1], m2[1]}
	variances := [5]float64{v2[0], v1[0], 0, v1[1], v2[1]}
	for k, w := range weights {
		m.add(w, means[k], max(0, variance[3]+variances[k]))
	}
	out.mean[i], out.variance[i] = m.about(mean[3])
}

// interpolant gives the polynomial through seven points at u steps to either side of
// the middle, less its value there: half the sum and half the difference of both
// are combinations of the sums and differences of points equally far.
type interpolant struct{ sum, difference [3]float64 }

// interpolants returns the coefficients (Lagrange: DLMF 3.3.1).
func interpolants(u float64) interpolant {
	var c interpolant
	for k := range 3 {
		a := float64(k + 1)
		w := u / a / 2
		for m := 1.0; m <= 3; m++ {
			if m != a {
				w *= (u*u - m*m) / (a*a - m*m)
			}
		}
		c.difference[k], c.sum[k] = w, w*u/a
	}
	return c
}

// at returns the polynomial's values below and above.
func (c *interpolant) at(w []float64) [2]float64 {
	sum, difference := 0.0, 0.0
	for k := range 3 {
		low, high := w[2-k], w[4+k]
		sum += c.sum[k] * ((low - w[3]) + (high - w[3]))
		difference += c.difference[k] * (high - low)
	}
	return [2]float64{sum - difference, sum + difference}
}
