package posterior

import "math"

// logBetween returns ln P(a <= Z <= a + width) for a standard normal Z; a may be
// -Inf with b = a + width finite, or b +Inf. Like logNormalBetween, with an error
// of 1e-10 in place of some 1e-14 but at a third of its cost, since a posterior
// from counts is made of nothing else.
//
// Where the interval is narrow in units of the density's own scale, the density is
// expanded about the middle m and integrated term by term,
//
//	phi(m) w (1 + w^2 He2(m) / 24 + w^4 He4(m) / 1920 + w^6 He6(m) / 322560 + ...)
//
// (Taylor's series with DLMF 18.9.27 for the derivatives; derived for this package);
// else the tails are subtracted on the side where they are small.
func logBetween(a, b, width float64) float64 {
	if b < 0 || a+b < 0 {
		a, b = -b, -a
	}
	switch {
	case math.IsInf(b, 1):
		return logNormalTail(a)
	case width*math.Max(1, b) < 0.5:
		m := a + width/2
		q, w := m*m, width*width
		series := 1 + w/24*((q-1)+w/80*((q*q-6*q+3)+w/168*(((q-15)*q+45)*q-15)))
		return -q/2 + math.Log(width*series) - logRootTwoPi
	case a > 37:
		top := logNormalTail(a)
		return top + math.Log1p(-math.Exp(logNormalTail(b)-top))
	case a > 0:
		return math.Log((math.Erfc(a*sqrtHalf.hi) - math.Erfc(b*sqrtHalf.hi)) / 2)
	}
	return math.Log1p(-(math.Erfc(-a*sqrtHalf.hi) + math.Erfc(b*sqrtHalf.hi)) / 2)
}

// logRootTwoPi is ln(2 pi) / 2.
const logRootTwoPi = 0.91893853320467274178

// blunt is the most that an interval may be wide, in standard deviations of the
// noise, to be taken for a value of variance sigma^2 + width^2 / 12. The density of
// noise and uniform error together differs from that normal by the factor
//
//	1 - (width / sigma)^4 / 2880 He4(z) + ...
//
// (Edgeworth's series, the uniform's fourth cumulant being -width^4 / 120; derived
// for this package), here 5e-9 He4(z). What a belief from n readings loses is of the
// order of sqrt(n) 1e-8 of its standard deviation.
const blunt = 1. / 16

// evidence is what the readings and the prior say of eta = level + bias, as offsets
// from an origin near to it.
type evidence struct {
	origin   float64
	weight   float64 // of all that is normal whatever r; 0 if nothing is
	mean     float64
	n        float64 // exact readings of noise r
	samples  float64
	average  float64 // their mean
	squares  float64 // the sum of squares about it
	tallies  []tally // in ascending order, Lower and Upper as offsets
	r        float64 // if it is known
	depends  bool    // readings depend on r
	smallest float64 // the least standard deviation of readings with their own
}

// evidence collects what is known, r aside, relative to the origin.
func (c *Counts) evidence(p Prior, n Noise, b Bias, origin float64) evidence {
	e := evidence{origin: origin, r: n.SD, n: float64(c.shared.count), tallies: c.sorted(), smallest: math.Inf(1)}
	if !p.Vague {
		p.Mean, p.SD = p.Mean+b.Mean, math.Hypot(p.SD, b.SD)
	}
	if k := c.own.informed(p, Noise{Absent: true}); !k.flat {
		e.weight, e.mean = 1/(k.sd*k.sd), k.mean.Minus(LevelOf(origin))
	}
	if c.own.Count() > 0 {
		e.smallest = math.Sqrt(float64(c.own.Count()) / c.own.known.weight.hi)
	}
	if e.n > 0 {
		e.samples = c.shared.weight.value()
		e.average = c.shared.mean().Minus(LevelOf(origin))
		e.squares = c.shared.deviation()
		e.depends = true
	}
	for i := range e.tallies {
		t := &e.tallies[i]
		t.Lower -= origin
		t.Upper -= origin
		e.depends = e.depends || t.sd == 0
		if t.sd > 0 {
			e.smallest = math.Min(e.smallest, t.sd)
		}
	}
	return e
}

// conditional is the logarithm of prior times likelihood as a function of eta where r is
// given: height - weight (eta - mean)^2 / 2 and a term for each edge.
type conditional struct {
	height float64
	weight float64
	mean   float64
	edges  []bracket
	start  float64 // near its maximum, unless readings conflict
	scale  float64 // how far from there it matters, likewise
}

// bracket is a term count ln P(lower <= eta + noise <= upper).
type bracket struct{ lower, upper, width, precision, count float64 }

// given returns the conditional density where r is given; edges is memory to use.
func (e *evidence) given(r float64, edges []bracket) conditional {
	c := conditional{weight: e.weight, mean: e.mean, edges: edges[:0]}
	if e.n > 0 {
		c.height -= e.n*math.Log(r) + e.squares/r/r/2
		c.join(e.average, e.samples/r/r)
	}
	guide := conditional{weight: c.weight, mean: c.mean}
	for i := range e.tallies {
		t := &e.tallies[i]
		sigma := t.sd
		if sigma == 0 {
			sigma = r / math.Sqrt(t.samples)
		}
		width, count := t.Upper-t.Lower, float64(t.count)
		middle, variance := t.Lower+width/2, sigma*sigma+width*width/12
		switch {
		case math.IsInf(t.Lower, -1):
			guide.join(t.Upper-sigma, count/sigma/sigma)
		case math.IsInf(t.Upper, 1):
			guide.join(t.Lower+sigma, count/sigma/sigma)
		default:
			guide.join(middle, count/variance)
		}
		if width <= blunt*sigma {
			c.height += count * (math.Log(width) - math.Log(variance)/2 - logRootTwoPi)
			c.join(middle, count/variance)
			continue
		}
		c.edges = append(c.edges, bracket{t.Lower, t.Upper, width / sigma, 1 / sigma, count})
	}
	c.start, c.scale = guide.mean, 1/math.Sqrt(guide.weight)
	return c
}

// join multiplies by a normal density of the given weight, without its constant:
// the weighted sum of squares about two means is that about their mean and
// w1 w2 / (w1 + w2) times the square of their difference.
func (c *conditional) join(mean, weight float64) {
	total := c.weight + weight
	d, share := mean-c.mean, weight/total
	c.height -= c.weight * share * d * d / 2
	c.mean += share * d
	c.weight = total
}

// log returns the logarithm at x.
func (c *conditional) log(x float64) float64 {
	d := x - c.mean
	h := c.height - c.weight*d*d/2
	for i := range c.edges {
		t := &c.edges[i]
		h += t.count * logBetween((t.lower-x)*t.precision, (t.upper-x)*t.precision, t.width)
	}
	return h
}
