package posterior

import "math"

// Update takes in a reading
//
//	y = offset + levelCoefficient level + sum of coefficient state + e,  e ~ N(0, variance)
//
// with variance above 0 and levelCoefficient other than 0. Terms name states after
// the level, each at most once, and aren't kept.
func (f *Filter) Update(y, offset, levelCoefficient float64, terms []Term, variance float64) Surprise {
	return f.UpdateFrom(y, offset, levelCoefficient, terms, White{Variance: variance})
}

// Surprise is how far a reading was off what those before foretold, and the variance of
// that by the model: 0 where nothing was foretold.
type Surprise struct{ Innovation, Variance float64 }

// Score returns the innovation in standard deviations, N(0, 1) under the model, and whether
// anything was foretold.
func (s Surprise) Score() (z float64, ok bool) {
	return s.Innovation / math.Sqrt(s.Variance), s.Variance > 0
}

// LogDensity returns the logarithm of the density of the reading, given those before;
// 0 where nothing was foretold, as the first reading of a flat level has the same
// density whatever its noise (Harvey 1989, 3.4, prediction error decomposition, from memory).
func (s Surprise) LogDensity() float64 {
	if s.Variance == 0 {
		return 0
	}
	return -(s.Innovation*s.Innovation/s.Variance + math.Log(2*math.Pi*s.Variance)) / 2
}

// White is the noise of one reading: its variance at the level as predicted, the
// parts that grow with the level, and the label under which it counts where an
// account is kept.
type White struct {
	Variance float64
	Relative float64 // Variance contains Relative^2 times the mean square of the level
	// Gain and Scale say that the terms contain an error of variance (Gain Scale)^2
	// that is met for the first time, and is (Gain level)^2 in truth.
	Gain, Scale float64
	Label       int
}

// UpdateFrom is Update with a noise that may depend on the level. Then the reading
// says something of the level by how far it is off, too, see lean.
func (f *Filter) UpdateFrom(y, offset, levelCoefficient float64, terms []Term, white White) Surprise {
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
		return Surprise{}
	}
	innovation = innovation.minus(f.mean[0].pair().times(levelCoefficient))
	var before regression
	if white.grows() {
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
	if f.account != nil {
		f.account.update(f.account.white(white.Label), f.space[:f.n], gain, total, variance)
	}
	if white.grows() {
		f.lean(&before, white)
	}
	return Surprise{innovation.value(), total}
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
