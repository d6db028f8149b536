package posterior

// Update takes in a reading
//
//	y = offset + levelCoefficient level + sum of coefficient state + e,  e ~ N(0, variance)
//
// with variance above 0 and levelCoefficient other than 0. Terms name states after
// the level, each at most once, and aren't kept.
func (f *Filter) Update(y, offset, levelCoefficient float64, terms []Term, variance float64) {
	f.UpdateFrom(0, y, offset, levelCoefficient, terms, variance)
}

// UpdateFrom is Update where an account is kept, under whose label e counts.
func (f *Filter) UpdateFrom(label int, y, offset, levelCoefficient float64, terms []Term, variance float64) {
	h := f.space[:f.n]
	clear(h)
	innovation := twoDiff(y, offset)
	for _, t := range terms {
		h[t.State] = t.Coefficient
		innovation = innovation.minus(f.mean[t.State].pair().times(t.Coefficient))
	}
	h[0] = levelCoefficient
	if f.vague {
		f.settle(label, innovation, h, variance)
		return
	}
	innovation = innovation.minus(f.mean[0].pair().times(levelCoefficient))
	gain, total := f.weigh(h, variance)
	step := innovation.value() / total
	for i := range gain {
		f.mean[i] = f.mean[i].Plus(gain[i] * step)
	}
	if f.account != nil {
		f.account.update(label, f.space[:f.n], gain, total, variance)
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
		f.d[j] *= before * per
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
