package modelcheck

import "math"

// process is by what readings come about beside a level that is flat at the first one.
type process struct {
	walk       float64 // variance that the level gains in a second
	correlated float64 // variance of the correlated noise, 0: there is none
	seconds    float64 // its correlation time
	r          float64 // repeatability where it is learned
}

// history is the readings prepared for many likelihoods.
type history struct {
	points   []Point
	declared Learned
	learns   bool
	value    []float64 // less the first
	step     []float64 // seconds since the point before
	y, x     []float64 // innovations of values and of the level's regressor
	weight   []float64 // 1 over their variance

	r       float64   // for which white is
	white   []float64 // variance of the white noise
	seconds float64   // for which left and fresh are
	left    []float64 // of the correlated noise after step
	fresh   []float64 // and the share of its variance that is new, 1 - left^2

	span, shortest  float64 // of the whole, and the shortest step above 0, in seconds
	finest, largest float64 // variances: the least of the noise, and what covers all values
	scale           float64 // about r where it is learned, else above 0
	share           float64 // the largest part that r^2 has in a variance
}

func newHistory(points []Point, r Learned) *history {
	n := len(points)
	all := make([]float64, 8*n)
	h := &history{points: points, declared: r, shortest: math.Inf(1), finest: math.Inf(1), scale: 1, r: math.NaN()}
	for i, part := range [...]*[]float64{&h.value, &h.step, &h.y, &h.x, &h.weight, &h.white, &h.left, &h.fresh} {
		*part = all[i*n : (i+1)*n]
	}
	for i, p := range points {
		h.value[i] = p.Value - points[0].Value
		h.share = math.Max(h.share, p.Learned)
		h.largest = math.Max(h.largest, p.Variance+h.value[i]*h.value[i])
		if i == 0 {
			continue
		}
		h.step[i] = p.Seconds - points[i-1].Seconds
		h.span += h.step[i]
		if h.step[i] > 0 {
			h.shortest = math.Min(h.shortest, h.step[i])
		}
	}
	if h.learns = h.share > 0; h.learns {
		h.measure()
	}
	for _, p := range points {
		h.finest = math.Min(h.finest, p.Variance+p.Learned*h.scale*h.scale)
	}
	return h
}

// measure sets the scale: the standard deviation by half the mean squared
// difference of neighbours that have r (von Neumann 1941, Annals of Mathematical Statistics 12,
// 367-395, from memory), which a moving level hardly widens; if they don't differ, by what
// else is known of their size.
func (h *history) measure() {
	sum, known, count, last := 0.0, 0.0, 0.0, math.NaN()
	for i, p := range h.points {
		if p.Learned == 0 {
			continue
		}
		if d := h.value[i] - last; count > 0 {
			sum += d * d / 2
		}
		last = h.value[i]
		known += p.Variance
		count++
	}
	h.scale = math.Sqrt(sum / math.Max(1, count-1) / h.share)
	for _, variance := range [...]float64{known / count, h.declared.Guess * h.declared.Guess, h.declared.Floor * h.declared.Floor, h.largest} {
		if h.scale > 0 {
			return
		}
		h.scale = math.Sqrt(variance / h.share)
	}
}

// prepare sets what depends on r and on the correlation time.
func (h *history) prepare(p *process) {
	if p.r != h.r {
		h.r = p.r
		for i := range h.points {
			h.white[i] = h.points[i].Variance + h.points[i].Learned*p.r*p.r
		}
	}
	if p.correlated > 0 && p.seconds != h.seconds {
		h.seconds = p.seconds
		for i, step := range h.step {
			h.left[i] = math.Exp(-step / p.seconds)
			h.fresh[i] = -math.Expm1(-2 * step / p.seconds)
		}
	}
}

// cost is what r takes off the log-likelihood for not being the guess.
func (d *Learned) cost(r float64) float64 {
	if d.Worth == 0 {
		return 0
	}
	ratio := d.Guess / r
	return d.Worth * ((ratio*ratio-1)/2 - math.Log(ratio))
}

// logLikelihood returns the integral of the density of all values over the level at the first
// reading, less what the process takes off for a guess of r.
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
func (h *history) logLikelihood(p *process) float64 {
	h.prepare(p)
	walk, correlated := p.walk, p.correlated
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

		v := h.white[i]
		f := ww + 2*wo + oo + v
		part := 1 / f
		y, x := y-value.w-value.o, 1-one.w-one.o
		gainW, gainO := (ww+wo)*part, (wo+oo)*part
		value.w += gainW * y
		value.o += gainO * y
		one.w += gainW * x
		one.o += gainO * x
		ww, oo, wo, det = (det+ww*v)*part, (det+oo*v)*part, (wo*v-det)*part, det*v*part
		h.y[i], h.x[i], h.weight[i] = y, x, part
		sum += math.Log(2 * math.Pi * f)
		xx += x * x * part
		xy += x * y * part
	}
	level := xy / xx
	for i, part := range h.weight {
		d := h.y[i] - level*h.x[i]
		sum += d * d * part
	}
	return -(sum+math.Log(xx/(2*math.Pi)))/2 - h.declared.cost(p.r)
}
