package posterior

import "math"

// Foretell returns the probabilities that the next indication falls below y's lower end
// and above its upper one; together 1 if y is a value. Not ok while the level is
// improper. Relative accuracy 1e-4 down to 1e-17, as deep as points are held; beyond that
// normal scores to 1 % of themselves. Where readings may be outliers, 1e-4 down to 1e-12;
// beyond that what is returned is too small to matter but no more is promised of it.
func (g *Grid) Foretell(y Indication, noise Spread) (below, above float64, ok bool) {
	if !g.field.proper() {
		return 0, 0, false
	}
	l := &g.field
	k := l.likelihood(Indication{y.Lower, y.Upper}, noise, g.bias.Mean)
	f := foreteller{lattice: l}
	for i, sd := range [2]float64{noise.SD, noise.SD * noise.Inflation} {
		weight := noise.OutlierProbability
		if i == 0 {
			weight = 1 - weight
		}
		if weight == 0 {
			continue
		}
		lo, hi := f.tails(k.lower, sd)
		below += weight * lo
		if !y.Exact() {
			_, hi = f.tails(k.upper, sd)
		}
		above += weight * hi
	}
	return below, above, true
}

// foreteller keeps what Foretell computes once.
type foreteller struct {
	*lattice
	density *density
}

// tails returns the probabilities below and above y from the origin, of the belief with
// a noise. A noise narrower than a step is taken by the Gauss-Hermite rule over
// the belief's own tails, any other by the sum over points.
func (f *foreteller) tails(y, sd float64) (below, above float64) {
	switch {
	case math.IsInf(y, 0):
		return atInfinity(y, lower), atInfinity(y, upper)
	case sd < f.step:
		if f.density == nil {
			f.density = newDensity(*f.lattice)
		}
		for k := -2; k <= 2; k++ {
			w, at := hermiteWeights[max(k, -k)], y
			if k != 0 {
				at += math.Copysign(hermiteNodes[max(k, -k)-1], float64(k)) * sd
			}
			below += w * math.Exp(f.density.logTail(at, lower))
			above += w * math.Exp(f.density.logTail(at, upper))
		}
		return below, above
	}
	stride, sum := f.stride(sd, f.highest()), 0.0
	l := f.reaching(y, sd)
	for i := 0; i < len(l.logs); i += stride {
		z := (y - l.x(i)) / sd
		small, p := math.Erfc(math.Abs(z)*sqrtHalf.hi)/2, math.Exp(l.logs[i])
		sum += p
		if z < 0 {
			below, above = below+p*small, above+p*(1-small)
		} else {
			below, above = below+p*(1-small), above+p*small
		}
	}
	return below / sum, above / sum
}

// reaching returns the lattice, stretched towards y as far as what lies there weighs more
// than the noise of what is nearer.
func (f *foreteller) reaching(y, sd float64) *lattice {
	l := f.lattice
	lo, hi := l.x(0)-sd, l.x(len(l.logs)-1)+sd
	if y >= lo && y <= hi {
		return l
	}
	far := max(lo-y, y-hi)
	s := l.stretch(int(min(far/l.step, mostPoints)), -700)
	return &s
}
