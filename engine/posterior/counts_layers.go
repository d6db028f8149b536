package posterior

import "math"

// layer is the distribution of eta where r is given: a hill, or normal without one.
type layer struct {
	r       float64
	weight  float64 // of the layer in the whole; they sum to 1
	hill    *hill
	mean    float64 // of eta, from the origin
	sd      float64
	noise   float64 // standard deviation of what is added to gain eta
	logMass float64 // ln of the integral over eta of prior times likelihood
}

// layers is a mixture over r of what gain eta + noise, seen from the origin, may be:
// the level, which given eta is normal, or the next indication.
type layers struct {
	origin  Level
	gain    float64
	all     []layer
	scale   float64
	hasMean bool
	hasSD   bool
	known   bool  // r is: there is one layer
	index   []int // of the nodes' layers in all
	ridge   *ridge
}

// layerAt returns the layer of r, without a weight, its polynomials as good as smooth
// says.
func (e *evidence) layerAt(r, smooth float64) layer {
	c := e.given(r, nil)
	if len(c.edges) == 0 {
		return layer{r: r, mean: c.mean, sd: 1 / math.Sqrt(c.weight), logMass: c.height + logRootTwoPi - math.Log(c.weight)/2}
	}
	g := newHill(c.log, c.start, c.scale, smooth)
	return layer{r: r, hill: g, mean: g.mean, sd: g.sd, logMass: g.top + math.Log(g.mass)}
}

// tail returns the probability of more, or less, than d for a layer.
func (k *layer) tail(d, gain float64, s side) float64 {
	switch {
	case k.hill == nil:
		return normalTail(pair{hi: float64(s) * (d - gain*k.mean) / math.Hypot(gain*k.sd, k.noise)})
	case k.sharp(gain):
		return k.hill.tail(d/gain, s)
	}
	return math.Exp(k.logTail(d, gain, s))
}

// logTail returns the logarithm of tail, also where that vanishes.
func (k *layer) logTail(d, gain float64, s side) float64 {
	switch {
	case k.hill == nil:
		return logNormalTail(float64(s) * (d - gain*k.mean) / math.Hypot(gain*k.sd, k.noise))
	case k.sharp(gain):
		return k.hill.logTail(d/gain, s)
	}
	return k.average(gain, d, func(x float64) float64 {
		return logNormalTail(float64(s) * (d - gain*x) / k.noise)
	})
}

// sharp tells whether the noise is too small to matter.
func (k *layer) sharp(gain float64) bool { return k.noise <= 1e-4*gain*k.sd }

// between returns the probability of [a, b] for a layer.
func (k *layer) between(a, b, gain float64) float64 {
	if k.hill == nil {
		sd := math.Hypot(gain*k.sd, k.noise)
		return normalBetween(pair{hi: (a - gain*k.mean) / sd}, pair{hi: (b - gain*k.mean) / sd}, (b-a)/sd)
	}
	if k.sharp(gain) {
		return k.hill.between(a/gain, b/gain)
	}
	return math.Exp(k.average(gain, a+(b-a)/2, func(x float64) float64 {
		return logBetween((a-gain*x)/k.noise, (b-gain*x)/k.noise, (b-a)/k.noise)
	}))
}

// average returns ln of the mean over eta of exp(f), f concave and largest about where
// gain eta is d: the product is a hill again.
func (k *layer) average(gain, d float64, f func(float64) float64) float64 {
	v, w := gain*gain*k.sd*k.sd, k.noise*k.noise
	if z := math.Abs(d-gain*k.mean) / math.Sqrt(v+w); z > farOut {
		return math.Min(0, f(k.mean)*w/(v+w)) // both are normal out there, and this is e^-5e5
	}
	start := k.mean + gain*k.sd*k.sd/(v+w)*(d-gain*k.mean)
	scale := k.sd * k.noise / math.Sqrt(v+w)
	g := newHill(func(x float64) float64 { return k.hill.log(x) + f(x) }, start, scale, rough)
	return g.top + math.Log(g.mass/k.hill.mass)
}

// farOut is how many standard deviations away no probability is left.
const farOut = 1e3

// rough is how smooth the polynomials of a product of a hill must be.
const rough = 1e-5

// posterior computes the moments. Where the weights fall as a power of r the sums
// for the moments are closed as geometric series: closeMean and closeSD are the factors
// of the last layer's contribution by which they go on.
func (l *layers) posterior(closeMean, closeSD float64) Posterior {
	last := len(l.all) - 1
	mean := 0.0
	for i := range l.all {
		mean += l.all[i].weight * l.gain * l.all[i].mean
	}
	mean += closeMean * l.all[last].weight * (l.gain*l.all[last].mean - mean)
	variance, part := 0.0, 0.0
	for i := range l.all {
		k := &l.all[i]
		d := math.Hypot(math.Hypot(l.gain*k.sd, k.noise), l.gain*k.mean-mean)
		part = k.weight * d * d
		variance += part
	}
	l.scale = math.Sqrt(variance + closeSD*part)
	return Posterior{form: FormGrid, location: l.origin.Plus(mean), scale: l.scale, shape: l}
}

func (l *layers) moments() (hasMean, hasSD bool) { return l.hasMean, l.hasSD }

// tail returns P(X > x), or P(X < x) for the lower side.
func (l *layers) tail(x float64, s side) float64 {
	switch {
	case math.IsNaN(x):
		return math.NaN()
	case math.IsInf(x, int(s)):
		return 0
	case math.IsInf(x, 0):
		return 1
	}
	return l.beyond(LevelOf(x).Minus(l.origin), s)
}

// beyond is tail, at a distance from the origin. Layers that can't change the sum by
// 1e-9 of it are left out.
func (l *layers) beyond(d float64, s side) float64 {
	if l.ridge != nil {
		return math.Min(1, l.ridge.tail(l.all, d, l.gain, s))
	}
	sum := 0.0
	for i := range l.all {
		k := &l.all[i]
		if k.weight > 1e-11*sum {
			sum += k.weight * k.tail(d, l.gain, s)
		}
	}
	return math.Min(1, sum)
}

// between returns P(lo <= X <= hi), lo < hi.
func (l *layers) between(lo, hi float64) float64 {
	if math.IsInf(lo, -1) {
		return l.tail(hi, lower)
	}
	if math.IsInf(hi, 1) {
		return l.tail(lo, upper)
	}
	a, b := LevelOf(lo).Minus(l.origin), LevelOf(hi).Minus(l.origin)
	if l.ridge != nil {
		for _, s := range [2]side{lower, upper} {
			if p, q := l.beyond(a, s), l.beyond(b, s); math.Max(p, q) < 0.6 && math.Abs(p-q) > 1e-6*(p+q) {
				return math.Abs(p - q)
			}
		}
	}
	sum := 0.0
	for i := range l.all {
		sum += l.all[i].weight * l.all[i].between(a, b, l.gain)
	}
	return math.Min(1, sum)
}

// quantile returns the point that cuts off the tail p <= 1/2; see mixture.quantile
// for why it goes by asinh of a distance.
func (l *layers) quantile(p float64, s side) float64 {
	k := l.heaviest()
	centre, unit := l.gain*k.mean, math.Hypot(l.gain*k.sd, k.noise)
	target := math.Log(p)
	distance := func(t float64) float64 { return float64(s) * math.Sinh(t) * unit }
	t := zero(math.Asinh(-normalQuantile(p)), func(t float64) float64 {
		return math.Log(math.Max(math.SmallestNonzeroFloat64, l.beyond(centre+distance(t), s))) - target
	})
	return l.origin.Plus(centre + distance(t)).Value()
}

// heaviest returns the layer of the largest weight.
func (l *layers) heaviest() *layer {
	k := &l.all[0]
	for i := range l.all {
		if l.all[i].weight > k.weight {
			k = &l.all[i]
		}
	}
	return k
}

// exponentialMoments returns mean and standard deviation of exp(X). They exist where
// r is known, since normal tails bound eta then; ok is false where r is learned, or
// they are out of range.
//
//	E exp(k X) = exp(k origin + k^2 noise^2 / 2) E exp(k gain eta)
//
// and exp(h + k gain eta) is a hill (derived for this package).
func (l *layers) exponentialMoments() (mean, sd float64, ok bool) {
	if !l.known {
		return math.NaN(), math.NaN(), false
	}
	first, second := l.logMoment(1), l.logMoment(2)
	mean = math.Exp(first)
	sd = mean * math.Sqrt(math.Max(0, math.Expm1(second-2*first)))
	return mean, sd, !math.IsInf(mean, 0) && !math.IsInf(sd, 0)
}

// logMoment returns ln E exp(k X).
func (l *layers) logMoment(k float64) float64 {
	a, slope := &l.all[0], k*l.gain
	fixed := k*l.origin.Value() + k*k*a.noise*a.noise/2
	if a.hill == nil {
		return fixed + slope*a.mean + slope*slope*a.sd*a.sd/2
	}
	g := newHill(func(x float64) float64 { return a.hill.log(x) + slope*(x-a.mean) }, a.mean, a.sd, rough)
	return fixed + slope*a.mean + g.top + math.Log(g.mass) - math.Log(a.hill.mass)
}
