package posterior

import "math"

// SeriesReading is one reading of a series: After seconds, at least 0, after the
// one before (after the prior, for the first), Value with a white error of Variance
// above 0; or, with Variance +Inf, a time without a reading at which the level is asked.
type SeriesReading struct{ After, Value, Variance float64 }

// Smoothed is what all readings of a series together say of one of its times.
type Smoothed struct {
	Level Posterior
	Slope Posterior // FormNone but under a trend
}

// Smooth returns the belief about level and slope at the time of each reading
// given all of them, also the later ones: fixed-interval smoothing. A level of
// which nothing is known needs a first reading. With T the transition to the next
// time, Q its noise, m and P the filter's mean and covariance here, a and R those
// predicted there, and x and S what is known there in hindsight:
//
//	C = P T' R^-1;  mean = m + C (x - a);  variance = (I - C T) P (I - C T)' + C (S + Q) C'
//
// No variance is subtracted from. Sources: Rauch, Tung & Striebel (1965), AIAA
// Journal 3, 1445-1450, from memory; equivalent to Durbin & Koopman (2012), 4.4.
// It takes some 260 bytes a reading while it runs.
func Smooth(m Motion, level Prior, slope SlopePrior, readings []SeriesReading) []Smoothed {
	f := NewFilter(m, level, slope)
	steps := make([]passed, len(readings))
	for i, r := range readings {
		f.Advance(r.After)
		steps[i].predicted = f.moment()
		if !math.IsInf(r.Variance, 1) {
			f.Update(r.Value, 0, 1, nil, r.Variance)
		}
		steps[i].filtered = f.moment()
	}
	all := make([]Smoothed, len(readings))
	var later moment
	for i := len(readings) - 1; i >= 0; i-- {
		now := steps[i].filtered
		if i+1 < len(readings) {
			now = now.given(later, steps[i+1].predicted, m.step(readings[i+1].After))
		}
		all[i].Level = now.posterior(0)
		if m.Form == MotionTrend {
			all[i].Slope = now.posterior(1)
		}
		later = now
	}
	return all
}

// passed is what the filter knew at a reading, before and after it.
type passed struct{ predicted, filtered moment }

// moment is mean and covariance of level and slope; without a slope, 0. The
// covariance is factored as U D U' as well where it is the filter's.
type moment struct {
	mean          [2]Level
	level, across float64 // variance of the level, covariance with the slope
	slope         float64 // variance of the slope
	d             [2]float64
	u             float64
}

func (f *Filter) moment() moment {
	m := moment{mean: [2]Level{f.mean[0]}, level: f.Variance(0), d: [2]float64{f.d[0]}}
	if f.n > 1 {
		m.mean[1], m.across, m.slope = f.mean[1], f.Covariance(0, 1), f.Variance(1)
		m.d[1], m.u = f.d[1], f.entry(0, 1)
	}
	return m
}

func (m *moment) posterior(i int) Posterior {
	return Posterior{form: FormNormal, location: m.mean[i], scale: math.Sqrt([2]float64{m.level, m.slope}[i])}
}

// step is the transition of level and slope over a time: level' = left level + glide
// slope + noise.
type step struct {
	left, glide          float64
	level, across, slope float64 // the noise
}

func (m *Motion) step(h float64) step {
	switch m.Form {
	case MotionWalk:
		return step{left: 1, level: m.Walk * h}
	case MotionTrend:
		w := m.Wander * h
		return step{left: 1, glide: h, level: m.Walk*h + w*h*h/3, across: w * h / 2, slope: w}
	case MotionReverting:
		return step{left: math.Exp(-m.Rate * h), level: m.Variance * gained(m.Rate, h)}
	}
	return step{left: 1}
}

// given returns what is known in hindsight of a time of which m was known, if
// later is known of the next, predicted was, and s lies between.
func (m moment) given(later, predicted moment, s step) moment {
	// P T', by rows, times the inverse of R in its factors.
	levelAcross, slopeAcross := m.level*s.left+m.across*s.glide, m.across*s.left+m.slope*s.glide
	a, b := predicted.solve(levelAcross, m.across)
	c, d := predicted.solve(slopeAcross, m.slope)

	offLevel := later.mean[0].Minus(predicted.mean[0])
	offSlope := later.mean[1].Minus(predicted.mean[1])
	out := moment{mean: [2]Level{
		m.mean[0].Plus(a*offLevel + b*offSlope),
		m.mean[1].Plus(c*offLevel + d*offSlope),
	}}
	out.gather(1-a*s.left, -a*s.glide-b, -c*s.left, 1-c*s.glide-d, m.level, m.across, m.slope)
	out.gather(a, b, c, d, later.level+s.level, later.across+s.across, later.slope+s.slope)
	return out
}

// solve returns the row (x, y) times the inverse of U D U'. A state without
// variance takes no part.
func (m *moment) solve(x, y float64) (float64, float64) {
	x -= m.u * y
	if m.d[0] > 0 {
		x /= m.d[0]
	} else {
		x = 0
	}
	if m.d[1] > 0 {
		return x, y/m.d[1] - m.u*x
	}
	return x, 0
}

// gather adds A V A' to the covariance, with A = [a b; c d].
func (m *moment) gather(a, b, c, d, level, across, slope float64) {
	m.level += a*a*level + 2*a*b*across + b*b*slope
	m.across += a*c*level + (a*d+b*c)*across + b*d*slope
	m.slope += c*c*level + 2*c*d*across + d*d*slope
}
