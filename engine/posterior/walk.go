package posterior

import "math"

// Walk is the belief about a level that moves as a random walk, read with known
// standard deviations: the local level filter. The zero value knows nothing.
// Sources: West & Harrison (1997), Bayesian Forecasting and Dynamic Models,
// 2.2; Durbin & Koopman (2012), Time Series Analysis by State Space Methods,
// 2.2, and 2.9 for the start from nothing.
type Walk struct {
	proper   bool
	mean     Level
	variance float64
}

// NewWalk starts from the prior.
func NewWalk(p Prior) Walk {
	if p.Vague {
		return Walk{}
	}
	return Walk{proper: true, mean: LevelOf(p.Mean), variance: p.SD * p.SD}
}

// Predict lets the level move by a normal step of the given variance >= 0. What
// is unknown stays unknown.
func (w *Walk) Predict(variance float64) {
	if w.proper {
		w.variance += variance
	}
}

// Update takes in a reading y of standard deviation u, with P the variance:
//
//	mean += P / (P + u^2) (y - mean);  1/P += 1/u^2
//
// written so that neither product nor quotient leaves the range of a double.
func (w *Walk) Update(y, u float64) {
	v := u * u
	if !w.proper {
		*w = Walk{proper: true, mean: LevelOf(y), variance: v}
		return
	}
	innovation := pair{hi: y}.minus(w.mean.pair()).value()
	if w.variance < v {
		q := w.variance / v
		w.mean = w.mean.Plus(innovation * (q / (1 + q)))
		w.variance /= 1 + q
		return
	}
	q := v / w.variance
	w.mean = w.mean.Plus(innovation / (1 + q))
	w.variance = v / (1 + q)
}

// Posterior returns the distribution of the level.
func (w *Walk) Posterior() Posterior { return w.Predictive(0) }

// Predictive returns the distribution of an indication made now with standard
// deviation u: N(mean, variance + u^2).
func (w *Walk) Predictive(u float64) Posterior {
	if !w.proper {
		return Posterior{}
	}
	return Posterior{form: FormNormal, location: w.mean, scale: math.Hypot(math.Sqrt(w.variance), u)}
}
