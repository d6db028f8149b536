package engine_test

import (
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mathext"

	"leadline.example/engine"
)

// given returns ln of the likelihood of r, and mean and variance of the level given r.
func (s *spectrum) given(r float64) (log, mean, variance float64) {
	mean, variance = s.mean, s.variance+r*r*s.share
	for i, l := range s.values {
		v := l + r*r
		log -= (math.Log(v) + s.errors[i]*s.errors[i]/v) / 2
		mean += s.cross[i] * s.errors[i] / v
		variance -= s.cross[i] * s.cross[i] / v
	}
	return log, mean, variance
}

// bounded returns the sum of squares that keeps r away from 0 where its prior doesn't.
func (s *spectrum) bounded() float64 {
	sum := 0.0
	for i, l := range s.values {
		if l == 0 {
			sum += s.errors[i] * s.errors[i]
		}
	}
	return sum
}

// learnedBelief is the level's exact distribution as a fine sum of normals.
type learnedBelief struct {
	nothing bool // it is improper
	weights []float64
	means   []float64
	sds     []float64
	mean    float64
	hasMean bool
	sd      float64
	hasSD   bool
}

// logPrior is ln of the density of u = ln r, with r^2 ~ scaled inverse chi-squared:
// p(r^2) ~ r^-(worth + 2) exp(-worth guess^2 / (2 r^2)) (Gelman et al. 2013, table A.1),
// times dr^2/du ~ r^2; 1 under the reference prior.
func (o *learnedOracle) logPrior(u float64) float64 {
	if o.learned.Form == engine.RepeatabilityLearnedReference {
		return 0
	}
	q := o.learned.Guess * math.Exp(-u)
	return -o.learned.Worth * (u - math.Log(o.learned.Guess) + q*q/2)
}

// belief integrates over u by Simpson's rule with thousands of points.
func (o *learnedOracle) belief(at engine.Instant) *learnedBelief {
	s := o.spectrum(at)
	lo, hi, ok := o.ends(s)
	switch {
	case s.nothing:
		return &learnedBelief{nothing: true}
	case len(s.values) == 0 && s.share == 0: // r is nowhere
		sd := math.Sqrt(s.variance)
		return &learnedBelief{weights: []float64{1}, means: []float64{s.mean}, sds: []float64{sd}, mean: s.mean, hasMean: true, sd: sd, hasSD: true}
	case !ok:
		return &learnedBelief{nothing: true}
	}
	const step = 0.012
	n := 2 * int((hi-lo)/(2*step)+1)
	h := (hi - lo) / float64(n)
	b := &learnedBelief{}
	logs := make([]float64, n+1)
	for i := range logs {
		u := lo + float64(i)*h
		log, mean, variance := s.given(math.Exp(u))
		logs[i] = log + o.logPrior(u)
		b.means, b.sds = append(b.means, mean), append(b.sds, math.Sqrt(variance))
	}
	top := floats.Max(logs)
	for i, log := range logs {
		simpson := float64(2 + 2*(i%2))
		if i == 0 || i == n {
			simpson = 1
		}
		b.weights = append(b.weights, simpson*math.Exp(log-top))
	}
	floats.Scale(1/floats.Sum(b.weights), b.weights)
	b.moments(s, o.falls(s), h)
	return b
}

// falls returns with which power of 1/r the density of ln r falls in the end.
func (o *learnedOracle) falls(s *spectrum) float64 {
	worth := 0.0
	if o.learned.Form == engine.RepeatabilityLearned {
		worth = o.learned.Worth
	}
	return worth + float64(len(s.values))
}

// ends returns the ends of what matters of u, and whether there are any. Below, the prior
// or what readings of one and the same level are apart is an exponential of r^-2,
// which at e^-8 of its scale is exp(-1e6); above, the density falls at least as 1/r.
func (o *learnedOracle) ends(s *spectrum) (lo, hi float64, ok bool) {
	if o.falls(s) == 0 {
		return 0, 0, false
	}
	reference := o.learned.Form == engine.RepeatabilityLearnedReference
	bound := s.bounded()
	switch {
	case o.learned.Floor > 0:
		lo = math.Log(o.learned.Floor)
	case !reference:
		lo = math.Log(o.learned.Guess) - 8
	case bound > 0:
		lo = math.Log(bound)/2 - 8
	default:
		return 0, 0, false
	}
	hi = lo + 8
	if !reference {
		hi = max(hi, math.Log(o.learned.Guess))
	}
	for i, l := range s.values {
		hi = max(hi, math.Log(l+s.errors[i]*s.errors[i])/2)
	}
	return lo, hi + 42, true
}

// moments sums mean and standard deviation; where a flat level's variance grows as
// r^2 its integral goes on as an exponential beyond the end.
func (b *learnedBelief) moments(s *spectrum, falls, step float64) {
	b.mean = floats.Dot(b.weights, b.means)
	variance := 0.0
	for i, w := range b.weights {
		d := b.means[i] - b.mean
		variance += w * (b.sds[i]*b.sds[i] + d*d)
	}
	b.hasMean, b.hasSD = true, true
	if s.share > 0 {
		b.hasMean, b.hasSD = falls > 1, falls > 2
		last := len(b.weights) - 1
		variance += 3 * b.weights[last] / step * b.sds[last] * b.sds[last] / (falls - 2)
	}
	b.sd = math.Sqrt(variance)
}

// tail returns P(level > x), or P(level < x) for sign -1.
func (b *learnedBelief) tail(x, sign float64) float64 {
	sum := 0.0
	for i, w := range b.weights {
		if w > 1e-24 {
			sum += w * math.Erfc(sign*(x-b.means[i])/b.sds[i]/math.Sqrt2) / 2
		}
	}
	return sum
}

// score is the normal quantile of P(level < x), from whichever tail is smaller.
func score(lower, upper float64) float64 {
	if lower < upper {
		return mathext.NormalQuantile(lower)
	}
	return -mathext.NormalQuantile(upper)
}
