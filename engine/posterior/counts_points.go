package posterior

import (
	"math"
	"slices"
)

// Points stand for the posterior of eta (and r) so that the next indication can be
// foretold at every reading for little: nodes of the trapezoid rule in eta, in a row
// for each node of r, whose weights further readings multiply by their likelihoods.
// That is exact as long as the rule resolves the posterior; Worn tells when it no longer
// does. The zero value foretells nothing.
type Points struct {
	origin  float64
	learned bool
	rows    []row
	weights []float64 // row after row
	spent   bool      // the weights have vanished
}

// row is the points of one r.
type row struct {
	r, first, step float64
	count          int
}

const (
	mostInRow   = 400  // in a row
	pointsReach = 19   // how far h falls to the end of a row: e^-19 is 6e-9
	mostRowStep = 0.5  // between rows, in ln r
	leastAbove  = 1e-9 // of the heaviest row, where r is larger: they make the tails
	leastBelow  = 1e-5 // where it is smaller
	sharpest    = 0.55 // the least noise, in steps, for which a row serves
	newFlank    = 2.5  // points of a flank at first
	leastFlank  = 1.6  // below which points are worn
	mostAtEnds  = 2e-5 // of the weight
	notMissed   = 1e-12
	lightest    = 1e-60 // and soon a number too small to reckon with at full speed
)

// Points returns points for the posterior of eta; none, with which Foretell is not ok,
// where that is improper.
func (c *Counts) Points(p Prior, n Noise, b Bias) Points {
	s := c.standing(p, n)
	if !s.proper {
		return Points{}
	}
	mixed := s.mixed || n.learned() && n.Worth > 0
	e := c.centred(p, n, b)
	pts := Points{origin: e.origin, learned: mixed}
	if !mixed {
		r := n.SD
		if !n.Known {
			r = 0
		}
		k := e.layerAt(r, smooth)
		k.r, k.weight = r, 1
		pts.lay(&k, e.smallest)
		return pts
	}
	if !s.mixed {
		s.falls = n.Worth
	}
	nodes := e.nodesOf(n, s.falls)
	best := 0
	for i := range nodes {
		if nodes[i].logWeight > nodes[best].logWeight {
			best = i
		}
	}
	stride := strideOf(nodes, nodes[best].logWeight)
	for i := best % stride; i < len(nodes); i += stride {
		k := nodes[i].layer
		k.weight = nodes[i].step * math.Exp(nodes[i].logWeight-nodes[best].logWeight)
		if k.weight > leastAbove && (i > best || k.weight > leastBelow) {
			pts.lay(&k, e.smallest)
		}
	}
	pts.scale()
	return pts
}

// strideOf returns of how many nodes of r one will do.
func strideOf(nodes []ruled, top float64) int {
	weights := make([]float64, len(nodes))
	for i := range nodes {
		weights[i] = math.Exp(nodes[i].logWeight - top)
	}
	return max(1, int(math.Min(flankOf(weights)/newFlank, mostRowStep/nodes[0].step)))
}

// flankOf returns in how many points the steeper flank of a density rises from e^-6 to
// e^-1 of its top: 2.05 standard deviations of a normal. The trapezoid rule needs some
// 1.6 (2 exp(-2 pi^2 s^2) = 1e-5 of an error for a normal of s = 0.8 steps).
func flankOf(weights []float64) float64 {
	top := slices.Max(weights)
	rise := func(at func(i int) float64) float64 {
		low, high := -1., -1.
		for i := 0; i < len(weights) && high < 0; i++ {
			for _, c := range [2]struct {
				level float64
				at    *float64
			}{{top * math.Exp(-6), &low}, {top * math.Exp(-1), &high}} {
				if w := at(i); *c.at < 0 && w >= c.level {
					*c.at = float64(i)
					if i > 0 && at(i-1) > 0 {
						*c.at -= math.Log(w/c.level) / math.Log(w/at(i-1))
					}
				}
			}
		}
		return high - low
	}
	return math.Min(
		rise(func(i int) float64 { return weights[i] }),
		rise(func(i int) float64 { return weights[len(weights)-1-i] }))
}

// lay appends the row of a layer, fine enough for noise of r or, if that is less, of
// other.
func (p *Points) lay(k *layer, other float64) {
	reach := math.Sqrt(2 * pointsReach)
	at := row{r: k.r, first: k.mean - reach*k.sd, step: 2.05 / newFlank * k.sd}
	last := k.mean + reach*k.sd
	if g := k.hill; g != nil {
		at.first, last = g.fallen(lower, pointsReach), g.fallen(upper, pointsReach)
		left, right := g.fallen(lower, 1)-g.fallen(lower, 6), g.fallen(upper, 6)-g.fallen(upper, 1)
		at.step = math.Min(left, right) / newFlank
	}
	if k.r > 0 {
		other = math.Min(other, k.r)
	}
	at.step = math.Min(at.step, 0.65*other)
	at.count = 1 + int(math.Min(mostInRow-1, math.Ceil((last-at.first)/at.step)))
	at.step = (last - at.first) / float64(at.count-1)
	sum := 0.0
	from := len(p.weights)
	for i := range at.count {
		x := at.first + float64(i)*at.step
		w := 0.0
		if k.hill != nil {
			w = math.Exp(k.hill.log(x))
		} else {
			w = math.Exp(logNormalDensity((x - k.mean) / k.sd))
		}
		p.weights = append(p.weights, w)
		sum += w
	}
	for i := range p.weights[from:] {
		p.weights[from+i] *= k.weight / sum
	}
	p.rows = append(p.rows, at)
}

// scale makes the weights sum to 1.
func (p *Points) scale() {
	sum := 0.0
	for _, w := range p.weights {
		sum += w
	}
	if !(sum > 1e-250) {
		p.spent = true
		return
	}
	for i := range p.weights {
		if p.weights[i] /= sum; p.weights[i] < lightest {
			p.weights[i] = 0
		}
	}
}

// sigma returns the standard deviation of a reading's noise for a row.
func (at *row) sigma(sd, samples float64) float64 {
	if sd > 0 {
		return sd
	}
	return at.r / math.Sqrt(samples)
}

// Foretell returns the probabilities that the next indication will be below y.Lower and
// above y.Upper, for noise as in Add; relative error mostly 1e-3, and when points are
// about to wear out up to 1e-2, 5e-2 where the probability is 1e-6. Not ok where nothing
// is known, the points are worn out, or lie too far apart for noise so sharp;
// Predictive then knows more.
func (p *Points) Foretell(y Indication, sd, samples float64) (below, above float64, ok bool) {
	if len(p.rows) == 0 || p.spent {
		return 0, 0, false
	}
	lo, hi := y.Lower-p.origin, y.Upper-p.origin
	var coarse [2]float64 // what comes from rows too coarse for this noise
	from := 0
	for i := range p.rows {
		at := &p.rows[i]
		weights := p.weights[from : from+at.count]
		from += at.count
		sigma := at.sigma(sd, samples)
		b, a := at.foretell(weights, lo, hi, 1/sigma)
		below += b
		above += a
		if sigma < sharpest*at.step {
			coarse[0] += b
			coarse[1] += a
		}
	}
	return below, above, coarse[0] <= below/100 && coarse[1] <= above/100
}

// foretell returns the row's shares below lo and above hi.
func (at *row) foretell(weights []float64, lo, hi, precision float64) (below, above float64) {
	scale := precision * sqrtHalf.hi
	x, step := (at.first-lo)*scale, at.step*scale
	gap := (lo - hi) * scale
	if math.IsInf(lo, -1) {
		x, gap = (at.first-hi)*scale, 0
	} else if math.IsInf(hi, 1) {
		gap = 0
	}
	for i, w := range weights {
		if w < notMissed {
			continue
		}
		t := x + float64(i)*step
		below += w * math.Erfc(t)
		above += w * math.Erfc(-t-gap)
	}
	if math.IsInf(lo, -1) {
		below = 0
	}
	if math.IsInf(hi, 1) {
		above = 0
	}
	return below / 2, above / 2
}

// Update takes in a reading, as Add does.
func (p *Points) Update(y Indication, sd, samples float64) {
	if len(p.rows) == 0 || p.spent {
		return
	}
	lo, hi := y.Lower-p.origin, y.Upper-p.origin
	from := 0
	for i := range p.rows {
		at := &p.rows[i]
		at.update(p.weights[from:from+at.count], lo, hi, 1/at.sigma(sd, samples))
		from += at.count
	}
	p.scale()
}

// update multiplies by the likelihood; of an exact reading but for a constant.
func (at *row) update(weights []float64, lo, hi, precision float64) {
	for i := range weights {
		if weights[i] == 0 {
			continue
		}
		x := at.first + float64(i)*at.step
		a := (lo - x) * precision
		switch b := (hi - x) * precision; {
		case lo == hi:
			weights[i] *= precision * math.Exp(-a*a/2)
		case (hi-lo)*precision < blunt:
			width, m := (hi-lo)*precision, (a+b)/2
			q := 1 / (1 + width*width/12)
			weights[i] *= width * math.Sqrt(q/2/math.Pi) * math.Exp(-m*m*q/2)
		case a > 0:
			weights[i] *= (math.Erfc(a*sqrtHalf.hi) - math.Erfc(b*sqrtHalf.hi)) / 2
		default:
			weights[i] *= (math.Erfc(-b*sqrtHalf.hi) - math.Erfc(-a*sqrtHalf.hi)) / 2
		}
	}
}

// Worn tells whether the points no longer serve, for they have become too few for what is
// left of the posterior or lie beside it; the caller makes new ones from the Counts.
func (p *Points) Worn() bool {
	if len(p.rows) == 0 || p.spent {
		return true
	}
	sums := make([]float64, 0, len(p.rows))
	ends, from := 0.0, 0
	for i := range p.rows {
		weights := p.weights[from : from+p.rows[i].count]
		from += p.rows[i].count
		sum := 0.0
		for _, w := range weights {
			sum += w
		}
		if sum > 1e-7 && flankOf(weights) < leastFlank {
			return true
		}
		sums = append(sums, sum)
		ends += weights[0] + weights[len(weights)-1]
	}
	if !p.learned {
		return ends > mostAtEnds
	}
	return ends+sums[len(sums)-1] > mostAtEnds || flankOf(sums) < leastFlank
}

// Clone returns a copy that shares nothing with p.
func (p *Points) Clone() Points {
	out := *p
	out.rows, out.weights = slices.Clone(p.rows), slices.Clone(p.weights)
	return out
}
