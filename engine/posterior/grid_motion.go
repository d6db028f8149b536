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
	for q > lumped*lumped*l.step*l.step {
		q -= l.step * l.step / 2
		l.lump()
	}
	if q >= l.step*l.step {
		l.convolve(q)
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
	return origin + d, m.second/m.weight - d*d
}

// source is what a lattice is summed over: masses at every stride-th point.
type source struct {
	lattice
	stride int
	top    float64
	mass   []float64 // times exp(-top), 0 between
	reach  int       // how far away masses count
}

// stride returns how many points apart those may be that a sum with a normal density
// of standard deviation sd, at least a step, is taken over: both together need resolve
// their product only.
func (l *lattice) stride(sd, top float64) int {
	stride := 1
	for 2*stride <= 64 && float64(2*stride)*l.step <= 0.8*sd && l.resolves(2*stride, top) {
		stride *= 2
	}
	return stride
}

// source returns l, which ends at a depth, as what is spread by a variance q. What comes out
// at x is made of what lies near x + q d ln p / dx.
func (l *lattice) source(q float64, reach int) source {
	top, sd := l.highest(), math.Sqrt(q)
	s := source{lattice: l.stretch(reach, top-depthKept-depthServed), top: top, stride: l.stride(sd, top)}
	s.mass = make([]float64, len(s.logs))
	scale := float64(s.stride) * l.step / math.Sqrt(2*math.Pi*q)
	for i := 0; i < len(s.logs); i += s.stride {
		s.mass[i] = math.Exp(s.logs[i]-top) * scale
	}
	tilt := q / (l.step * l.step) * s.steepest(depthKept)
	s.reach = int(min(tilt+7.5*sd/l.step+1, float64(len(s.logs)+2*reach)))
	return s
}

// convolve adds a normal step of variance q, at least the square of the lattice's
// step: the sum over points of their masses times the normal density. All terms
// are positive, so tails keep their relative accuracy. What comes out is tabulated as
// coarsely as its own width allows.
func (l *lattice) convolve(q float64) {
	sd := math.Sqrt(q)
	reach := int(math.Ceil(10*sd/l.step)) + 8
	s := l.source(q, reach)
	out := l.output(sd, reach)
	kernel := normalKernel(l.step/sd, s.reach+1)
	offset := out.first*out.stride - s.first
	s.fill(&out.lattice, kernel, offset, out.stride, out.inner, len(out.logs)-out.inner)
	*l = out.lattice
}

// output is where a convolution is tabulated: the inner points, which cover the
// lattice before it, and more on either side while what comes out isn't too deep.
type output struct {
	lattice
	stride, inner int
}

// output lays a lattice of a step that is a power of two times l's, reaching as many of
// l's points beyond either side.
func (l *lattice) output(sd float64, reach int) output {
	o := output{stride: 1}
	width := math.Hypot(float64(len(l.logs))*l.step, 19*sd)
	for float64(4*o.stride)*l.step <= sd && width > float64(o.stride*(fewestPoints+64))*l.step {
		o.stride *= 2
	}
	low := floorDiv(l.first-reach, o.stride)
	high := floorDiv(l.first+len(l.logs)-1+reach, o.stride) + 1
	o.lattice = l.bare(low, high-low)
	o.step *= float64(o.stride)
	o.inner = reach / o.stride
	return o
}

// floorDiv divides by n > 0, rounding down.
func floorDiv(a, n int) int {
	q := a / n
	if a%n < 0 {
		q--
	}
	return q
}

// normalKernel returns exp(-(i h)^2 / 2) for i < n, by the recurrence of its ratios:
// relative error i^2 units in the last place.
func normalKernel(h float64, n int) []float64 {
	k := make([]float64, n)
	value, ratio, change := 1.0, math.Exp(-h*h/2), math.Exp(-h*h)
	for i := range k {
		k[i] = value
		value *= ratio
		ratio *= change
	}
	return k
}

// fill tabulates the convolution in out, point i of which is offset + i stride of
// s's points from s's first. The inner points come first; then outwards from them until
// it is too deep.
func (s *source) fill(out *lattice, kernel []float64, offset, stride, inner, outer int) {
	top := math.Inf(-1)
	at := func(i int) float64 {
		s.value(out, i, offset+i*stride, kernel)
		return out.logs[i]
	}
	for i := inner; i < outer; i++ {
		top = max(top, at(i))
	}
	low, high := inner, outer
	for low > 0 && (out.open[0] || out.logs[low] > top-depthKept) {
		low--
		top = max(top, at(low))
	}
	for high < len(out.logs) && (out.open[1] || out.logs[high-1] > top-depthKept) {
		top = max(top, at(high))
		high++
	}
	out.cut(low, high)
}

// value tabulates the convolution at point i of out, which is at point k of s.
func (s *source) value(out *lattice, i, k int, kernel []float64) {
	lo := max(0, k-s.reach)
	lo += (s.stride - lo%s.stride) % s.stride
	hi := min(len(s.mass), k+s.reach+1)
	if out.mean != nil {
		s.mix(out, i, k, lo, hi, kernel)
		return
	}
	// Sums apart, as each addition waits for the one before.
	var even, odd float64
	j, stride := lo, s.stride
	for ; j+stride <= k && j+stride < hi; j += 2 * stride {
		even += s.mass[j] * kernel[k-j]
		odd += s.mass[j+stride] * kernel[k-j-stride]
	}
	for ; j < hi && j <= k; j += stride {
		even += s.mass[j] * kernel[k-j]
	}
	for ; j+stride < hi; j += 2 * stride {
		even += s.mass[j] * kernel[j-k]
		odd += s.mass[j+stride] * kernel[j+stride-k]
	}
	if j < hi {
		even += s.mass[j] * kernel[j-k]
	}
	out.logs[i] = s.top + math.Log(max(even+odd, nothing))
}

// nothing stands for a sum that is too small for a double.
const nothing = 1e-300

// mix is value with the bias: given a point, it is a mixture of what it was given
// those that the level may have come from, and held as the normal of the same mean and
// variance. It is one if no reading but exact ones was met.
func (s *source) mix(out *lattice, i, k, lo, hi int, kernel []float64) {
	var m moments
	origin := s.mean[min(max(k, 0), len(s.mean)-1)]
	for j := lo; j < hi; j += s.stride {
		m.add(s.mass[j]*kernel[max(k-j, j-k)], s.mean[j]-origin, s.variance[j])
	}
	out.logs[i] = s.top + math.Log(max(m.weight, nothing))
	if m.weight == 0 {
		out.mean[i], out.variance[i] = origin, s.variance[min(max(k, 0), len(s.mean)-1)]
		return
	}
	out.mean[i], out.variance[i] = m.about(origin)
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
	for range int(min(parts, 1000)) {
		l.step7(ratio / math.Sqrt(parts))
	}
}

// steepest returns the largest change between points no deeper than that.
func (l *lattice) steepest(depth float64) float64 {
	floor, most := l.highest()-depth, 0.0
	for i, v := range l.logs[1:] {
		if v > floor {
			most = max(most, math.Abs(v-l.logs[i]))
		}
	}
	return most
}

// step7 is a part of nudge, of a standard deviation of so many steps.
func (l *lattice) step7(ratio float64) {
	s := l.stretch(6, math.Inf(-1))
	out := s.bare(s.first+3, len(s.logs)-6)
	even, odd := interpolants(ratio*hermiteNodes[0]), interpolants(ratio*hermiteNodes[1])
	for i := range out.logs {
		w := s.logs[i : i+7 : i+7]
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
