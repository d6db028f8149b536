package modelcheck

import "math"

// Point is a reading as Explain takes it. The variance of its white noise is
// Variance + Learned r^2, where r is the repeatability that is learned; it is above 0
// for every r.
type Point struct {
	Seconds  float64 // time since any origin; doesn't fall from one point to the next
	Value    float64 // less known bias
	Variance float64 // known part, not below 0
	Learned  float64 // not below 0; 1 over the indications of which the value is a mean, 0 where r is known
}

// Learned is what is declared of a repeatability r that is learned: that it is about Guess, which
// is worth as many earlier indications, and not below Floor. Both are in the values' unit;
// a Worth or Floor of 0 says nothing. The zero value is also right where r is known.
type Learned struct{ Guess, Worth, Floor float64 }

// Explanation compares accounts of the same readings by their natural log-likelihoods, in
// each of which the level at the first reading is flat, and r, where it is learned, is fitted: a
// difference of 2 or 3 is remarkable, and neither account is chosen. Variances are in
// the square of the values' unit.
type Explanation struct {
	Readings   int     // explained; 0: nothing is, see Explain
	Declared   float64 // log-likelihood of the model as it is declared
	R          float64 // its fitted r; 0: r is known
	Moving     Moving
	Correlated Correlated
}

// Moving is the account by a level that moves as a random walk.
type Moving struct {
	LogLikelihood float64
	Walk          float64 // fitted variance that the level gains in a second
	R             float64 // fitted r; 0: r is known
}

// Correlated is the account by noise that successive readings share: a stationary
// Ornstein-Uhlenbeck process besides the white noise, the level moving as declared.
type Correlated struct {
	LogLikelihood float64
	SD            float64 // fitted standard deviation of that noise; 0: none is better
	Seconds       float64 // fitted correlation time, in which its autocorrelation falls by e
	R             float64 // fitted r; 0: r is known
}

// Explain fits both accounts to readings by maximum likelihood with the true time steps. walk
// is the declared variance that the level gains in a second, 0 for a level that stays. As
// what is declared is among the fits (SD = 0, Walk = walk), neither is less likely.
// The correlation time is looked for from a tenth of the shortest time step that isn't 0 to ten
// times the whole span; a fit at an end says that the readings don't tell more.
//
// A learned r is fitted in each account by itself: held at what the readings say of it under
// the declaration, it would leave nothing of their scatter to explain. A guess takes
//
//	Worth (ln(r / Guess) + (Guess^2 / r^2 - 1) / 2)
//
// off each log-likelihood, which is the scatter of as many earlier indications under r instead of
// under Guess (derived for this package from Gelman et al. 2013, Bayesian Data Analysis, 2.6,
// from memory); so a guess of great worth is a known r. Looked for is an r from a
// thousandth of the scatter of neighbours; at that end, readings that agree exactly
// are likely without bound. If all values are one, and nothing is known of their noise, there is
// nothing to explain.
//
// Fitted numbers are maxima to a relative 1e-3, log-likelihoods to 1e-5; of several maxima
// the greatest, as far as a grid of step 1/2 (where three numbers are fitted, 1) in
// the logarithms of variances and the correlation time tells them apart. It costs some 2 ms
// for 64 points of known r, and 13 ms if it is learned; points is not kept.
func Explain(points []Point, walk float64, r Learned) Explanation {
	h := newHistory(points, r)
	if !(h.scale > 0) {
		return Explanation{}
	}
	declared := process{walk: walk}
	e := Explanation{Readings: len(points)}
	declared, e.Declared = h.fit(declared, h.repeatability()...)
	e.R = declared.r
	e.Moving = Moving{e.Declared, walk, e.R}
	e.Correlated = Correlated{LogLikelihood: e.Declared, R: e.R}
	if h.span > 0 {
		h.fitMoving(&e.Moving)
		h.fitCorrelated(&e.Correlated, walk)
	}
	return e
}

func (h *history) fitMoving(m *Moving) {
	axes := append([]axis{{
		math.Log(1e-4 * h.finest / h.span), math.Log(10 * h.largest / h.shortest),
		func(p *process, x float64) { p.walk = math.Exp(x) },
	}}, h.repeatability()...)
	if p, best := h.fit(process{}, axes...); best > m.LogLikelihood {
		*m = Moving{best, p.walk, p.r}
	}
	if m.Walk == 0 {
		return
	}
	if p, best := h.fit(process{}, h.repeatability()...); best >= m.LogLikelihood {
		*m = Moving{best, 0, p.r}
	}
}

func (h *history) fitCorrelated(c *Correlated, walk float64) {
	axes := append([]axis{
		{math.Log(h.shortest / 10), math.Log(10 * h.span), func(p *process, x float64) { p.seconds = math.Exp(x) }},
		{math.Log(1e-4 * h.finest), math.Log(10 * h.largest), func(p *process, x float64) { p.correlated = math.Exp(x) }},
	}, h.repeatability()...)
	if p, best := h.fit(process{walk: walk}, axes...); best > c.LogLikelihood {
		*c = Correlated{best, math.Sqrt(p.correlated), p.seconds, p.r}
	}
}

// repeatability returns the axis of ln r^2, none where r is known.
func (h *history) repeatability() []axis {
	if !h.learns {
		return nil
	}
	lo := math.Max(h.declared.Floor, 1e-3*h.scale)
	hi := 10 * math.Max(lo, math.Max(h.declared.Guess, math.Sqrt(h.largest/h.share)))
	return []axis{{2 * math.Log(lo), 2 * math.Log(hi), func(p *process, x float64) { p.r = math.Exp(x / 2) }}}
}
