package posterior

import "math"

// grows tells whether the noise depends on the level.
func (w *White) grows() bool { return w.Relative != 0 || w.Gain != 0 }

// regression is a reading given the level: normal with a mean that is linear in the
// level, and a variance that may depend on it.
type regression struct {
	level      float64 // as predicted
	spread     float64 // its variance
	innovation float64
	slope      float64 // of the reading's mean by the level
	variance   float64 // that the other states leave
}

// regress returns the regression of a reading with coefficients h.
func (f *Filter) regress(innovation float64, h []float64) regression {
	var both, all, level float64
	for k := range f.n {
		s := 0.0
		for i := range k + 1 {
			s += h[i] * f.entry(i, k)
		}
		u := f.entry(0, k)
		both, all, level = both+s*f.d[k]*u, all+s*f.d[k]*s, level+u*f.d[k]*u
	}
	r := regression{level: f.mean[0].Value(), spread: level, innovation: innovation, slope: both / level}
	r.variance = max(0, all-both*r.slope)
	return r
}

// lean puts mean and variance of the level where the reading says, through its noise
// too: a noise that grows with the level tells of it by its size. They are those of
//
//	N(level; m, P) N(y; mean given the level, variance given the level)
//
// by the trapezoid rule about its maximum (assumed-density filtering: Maybeck
// 1982, Stochastic Models, Estimation and Control vol. 2, 12.7, from memory). The other
// states follow by their regression on the level. f is as after the update with the noise
// as predicted.
func (f *Filter) lean(r *regression, white White) {
	mean, variance, ok := r.moments(white)
	spread := f.Variance(0)
	if !ok || !(spread > 0) {
		return
	}
	share := f.space[2*f.n : 3*f.n]
	for i := range share {
		share[i] = f.Covariance(i, 0) / spread
	}
	shift := r.level + mean - f.mean[0].Value()
	for i := range f.mean {
		f.mean[i] = f.mean[i].Plus(share[i] * shift)
	}
	switch {
	case variance > spread*(1+1e-9):
		if f.account != nil {
			f.account.spread(white.Label, share, variance-spread)
		}
		f.spread(share, variance-spread)
	case variance < spread*(1-1e-9): // as by a reading of the level that says no more
		h := f.space[:f.n]
		clear(h)
		h[0] = 1
		noise := variance / (1 - variance/spread)
		gain, total := f.weigh(h, noise)
		if f.account != nil {
			f.account.update(f.account.white(white.Label), h, gain, total, noise)
		}
	}
}

// moments returns mean, from the level as predicted, and variance of the level; not
// ok where no maximum is found, as of a reading hundreds of standard deviations off:
// then the noise as predicted has to do.
func (r *regression) moments(white White) (mean, variance float64, ok bool) {
	relative := white.Relative*white.Relative + white.Gain*white.Gain
	fixed := r.variance + white.Variance -
		white.Relative*white.Relative*(r.level*r.level+r.spread) - white.Gain*white.Gain*white.Scale*white.Scale
	fixed = max(fixed, 1e-9*(r.variance+white.Variance)) // rounding
	log := func(x float64) float64 {
		level := r.level + x
		v := fixed + relative*level*level
		off := r.innovation - r.slope*x
		return -(x*x/r.spread + math.Log(v) + off*off/v) / 2
	}
	total := r.spread*r.slope*r.slope + r.variance + white.Variance
	start, width := r.spread*r.slope*r.innovation/total, math.Sqrt(r.spread*(r.variance+white.Variance)/total)
	top, width, ok := maximum(log, start, width)
	if !ok {
		return 0, 0, false
	}
	const half, step = 24, 0.35
	var sum, first, second float64
	for i := -half; i <= half; i++ {
		t := step * float64(i)
		w := math.Exp(log(top+width*t) - log(top))
		sum, first, second = sum+w, first+w*t, second+w*t*t
	}
	m := first / sum
	mean, variance = top+width*m, width*width*(second/sum-m*m)
	return mean, variance, variance > 0 && !math.IsInf(variance, 0) && !math.IsNaN(mean)
}

// maximum climbs from x to a maximum of f, which is smooth on the scale of width, by
// Newton's steps on differences, none longer than four widths; it returns the width of
// the normal density that fits there, and whether it has found one.
func maximum(f func(float64) float64, x, width float64) (top, fit float64, ok bool) {
	for range 60 {
		h := width / 16
		low, mid, high := f(x-h), f(x), f(x+h)
		slope, bend := (high-low)/(2*h), (high-2*mid+low)/(h*h)
		move := 4 * width
		if bend < 0 {
			fit = 1 / math.Sqrt(-bend)
			move = math.Min(move, math.Abs(slope)/-bend)
			width = math.Min(2*width, math.Max(width/2, fit))
		}
		move = math.Copysign(move, slope)
		for f(x+move) < mid && math.Abs(move) > 1e-6*width {
			move /= 2
		}
		x += move
		if bend < 0 && math.Abs(move) < 1e-3*width {
			return x, fit, true
		}
	}
	return x, width, false
}
