package posterior

import (
	"math"
	"slices"
)

// likelihood is what a reading says of a point of a lattice, x from its origin: the
// density of a value, or the probability of an interval,
//
//	sum of w_k phi((y - x) / s_k) / s_k,  sum of w_k [Phi((upper - x) / s_k) - Phi((lower - x) / s_k)]
//
// over the one or two parts of the noise.
type likelihood struct {
	lower, upper float64 // from the origin
	exact        bool
	parts        []noisePart
	room         [2]noisePart
}

// noisePart is a normal part of the noise. Its factor is its weight, for values over
// sd sqrt(2 pi).
type noisePart struct{ factor, log, sd, per float64 }

// likelihood returns that of a reading by an instrument of a bias, what is left of
// which belongs to what the lattice holds.
func (l *lattice) likelihood(y Indication, noise Spread, bias float64) likelihood {
	k := likelihood{lower: l.from(y.Lower, bias), upper: l.from(y.Upper, bias), exact: y.Exact()}
	k.parts = k.room[:0]
	p := noise.OutlierProbability
	k.part(math.Log1p(-p), noise.SD)
	if p > 0 {
		k.part(math.Log(p), noise.SD*noise.Inflation)
	}
	return k
}

// from returns y less a bias, from the origin.
func (l *lattice) from(y, bias float64) float64 {
	if math.IsInf(y, 0) {
		return y
	}
	return twoDiff(y, bias).minus(l.origin.pair()).value()
}

func (k *likelihood) part(log, sd float64) {
	if math.IsInf(log, -1) {
		return
	}
	if k.exact {
		log -= math.Log(sd) + math.Log(2*math.Pi)/2
	}
	k.parts = append(k.parts, noisePart{math.Exp(log), log, sd, 1 / sd})
}

// lowest stands for what is less than any number, so that differences remain numbers.
const lowest = -1e300

// vanishing is a likelihood beside which another might have been lost.
const vanishing = 1e-250

// log returns the logarithm of the likelihood at x.
func (k *likelihood) log(x float64) float64 {
	p := k.one(0, x)
	if len(k.parts) > 1 {
		p += k.one(1, x)
	}
	if p > vanishing {
		return math.Log(p)
	}
	a := k.logOne(0, x)
	if len(k.parts) > 1 {
		a = logAdd(a, k.logOne(1, x))
	}
	return max(lowest, a)
}

// outlier returns the share of the second part in the likelihood at x.
func (k *likelihood) outlier(x float64) float64 {
	a, b := k.one(0, x), k.one(1, x)
	if a+b > vanishing {
		return b / (a + b)
	}
	return 1 / (1 + math.Exp(max(lowest, k.logOne(0, x))-max(lowest, k.logOne(1, x))))
}

// one returns a part's likelihood, with full relative accuracy unless it vanishes.
func (k *likelihood) one(i int, x float64) float64 {
	p := &k.parts[i]
	a := (k.lower - x) * p.per
	if k.exact {
		return p.factor * math.Exp(logNormalDensity(a))
	}
	return p.factor * inInterval(a, (k.upper-x)*p.per, (k.upper-k.lower)*p.per)
}

// logOne returns a part's likelihood in logarithms.
func (k *likelihood) logOne(i int, x float64) float64 {
	p := &k.parts[i]
	a := (k.lower - x) * p.per
	if k.exact {
		return p.log + logNormalDensity(a)
	}
	return p.log + logNormalBetween(a, (k.upper-x)*p.per, (k.upper-k.lower)*p.per)
}

// inInterval is normalBetween for one digit less: relative error 1e-12 within 30 of 0,
// which is all a grid's likelihood needs; by the rule of three points where the interval
// is narrow.
func inInterval(a, b, width float64) float64 {
	if a < 0 && b < 0 {
		a, b = -b, -a
	}
	switch steep := width * max(1, math.Abs(a), math.Abs(b)); {
	case steep < 0.3:
		sum := 0.0
		for i, node := range cellNodes {
			z := a + width*node
			sum += cellWeights[i] * math.Exp(-z*z/2)
		}
		return width * sum / math.Sqrt(2*math.Pi)
	case steep < 1:
		return width * meanNormalDensity(a, width)
	case a > 0:
		return (math.Erfc(a*sqrtHalf.hi) - math.Erfc(b*sqrtHalf.hi)) / 2
	case a < -9 && b > 9:
		return 1 // but for 1e-19
	}
	return 1 - (math.Erfc(-a*sqrtHalf.hi)+math.Erfc(b*sqrtHalf.hi))/2
}

// multiply adds the log likelihood to those of l, in a slice of its own.
func (k *likelihood) multiply(l *lattice) []float64 {
	out := make([]float64, len(l.logs))
	if k.exact && len(k.parts) == 1 {
		p, y := k.parts[0], k.lower
		for i, v := range l.logs {
			out[i] = max(lowest, v+(p.log+logNormalDensity((y-l.x(i))*p.per)))
		}
		return out
	}
	stride := k.stride(l.step)
	if stride == 1 || len(l.logs) < 4*stride {
		for i, v := range l.logs {
			out[i] = v + k.log(l.x(i))
		}
		return out
	}
	k.interpolate(l, stride, out)
	return out
}

// stride returns how many points apart the logarithm of the likelihood needs to be known,
// to interpolate between. It changes its course within a standard deviation, by
// less than a parabola would leave, so the polynomial is off by 2e-6 at most; where
// one part of the noise gives way to the other within half of that, and by 3e-4.
func (k *likelihood) stride(step float64) int {
	apart := k.parts[0].sd / 3
	if len(k.parts) > 1 {
		apart /= 2
	}
	stride := 1
	for float64(2*stride)*step <= apart && stride < 32 {
		stride *= 2
	}
	return stride
}

// interpolate adds to out what multiply does, known at every stride-th point.
func (k *likelihood) interpolate(l *lattice, stride int, out []float64) {
	rows := make([][6]float64, stride)
	for f := 1; f < stride; f++ {
		rows[f] = lagrange(float64(f) / float64(stride))
	}
	var w [6]float64
	at := func(j int) float64 { return k.log(float64(l.first+j*stride) * l.step) }
	for j := range w {
		w[j] = at(j - 2)
	}
	for i := 0; i < len(out); i += stride {
		out[i] = l.logs[i] + w[2]
		for f := 1; f < stride && i+f < len(out); f++ {
			c := &rows[f]
			out[i+f] = l.logs[i+f] + (c[0]*w[0] + c[1]*w[1] + c[2]*w[2] + c[3]*w[3] + c[4]*w[4] + c[5]*w[5])
		}
		copy(w[:], w[1:])
		w[5] = at(i/stride + 4)
	}
}

// lagrange returns the coefficients of the polynomial through six points, at f steps after
// the third (DLMF 3.3.1).
func lagrange(f float64) (c [6]float64) {
	for j := range c {
		c[j] = 1
		for m := range c {
			if m != j {
				c[j] *= (f + 2 - float64(m)) / float64(j-m)
			}
		}
	}
	return c
}

// ends returns the finite ends of the indication.
func (k *likelihood) ends() []float64 {
	switch {
	case k.exact || math.IsInf(k.upper, 1):
		return []float64{k.lower}
	case math.IsInf(k.lower, -1):
		return []float64{k.upper}
	}
	return []float64{k.lower, k.upper}
}

// marks appends the points about which the product with l may have its maxima: about
// each end of the indication, by each part; and where the parabolas by which l goes on
// meet those of the likelihood.
func (k *likelihood) marks(l *lattice, out []float64) []float64 {
	ends := k.ends()
	for _, p := range k.parts {
		for _, e := range ends {
			for _, z := range [...]float64{-14, -9, -3, -1, 0, 1, 3, 9, 14} {
				out = append(out, e+z*p.sd)
			}
		}
	}
	if len(ends) == 2 {
		out = append(out, ends[0]/2+ends[1]/2)
	}
	if l.flat() {
		return out
	}
	for _, s := range [2]side{lower, upper} {
		e := l.end(s)
		for _, p := range k.parts {
			for _, y := range ends {
				if x := e.from + (e.slope*p.sd*p.sd+y-e.from)/(1-e.curvature*p.sd*p.sd); isFinite(x) {
					out = append(out, x)
				}
			}
		}
	}
	return out
}

// beyond returns the marks outside of l.
func (k *likelihood) beyond(l *lattice) []float64 {
	lo, hi := l.x(0), l.x(len(l.logs)-1)
	return slices.DeleteFunc(k.marks(l, make([]float64, 0, 48)), func(x float64) bool { return x >= lo && x <= hi })
}

// hidden returns the highest value of the product f that the points of b don't show:
// about the ends of the indication, where it isn't too deep and what lies between the
// points is off it by more than 0.05; -Inf if there is none. For a sharp part of the
// noise may stand between points at which there is but a wide part's smooth product,
// which resolves can't tell. Points half a standard deviation apart show all.
func (k *likelihood) hidden(b *lattice, f func(x float64) float64, top float64) float64 {
	highest := math.Inf(-1)
	if b.step <= k.parts[0].sd/2 {
		return highest
	}
	lo, hi := b.x(0), b.x(len(b.logs)-1)
	for _, p := range k.parts {
		for _, e := range k.ends() {
			for z := -3.0; z <= 3; z++ {
				x := e + z*p.sd
				if !(x >= lo && x <= hi) {
					continue
				}
				if v := f(x); v > top-depthServed && math.Abs(b.at(x)-v) > 0.05 {
					highest = max(highest, v)
				}
			}
		}
	}
	return highest
}
