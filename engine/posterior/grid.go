package posterior

import "math"

// Grid is the belief about a level read in ways whose likelihood isn't normal: by
// displays that round, beyond the ends of measuring intervals, with outliers. It
// is the point-mass filter (Bucy & Senne 1971, Automatica 7, from memory): a density,
// at points, of what the instrument sees, eta = level + bias. See lattice for how
// points are laid and what lies beyond them.
//
// Edges are resolved as long as the belief they cut is no more than 300 times wider
// than the noise. Beyond, they lie within a step of where they should, some 1e-3 of the
// belief's width. A flank is held as deep as points are, and goes on as a parabola: a
// display that fits only 20 standard deviations of the noise beyond the end of an earlier
// one finds the mean to 0.006 of the belief's standard deviation, 30 beyond to 0.04, 100
// beyond to 0.4. What values without outliers leave is held exactly.
//
// Outliers may be inflated up to 100 times: the peak of a reading and its pedestal are
// then both held, normal scores to 0.01, the mean, the standard deviation and the
// probability that a reading was an outlier to 1e-3. From 300 on the most points there
// are don't resolve both, and what is published is wrong.
//
// A flat level is exact: as long as readings bound it on one side only, or not at
// all, the density is improper and nothing is published.
//
// The bias needs no dimension of its own: given eta the readings say nothing of it, so
// each point carries mean and variance of the normal that the bias has there. A
// level that stays never changes them. One that walks mixes those of points, which
// makes a mixture of normals; it is held as the normal of the same mean and variance,
// exactly so as long as all is normal, and to 0.03 of a normal score of the level as long
// as the bias is no wider than the noise, or half of it where readings may be
// outliers; see Bias.Strata for one that is wider.
//
// A Grid isn't copied by assignment, see Clone. It takes 8 bytes a point, 24 with a
// bias: 256 to 576 points, or up to 8192 where a narrow peak and a wide
// pedestal, or the far and sharp edges of an interval, matter at once.
type Grid struct {
	motion Motion
	bias   Bias    // of this calibration, before readings
	field  lattice // of eta less bias.Mean
}

// NewGrid starts from what is known of the level and the bias, which are independent.
// The level stays, walks or reverts; reverting, the bias must be known. All numbers are
// finite, the level's standard deviation is above 0 and the bias's at least 0.
func NewGrid(m Motion, level Prior, bias Bias) Grid {
	g := Grid{motion: m}
	g.start(level, bias)
	return g
}

// start lays the lattice for level and bias, both normal:
//
//	eta ~ N(m + b, s^2 + u^2),  bias given eta ~ N(b + u^2 / (s^2 + u^2) (eta - m - b), s^2 u^2 / (s^2 + u^2))
//
// (Gelman et al. 2013, A.1). Under a flat level both are independent.
func (g *Grid) start(level Prior, bias Bias) {
	g.bias = bias
	if level.Vague {
		g.field = lattice{step: 1, open: [2]bool{true, true}}
		return
	}
	sd := math.Hypot(level.SD, bias.SD)
	g.field = normalLattice(LevelOf(level.Mean), sd)
	if bias.SD == 0 {
		return
	}
	l := &g.field
	l.mean, l.variance = make([]float64, len(l.logs)), make([]float64, len(l.logs))
	share, kept := bias.SD/sd, level.SD/sd*bias.SD
	for i := range l.logs {
		l.mean[i], l.variance[i] = share*share*l.x(i), kept*kept
	}
}

// Clone returns a copy that shares nothing.
func (g *Grid) Clone() Grid {
	c := *g
	c.field = g.field.clone()
	return c
}

// Advance moves the level on by a finite time of at least 0 seconds: exactly where it
// shrinks towards a mean, by convolution where it walks. What is unknown stays
// unknown.
func (g *Grid) Advance(seconds float64) {
	if seconds <= 0 {
		return
	}
	switch m := &g.motion; m.Form {
	case MotionWalk:
		g.field.spread(m.Walk * seconds)
	case MotionReverting:
		g.revert(math.Exp(-m.Rate*seconds), m.Variance*gained(m.Rate, seconds))
	}
}

// forgetting is what is left of a level when all else is but rounding.
const forgetting = 1e-30

// revert leaves a part of the level's distance from the mean and adds variance.
func (g *Grid) revert(left, variance float64) {
	about := LevelOf(g.motion.Mean)
	switch {
	case g.field.flat():
		return
	case left < forgetting && g.field.proper():
		g.field = normalLattice(about, math.Sqrt(variance))
		return
	}
	g.field.shrink(about, max(left, forgetting))
	g.field.spread(variance)
}

// Widen adds a finite variance of at least 0 to the level: it may have moved at once.
func (g *Grid) Widen(variance float64) { g.field.spread(variance) }

// Evidence is what a reading says of the model.
//
//   - Log: ln of the density of the value, or the probability of the interval,
//     given the earlier readings. 0 while the level is still improper; when it becomes
//     proper, ln of the integral over a flat level of what all readings so far say.
//   - Outlier: the probability that the reading was an outlier given it and the
//     earlier ones. 0 if there are none; what was declared while the level is improper.
type Evidence struct{ Log, Outlier float64 }

// Update takes in what a reading indicates, with its noise: a value, or an interval of
// which at least one end is finite, Lower < Upper, neither NaN; SD finite and above 0,
// OutlierProbability in [0, 1), Inflation above 1 and up to 100, or without outliers
// anything. What is held for anything else is undefined.
func (g *Grid) Update(y Indication, noise Spread) Evidence {
	k := g.field.likelihood(y, noise, g.bias.Mean)
	origin := g.field.origin
	if g.field.flat() {
		origin = LevelOf(k.ends()[0])
		g.field.origin = origin
		k = g.field.likelihood(y, noise, g.bias.Mean)
	}
	g.field = g.observed(&k)
	if !g.field.proper() {
		return Evidence{Outlier: noise.OutlierProbability}
	}
	e := Evidence{Log: g.field.normalise()}
	if noise.OutlierProbability > 0 {
		e.Outlier = g.field.outlying(&k, g.field.origin.Minus(origin))
	}
	return e
}

// outlying returns the probability that the reading just taken in was an outlier; its
// likelihood is seen from an origin less a shift.
func (l *lattice) outlying(k *likelihood, shift float64) float64 {
	stride, top := k.stride(l.step), l.highest()
	for stride > 1 && !l.resolves(stride, top) {
		stride /= 2
	}
	var m moments
	for i := 0; i < len(l.logs); i += stride {
		m.add(math.Exp(l.logs[i]-top), k.outlier(l.x(i)+shift), 0)
	}
	p, _ := m.about(0)
	return p
}

// observed returns the field after a reading.
func (g *Grid) observed(k *likelihood) lattice {
	before := &g.field
	after := before.times(k)
	if before.flat() && g.bias.SD > 0 {
		after.mean, after.variance = make([]float64, len(after.logs)), make([]float64, len(after.logs))
		for i := range after.variance {
			after.variance[i] = g.bias.SD * g.bias.SD
		}
	}
	return after
}

// BiasBelief returns mean and standard deviation of the bias of this calibration, given
// the readings.
func (g *Grid) BiasBelief() (mean, sd float64) {
	l := &g.field
	if g.bias.SD == 0 || !l.proper() {
		return g.bias.Mean, g.bias.SD
	}
	var m moments
	top, origin := l.highest(), l.mean[len(l.mean)/2]
	for i, v := range l.logs {
		m.add(math.Exp(v-top), l.mean[i]-origin, l.variance[i])
	}
	mean, variance := m.about(origin)
	return g.bias.Mean + mean, math.Sqrt(variance)
}

// Renew draws the level anew, independent of all else: the part that is measured was
// replaced. The bias stays, as a normal of its mean and standard deviation.
func (g *Grid) Renew(level Prior) {
	mean, sd := g.BiasBelief()
	g.start(level, Bias{mean, sd})
}

// Recalibrate has a further calibration of the instrument, of independent bias, from
// now on. It begins anew with the density of the level.
func (g *Grid) Recalibrate(b Bias) {
	g.field, g.bias = g.level(), b
	l := &g.field
	if b.SD == 0 || l.flat() {
		return
	}
	// What eta leaves of the level is found as a level would be that it came from.
	origin := l.origin
	l.mean, l.variance = make([]float64, len(l.logs)), make([]float64, len(l.logs))
	for i := range l.mean {
		l.mean[i] = -l.x(i)
	}
	l.spread(b.SD * b.SD)
	shift := l.origin.Minus(origin)
	for i := range l.mean {
		l.mean[i] += l.x(i) + shift
	}
}
