package posterior

import "math"

// Update takes in a reading
//
//	y = offset + levelCoefficient level + sum of coefficient state + e,  e ~ N(0, variance)
//
// with variance above 0 and levelCoefficient other than 0. Terms name states after
// the level, each at most once, and aren't kept.
func (f *Filter) Update(y, offset, levelCoefficient float64, terms []Term, variance float64) {
	f.UpdateFrom(y, offset, levelCoefficient, terms, White{Variance: variance})
}

// White is the noise of one reading: its variance at the level as predicted, the
// part of it that is relative to the level, and the label under which it counts
// where an account is kept.
type White struct {
	Variance float64
	Relative float64 // Variance contains Relative^2 times the mean square of the level
	Label    int
}

// UpdateFrom is Update with a noise that may depend on the level. Then the reading
// says something of the level by how far it is off, too, see lean.
func (f *Filter) UpdateFrom(y, offset, levelCoefficient float64, terms []Term, white White) {
	variance := white.Variance
	h := f.space[:f.n]
	clear(h)
	innovation := twoDiff(y, offset)
	for _, t := range terms {
		h[t.State] = t.Coefficient
		innovation = innovation.minus(f.mean[t.State].pair().times(t.Coefficient))
	}
	h[0] = levelCoefficient
	if f.vague {
		f.settle(white.Label, innovation, h, variance)
		return
	}
	innovation = innovation.minus(f.mean[0].pair().times(levelCoefficient))
	var before regression
	if white.Relative != 0 {
		before = f.regress(innovation.value(), h)
	}
	gain, total := f.weigh(h, variance)
	step := innovation.value() / total
	for i := range gain {
		f.mean[i] = f.mean[i].Plus(gain[i] * step)
	}
	if total > sharp*variance {
		f.sharpen(twoDiff(y, offset), innovation.value(), gain, total, variance)
	}
	if white.Relative != 0 {
		f.lean(&before, white)
	}
	if f.account != nil {
		f.account.update(white.Label, f.space[:f.n], gain, total, variance)
	}
}

// regression is a reading, but for its white noise, given the level: normal with a
// mean that is linear in the level.
type regression struct {
	level      float64 // as predicted
	square     float64 // mean square of the level as predicted
	innovation float64
	slope      float64 // of the reading's mean by the level
	variance   float64 // that the other states leave
}

// regress returns the regression of a reading with coefficients h.
func (f *Filter) regress(innovation float64, h []float64) regression {
	var both, all, level float64
	for k := range f.n {
		s := 0.0
		for i := range k + 1 {
			s += h[i] * f.entry(i, k)
		}
		u := f.entry(0, k)
		both, all, level = both+s*f.d[k]*u, all+s*s*f.d[k], level+u*u*f.d[k]
	}
	m := f.mean[0].Value()
	r := regression{level: m, square: m*m + level, innovation: innovation, slope: h[0], variance: all}
	if level > 0 {
		r.slope = both / level
		r.variance = max(0, all-both*both/level)
	}
	return r
}

// Nodes and weights of the Gauss-Hermite rule of five points for a standard normal
// (Abramowitz & Stegun 1964, table 25.10, scaled by the square root of 2 and of pi, from memory;
// a test integrates polynomials with them).
var hermite = [...]struct{ node, weight float64 }{
	{-2.856970013872806, 0.011257411327720689}, {-1.355626179974266, 0.2220759220056126},
	{0, 0.5333333333333333}, {1.355626179974266, 0.2220759220056126}, {2.856970013872806, 0.011257411327720689},
}

// lean moves the means by what the reading says through its noise: to the mean of the
// level under the noise that depends on it, by a quadrature about the posterior
// with the noise as predicted (assumed-density filtering: Maybeck 1982, Stochastic
// Models, Estimation and Control vol. 2, 12.7, from memory).
func (f *Filter) lean(r *regression, white White) {
	at := f.mean[0].Value() - r.level
	spread := f.Covariance(0, 0)
	sd := math.Sqrt(spread)
	fixed := r.variance + white.Variance
	base := fixed - white.Relative*white.Relative*r.square
	var sum, moment float64
	for _, g := range hermite {
		x := at + sd*g.node
		level := r.level + x
		v := base + white.Relative*white.Relative*level*level
		off := r.innovation - r.slope*x
		w := g.weight * math.Sqrt(fixed/v) * math.Exp(-off*off/2*(1/v-1/fixed))
		sum, moment = sum+w, moment+w*sd*g.node
	}
	shift := moment / sum / spread
	for i := range f.mean {
		f.mean[i] = f.mean[i].Plus(f.Covariance(i, 0) * shift)
	}
}

// weigh updates the covariance by a reading with coefficients h, of which only the
// first f.n numbers of f.space are kept, and returns the gain times the
// variance of the innovation, and that.
func (f *Filter) weigh(h []float64, variance float64) (gain []float64, total float64) {
	projected, gain := f.space[f.n:2*f.n], f.space[2*f.n:3*f.n]
	for j := range projected {
		sum := h[j]
		for i, u := range f.column(j) {
			sum += u * h[i]
		}
		projected[j] = sum
	}
	total = variance
	per := 1 / total
	for j, p := range projected {
		v, before := f.d[j]*p, total
		total += p * v
		lambda := -p * per
		per = 1 / total
		f.d[j] = shrunk(f.d[j], before, per)
		gain[j] = v
		at := j * (j - 1) / 2
		c, head := f.u[at:at+j], gain[:j]
		for i, u := range c {
			c[i] = u + head[i]*lambda
			head[i] += u * v
		}
	}
	return gain, total
}

// settle is the first reading of a level of which nothing was known: the level is
// what is left of the reading, and its error the opposite of all others.
func (f *Filter) settle(label int, rest pair, h []float64, variance float64) {
	c := h[0]
	for j := 1; j < f.n; j++ {
		column := f.column(j)
		sum := h[j]
		for i := 1; i < j; i++ {
			sum += column[i] * h[i]
		}
		column[0] = -sum / c
	}
	f.d[0], f.mean[0], f.vague = variance/(c*c), levelOf(rest.over(c)), false
	if f.account != nil {
		f.account.settle(label, h, variance)
	}
}
