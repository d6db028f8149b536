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
	ends    float64   // their sum in the first and last row and at either end of the others, at first
	spent   bool      // the weights have vanished
}

// row is the points of one r.
type row struct {
	r, first, step float64
	count          int
}

const (
	mostInRow   = 256  // in a row
	pointsReach = 16   // how far h falls to the end of a row: e^-16 is 1e-7
	pointsStep  = 0.75 // in standard deviations of the row
	rowsStep    = 0.75 // the same between rows
	mostRowStep = 0.5  // between rows at most, in ln r
	leastAbove  = 1e-9 // of the heaviest row, where r is larger: they make the tails
	leastBelow  = 1e-5 // where it is smaller
	sharpest    = 0.55 // the least noise, in steps, for which a row serves
	leastPoints = 3    // effective number below which points are worn
	mostAtEnds  = 3e-4 // of the weight, unless it was a quarter of that to begin with
	notMissed   = 1e-12
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
		k := e.layerAt(r)
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
	pts.ends, _, _ = pts.spread()
	return pts
}

// strideOf returns of how many nodes of r one will do.
func strideOf(nodes []ruled, top float64) int {
	var sum, squares float64
	for i := range nodes {
		w := math.Exp(nodes[i].logWeight - top)
		sum += w
		squares += w * w
	}
	// Of a normal the effective number of nodes is 2 sqrt(pi) sd / step.
	sd := sum * sum / squares / (2 * math.Sqrt(math.Pi))
	return max(1, int(math.Min(rowsStep*sd, mostRowStep/nodes[0].step)))
}

// lay appends the row of a layer, fine enough for noise of r or, if that is less, of
// other.
func (p *Points) lay(k *layer, other float64) {
	reach := math.Sqrt(2 * pointsReach)
	at := row{r: k.r, first: k.mean - reach*k.sd, step: pointsStep * k.sd}
	last := k.mean + reach*k.sd
	if g := k.hill; g != nil {
		at.first, last = g.reach(lower), g.reach(upper)
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

// reach returns where h has fallen by pointsReach on a side, nearly.
func (g *hill) reach(s side) float64 {
	lo, hi := g.at, g.stretches[len(g.stretches)-1].hi
	if s == lower {
		hi = g.stretches[0].lo
	}
	for range 6 {
		if m := lo + (hi-lo)/2; g.log(m) > -pointsReach {
			lo = m
		} else {
			hi = m
		}
	}
	return hi
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
		p.weights[i] /= sum
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
// above y.Upper, for noise as in Add; relative error about 1e-3 down to 1e-6. Not ok
// where nothing is known, the points are worn out, or lie too far apart for noise so
// sharp; Predictive then knows more.
func (p *Points) Foretell(y Indication, sd, samples float64) (below, above float64, ok bool) {
	if len(p.rows) == 0 || p.spent {
		return 0, 0, false
	}
	lo, hi := y.Lower-p.origin, y.Upper-p.origin
	coarse, from := 0.0, 0
	for i := range p.rows {
		at := &p.rows[i]
		weights := p.weights[from : from+at.count]
		from += at.count
		sigma := at.sigma(sd, samples)
		b, a, all := at.foretell(weights, lo, hi, 1/sigma)
		below += b
		above += a
		if sigma < sharpest*at.step {
			coarse += all
		}
	}
	return below, above, coarse < 1e-3
}

// foretell returns the row's shares below lo and above hi, and its weight.
func (at *row) foretell(weights []float64, lo, hi, precision float64) (below, above, all float64) {
	scale := precision * sqrtHalf.hi
	x, step := (at.first-lo)*scale, at.step*scale
	gap := (lo - hi) * scale
	if math.IsInf(lo, -1) {
		x, gap = (at.first-hi)*scale, 0
	} else if math.IsInf(hi, 1) {
		gap = 0
	}
	for i, w := range weights {
		all += w
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
	return below / 2, above / 2, all
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
	ends, used, rows := p.spread()
	return used < leastPoints || p.learned && rows < leastPoints || ends > mostAtEnds && ends > 4*p.ends
}

// spread returns the weight at the ends, and the effective numbers of points in a row and
// of rows: the square of the sum over the sum of squares.
func (p *Points) spread() (ends, points, rows float64) {
	from, squares := 0, 0.0
	for i := range p.rows {
		weights := p.weights[from : from+p.rows[i].count]
		from += p.rows[i].count
		sum, square := 0.0, 0.0
		for _, w := range weights {
			sum += w
			square += w * w
		}
		squares += sum * sum
		if square > 0 {
			points += sum * math.Min(2*leastPoints, sum*sum/square)
		}
		ends += weights[0] + weights[len(weights)-1]
		if p.learned && (i == 0 || i == len(p.rows)-1) {
			ends += sum
		}
	}
	return ends, points, 1 / squares
}

// Clone returns a copy that shares nothing with p.
func (p *Points) Clone() Points {
	out := *p
	out.rows, out.weights = slices.Clone(p.rows), slices.Clone(p.weights)
	return out
}
