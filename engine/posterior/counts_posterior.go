package posterior

import "math"

// standing is whether a posterior exists, and how far it reaches.
type standing struct {
	proper bool
	mixed  bool    // over r, on which readings depend
	pinned bool    // eta is bounded by normal tails whatever r
	falls  float64 // the weight of ln r falls in the end as r^-falls
}

// standing decides. With a flat level readings must bound it on both sides. For large
// r the weight of ln r falls as r^-worth of the prior and r^-1 of each value or
// interval with two ends, less r^1 for eta's range if only readings that depend
// on r bound it. For small r the reference prior without a floor needs two distinct
// values: intervals agree with r = 0. (Derived for this package.)
func (c *Counts) standing(p Prior, n Noise) standing {
	own, r := c.bounds()
	s := standing{pinned: !p.Vague || own.below && own.above, falls: n.Worth + r.ended}
	either := s.pinned || (own.below || r.below) && (own.above || r.above)
	if !s.pinned {
		s.falls--
	}
	s.mixed = n.learned() && r.any
	switch {
	case !n.learned():
		s.proper = either
		s.pinned = true
	case !r.any:
		s.proper = either && (n.Worth > 0 || c.Count() > 0)
	default:
		s.proper = either && s.falls > 0 && (n.Worth > 0 || n.Floor > 0 || c.shared.deviation() > 0)
	}
	return s
}

// bound is what a group of readings bounds.
type bound struct {
	any, below, above bool
	ended             float64 // values and intervals with two ends
}

// bounds returns what the readings with their own noise bound, and those of noise r.
func (c *Counts) bounds() (own, r bound) {
	own.below = c.own.Count() > 0
	own.above = own.below
	r.ended = float64(c.shared.count)
	r.any = c.shared.count > 0
	r.below, r.above = r.any, r.any
	for i := range c.seen {
		t, g := &c.seen[i], &own
		if t.sd == 0 {
			g = &r
			g.any = true
		}
		below, above := !math.IsInf(t.Lower, -1), !math.IsInf(t.Upper, 1)
		g.below, g.above = g.below || below, g.above || above
		if below && above {
			g.ended += float64(t.count)
		}
	}
	return own, r
}

// Posterior returns the distribution of the level, which is eta less the bias, given
// the readings: FormGrid, by quadrature, or FormNone where it is improper: a
// flat level that readings don't bound on both sides; a learned r with the reference
// prior, without a floor and two distinct values, or with fewer than two that
// aren't censored. n.Absent is for readings that all bring their own noise.
//
// Given eta the bias, hence the level, is normal by precision weighting:
//
//	level = m + g (eta - m - b) +- sqrt(g) u,  g = s^2 / (s^2 + u^2)
//
// for a prior N(m, s^2) and a bias N(b, u^2); eta - b +- u if the level is flat (Gelman
// et al. 2013, 2.5; derived for this package).
//
// Probabilities keep a relative error of some 1e-5 down to 1e-12, and 1e-3 in the
// stated tails beyond.
func (c *Counts) Posterior(p Prior, n Noise, b Bias) Posterior {
	s := c.standing(p, n)
	if !s.proper {
		return Posterior{}
	}
	l, nodes := c.layers(p, n, b, s.mixed, s.falls)
	origin := l.origin.Hi
	l.origin = levelOf(twoDiff(origin, b.Mean))
	noise := b.SD
	if !p.Vague {
		ratio := b.SD / p.SD
		l.gain = 1 / (1 + ratio*ratio)
		noise *= math.Sqrt(l.gain)
		shift := twoDiff(origin, b.Mean).minus(pair{hi: p.Mean}).times(l.gain)
		l.origin = levelOf(shift.plus(pair{hi: p.Mean}))
	}
	for i := range l.all {
		l.all[i].noise = noise
	}
	return l.closed(s, nodes)
}

// Predictive returns the distribution of the next indication, before any display, by
// an instrument with the same bias: eta and white noise of standard deviation sd, or r if
// sd is 0. FormNone where nothing is known of either.
func (c *Counts) Predictive(p Prior, n Noise, b Bias, sd float64) Posterior {
	s := c.standing(p, n)
	if !s.proper || sd == 0 && n.Absent {
		return Posterior{}
	}
	mixed := s.mixed
	if sd == 0 && n.learned() {
		if !mixed && n.Worth == 0 {
			return Posterior{}
		}
		mixed, s.pinned = true, false
	}
	l, nodes := c.layers(p, n, b, mixed, s.falls)
	for i := range l.all {
		k := &l.all[i]
		k.noise = sd
		if sd == 0 {
			k.noise = k.r
		}
	}
	return l.closed(s, nodes)
}

// closed computes what answers need: the moments, closing the sums over r where eta, or
// the noise, grows with it.
func (l *layers) closed(s standing, nodes []ruled) Posterior {
	l.hasMean, l.hasSD = s.pinned || s.falls > 1, s.pinned || s.falls > 2
	if l.known {
		return l.posterior(0, 0)
	}
	l.ridge = newRidge(nodes, l.index, l.all, l.gain)
	if s.pinned {
		return l.posterior(0, 0)
	}
	closing := func(falls float64) float64 {
		if falls <= 0 {
			return 0
		}
		return 1 / math.Expm1(falls*nodes[len(nodes)-1].step)
	}
	return l.posterior(closing(s.falls-1), closing(s.falls-2))
}

// layers returns eta's distribution in layers over r, from an origin that lies near eta,
// and the nodes they belong to.
func (c *Counts) layers(p Prior, n Noise, b Bias, mixed bool, falls float64) (*layers, []ruled) {
	e := c.centred(p, n, b)
	l := &layers{origin: LevelOf(e.origin), gain: 1}
	if mixed {
		nodes := e.nodesOf(n, falls)
		l.all, l.index = layersOf(nodes)
		return l, nodes
	}
	k := e.layerAt(n.SD, smooth)
	k.weight = 1
	l.all, l.known = []layer{k}, true
	return l, nil
}

// centred returns the evidence from an origin near where eta is.
func (c *Counts) centred(p Prior, n Noise, b Bias) evidence {
	origin := p.Mean + b.Mean
	switch {
	case c.own.Count() > 0:
		origin = c.own.known.origin
	case c.shared.count > 0:
		origin = c.shared.origin
	case len(c.seen) > 0:
		t := c.sorted()[0]
		origin = t.Lower
		if math.IsInf(origin, 0) {
			origin = t.Upper
		}
	}
	e := c.evidence(p, n, b, origin)
	if len(e.tallies) == 0 && e.n == 0 && e.weight == 0 {
		return e
	}
	return c.evidence(p, n, b, origin+e.given(e.typical(n), nil).start)
}

// typical returns some r that is not out of the question.
func (e *evidence) typical(n Noise) float64 {
	r := math.Max(n.SD, math.Max(n.Guess, n.Floor))
	if e.n > 1 {
		r = math.Max(r, math.Sqrt(e.squares/e.n))
	}
	return math.Max(r, 1e-100)
}
