package modelcheck

import "math"

// Point is a reading as Explain takes it.
type Point struct {
	Seconds  float64 // time since any origin; doesn't fall from one point to the next
	Value    float64 // less known bias
	Variance float64 // of the white noise, above 0
}

// Explanation compares accounts of the same readings by their natural log-likelihoods, in
// each of which the level at the first reading is flat: a difference of 2 or 3 is
// remarkable, and neither account is chosen. Variances are in the square of the values' unit.
type Explanation struct {
	Readings   int
	Declared   float64 // log-likelihood of the model as it is declared
	Moving     Moving
	Correlated Correlated
}

// Moving is the account by a level that moves as a random walk.
type Moving struct {
	LogLikelihood float64
	Walk          float64 // fitted variance that the level gains in a second
}

// Correlated is the account by noise that successive readings share: a stationary
// Ornstein-Uhlenbeck process besides the white noise, the level moving as declared.
type Correlated struct {
	LogLikelihood float64
	SD            float64 // fitted standard deviation of that noise; 0: none is better
	Seconds       float64 // fitted correlation time, in which its autocorrelation falls by e
}

// Explain fits both accounts to readings by maximum likelihood with the true time steps. walk
// is the declared variance that the level gains in a second, 0 for a level that stays. As
// what is declared is among the fits (SD = 0, Walk = walk), neither is less likely.
// The correlation time is looked for from a tenth of the shortest time step that isn't 0 to ten
// times the whole span; a fit at an end says that the readings don't tell more.
// Fitted numbers are maxima to a relative 1e-3, log-likelihoods to 1e-5. It
// costs some 5 ms for 64 points; points is not kept.
func Explain(points []Point, walk float64) Explanation {
	h := newHistory(points, walk)
	e := Explanation{Readings: len(points), Declared: h.logLikelihood(walk, 0)}
	e.Moving = Moving{e.Declared, walk}
	e.Correlated = Correlated{LogLikelihood: e.Declared}
	if h.span > 0 {
		h.fitMoving(&e.Moving)
		h.fitCorrelated(&e.Correlated)
	}
	return e
}

// history is the readings prepared for many likelihoods.
type history struct {
	walk     float64
	value    []float64 // less the first
	variance []float64
	step     []float64 // seconds since the point before
	left     []float64 // of the correlated noise after step
	fresh    []float64 // and the share of its variance that is new, 1 - left^2
	y, x, f  []float64 // innovations of values and of the level's regressor, and their variance

	span, shortest  float64 // of the whole, and the shortest step above 0, in seconds
	finest, largest float64 // variances: the least of the noise, and what covers all values
}

func newHistory(points []Point, walk float64) *history {
	n := len(points)
	all := make([]float64, 8*n)
	h := &history{walk: walk, shortest: math.Inf(1), finest: math.Inf(1)}
	for i, part := range [...]*[]float64{&h.value, &h.variance, &h.step, &h.left, &h.fresh, &h.y, &h.x, &h.f} {
		*part = all[i*n : (i+1)*n]
	}
	for i, p := range points {
		h.value[i], h.variance[i] = p.Value-points[0].Value, p.Variance
		if i > 0 {
			h.step[i] = p.Seconds - points[i-1].Seconds
			h.span += h.step[i]
		}
		if h.step[i] > 0 {
			h.shortest = math.Min(h.shortest, h.step[i])
		}
		h.finest = math.Min(h.finest, p.Variance)
		h.largest = math.Max(h.largest, p.Variance+h.value[i]*h.value[i])
	}
	return h
}

func (h *history) fitMoving(m *Moving) {
	lo, hi := math.Log(1e-4*h.finest/h.span), math.Log(10*h.largest/h.shortest)
	x, best := maximum(lo, hi, func(x float64) float64 { return h.logLikelihood(math.Exp(x), 0) })
	if best > m.LogLikelihood {
		*m = Moving{best, math.Exp(x)}
	}
	if stays := h.logLikelihood(0, 0); stays >= m.LogLikelihood {
		*m = Moving{stays, 0}
	}
}

func (h *history) fitCorrelated(c *Correlated) {
	lo, hi := math.Log(1e-4*h.finest), math.Log(10*h.largest)
	profile := func(x float64) (variance, best float64) {
		h.correlate(math.Exp(x))
		v, best := maximum(lo, hi, func(v float64) float64 { return h.logLikelihood(h.walk, math.Exp(v)) })
		return math.Exp(v), best
	}
	x, best := maximum(math.Log(h.shortest/10), math.Log(10*h.span), func(x float64) float64 {
		_, best := profile(x)
		return best
	})
	if best > c.LogLikelihood {
		variance, _ := profile(x)
		*c = Correlated{best, math.Sqrt(variance), math.Exp(x)}
	}
}

// correlate sets the correlation time.
func (h *history) correlate(seconds float64) {
	for i, step := range h.step {
		h.left[i] = math.Exp(-step / seconds)
		h.fresh[i] = -math.Expm1(-2 * step / seconds)
	}
}

// logLikelihood returns the integral of the density of all values over the level at the first
// reading, where the level gains the variance walk in a second and correlated noise has the
// given variance.
//
// It is a Kalman filter for what the level has moved since (w) and the correlated
// noise (o), both known to be about 0 at first, run over the values and over a constant
// 1 in their place; the level at the first reading then is a regression of the
// one's innovations on the other's (de Jong 1991, Annals of Statistics 19, 1073-1083, from
// memory). The covariance is held with its determinant, so that in
//
//	ww' = (det + ww v) / F    oo' = (det + oo v) / F    wo' = (wo v - det) / F    det' = det v / F
//
// with v the variance of the white noise and F = ww + 2 wo + oo + v, no variance is
// subtracted from (derived for this package).
func (h *history) logLikelihood(walk, correlated float64) float64 {
	ww, wo, oo, det := 0.0, 0.0, correlated, 0.0
	var value, one struct{ w, o float64 }
	sum, xx, xy := 0.0, 0.0, 0.0
	for i, y := range h.value {
		if i > 0 && correlated > 0 {
			left, fresh := h.left[i], h.fresh[i]*correlated
			det = left*left*det + ww*fresh
			oo, wo = left*left*oo+fresh, left*wo
			value.o *= left
			one.o *= left
		}
		gained := walk * h.step[i]
		det += gained * oo
		ww += gained

		v := h.variance[i]
		f := ww + 2*wo + oo + v
		y, x := y-value.w-value.o, 1-one.w-one.o
		gainW, gainO := (ww+wo)/f, (wo+oo)/f
		value.w += gainW * y
		value.o += gainO * y
		one.w += gainW * x
		one.o += gainO * x
		ww, oo, wo, det = (det+ww*v)/f, (det+oo*v)/f, (wo*v-det)/f, det*v/f
		h.y[i], h.x[i], h.f[i] = y, x, f
		sum += math.Log(2 * math.Pi * f)
		xx += x * x / f
		xy += x * y / f
	}
	level := xy / xx
	for i, f := range h.f {
		d := h.y[i] - level*h.x[i]
		sum += d * d / f
	}
	return -(sum + math.Log(xx/(2*math.Pi))) / 2
}

// maximum returns where f is largest between lo and hi, and f there: on a grid of step about 1/2,
// then by golden section about the best point, to 1e-4.
func maximum(lo, hi float64, f func(float64) float64) (x, best float64) {
	n := math.Ceil(2 * (hi - lo))
	step := (hi - lo) / n
	best = math.Inf(-1)
	for i := range int(n) + 1 {
		at := lo + step*float64(i)
		if v := f(at); v > best {
			x, best = at, v
		}
	}
	const golden = 0.6180339887498949 // (sqrt(5) - 1) / 2
	a, b := math.Max(lo, x-step), math.Min(hi, x+step)
	c, d := b-golden*(b-a), a+golden*(b-a)
	fc, fd := f(c), f(d)
	for b-a > 1e-4 {
		if fc > fd {
			b, d, fd = d, c, fc
			c = b - golden*(b-a)
			fc = f(c)
		} else {
			a, c, fc = c, d, fd
			d = a + golden*(b-a)
			fd = f(d)
		}
	}
	for _, p := range [2]struct{ at, v float64 }{{c, fc}, {d, fd}} {
		if p.v > best {
			x, best = p.at, p.v
		}
	}
	return x, best
}
