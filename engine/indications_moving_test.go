package engine_test

import (
	"math"

	"gonum.org/v1/gonum/floats"

	"leadline.example/engine"
)

// plane is a density over bias and eta: of bias number j at p[j], at points step apart
// from lo.
type plane struct {
	number   int // of the calibration
	mean, u  float64
	bias     []float64
	lo, step float64
	p        [][]float64
	log      float64 // ln of what p is to be multiplied by
}

// moving returns a level that walks or reverts, under r.
func (o *dense) moving(r float64, at engine.Instant) *tabled {
	h := o.spacing(r, at)
	s := &plane{number: -2}
	var now engine.Instant
	next := 0
	begin := func(life int, to engine.Instant) {
		_, prior := o.life(to)
		switch {
		case s.p == nil:
			s.number, s.mean, s.u = o.bias(to)
			s.bias = biases(s.mean, s.u, h)
			s.fill(o, prior, r, h, nil)
		default:
			s.fill(o, prior, r, h, s.ofBias())
		}
		next, now = life, to
	}
	advance := func(to engine.Instant) {
		for next < len(o.renewals) && o.renewals[next].Time <= to {
			begin(next+1, o.renewals[next].Time)
		}
		left, about, sd := o.motion(now, to)
		s.move(left, about, sd, h)
		now = to
	}
	first := o.readings[0].Time
	if o.d.Prior.HasTime {
		first = o.d.Prior.Time
	}
	life, _ := o.life(first)
	begin(life, first)
	for i := range o.readings {
		to := o.readings[i].Time
		advance(to)
		if n, mean, u := o.bias(to); n != s.number {
			s.number, s.mean, s.u = n, mean, u
			s.recalibrate(biases(mean, u, h))
		}
		y := o.says(i)
		s.read(&y, r)
		if o.widened == i+1 {
			s.move(1, 0, o.d.StepDetection.Widen, h)
		}
	}
	advance(at)
	if o.unknown(at) {
		return nil
	}
	lo, logs := s.level()
	t := tabulate(lo, s.step, logs, 16)
	t.log += s.log
	return t
}

// unknown tells whether nothing two-sided is known of the level.
func (o *dense) unknown(at engine.Instant) bool {
	n, prior := o.life(at)
	if _, _, flat := o.start(prior); !flat {
		return false
	}
	below, above := false, false
	for i := range o.readings {
		if m, _ := o.life(o.readings[i].Time); m == n {
			y := o.says(i)
			below, above = below || !math.IsInf(y.lower, 0), above || !math.IsInf(y.upper, 0)
		}
	}
	return !below || !above
}

// motion returns what is left of a distance from a level, and the standard deviation gained.
func (o *dense) motion(from, to engine.Instant) (left, about, sd float64) {
	y, seconds := &o.d.Dynamics, float64(to-from)/1e9
	if y.Form == engine.DynamicsMeanReverting {
		left = math.Exp2(-seconds / y.HalfLife.Seconds())
		return left, o.scaled(y.Mean), y.StandardDeviation * math.Sqrt(-math.Expm1(-2*math.Ln2*seconds/y.HalfLife.Seconds()))
	}
	if y.Form == engine.DynamicsConstant {
		return 1, 0, 0
	}
	return 1, 0, y.StandardDeviation * math.Sqrt(seconds/y.Per.Seconds())
}

// spacing returns how close points must lie under r: by the narrowest that the level is
// ever known, had every reading been a value, by what is known of a bias, and by the shortest
// movement, unless that is small beside the former.
func (o *dense) spacing(r float64, at engine.Instant) float64 {
	variance, least, moved := math.Inf(1), math.Inf(1), math.Inf(1)
	last, life := o.readings[0].Time, -1
	if o.d.Prior.HasTime {
		last = o.d.Prior.Time
	}
	step := func(to engine.Instant) {
		if left, _, sd := o.motion(last, to); sd > 0 {
			variance, moved = variance*left*left+sd*sd, math.Min(moved, sd)
		}
		last = to
		if n, prior := o.life(to); n != life {
			life, variance = n, math.Inf(1)
			if _, sd, flat := o.start(prior); !flat {
				variance = sd * sd
			}
		}
	}
	for i := range o.readings {
		step(o.readings[i].Time)
		y := o.says(i)
		noise := y.noise(r)
		variance = 1 / (1/variance + 1/noise/noise)
		least = math.Min(least, variance)
	}
	step(at)
	narrowest := math.Sqrt(math.Min(least, variance))
	if o.d.Dynamics.Form == engine.DynamicsRandomWalk {
		moved = math.Max(moved, 0.03*narrowest)
	}
	h := math.Min(0.45*narrowest, 0.8*moved)
	if o.by != nil {
		for _, c := range o.by.Calibrations {
			h = math.Min(h, 0.6*c.BiasStandardUncertainty)
		}
	}
	return h / math.Max(1, o.fineness)
}

// biases returns points h apart over all that a bias may be.
func biases(mean, u, h float64) []float64 {
	n := int(math.Ceil(11 * u / h))
	all := make([]float64, 0, 2*n+1)
	for j := -n; j <= n; j++ {
		all = append(all, mean+float64(j)*h)
	}
	return all
}

// fill lets a life of the level begin, whose bias has been given those weights or, if they
// are nil, is as its calibration found it.
func (s *plane) fill(o *dense, prior engine.Prior, r, h float64, weights []float64) {
	if weights == nil {
		weights = s.calibrated()
	}
	mean, sd, flat := o.start(prior)
	first, last := s.bias[0], s.bias[len(s.bias)-1]
	lo, hi := mean+first-14*sd, mean+last+14*sd
	if flat {
		var widest float64
		lo, hi, widest = o.hull(r)
		_, _, walked := o.motion(o.readings[0].Time, o.readings[len(o.readings)-1].Time)
		lo, hi = lo-14*(widest+walked), hi+14*(widest+walked)
	}
	n := int((hi-lo)/h) + 2
	s.lo, s.step, s.p = lo, h, make([][]float64, len(s.bias))
	for j, w := range weights {
		s.p[j] = make([]float64, n)
		for i := range s.p[j] {
			s.p[j][i] = w
			if !flat {
				z := (lo + float64(i)*h - s.bias[j] - mean) / sd
				s.p[j][i] *= math.Exp(-z*z/2) / sd / math.Sqrt(2*math.Pi)
			}
		}
	}
}

// calibrated returns what the points of the bias weigh after its calibration.
func (s *plane) calibrated() []float64 {
	weights, n := make([]float64, len(s.bias)), len(s.bias)
	if n == 1 {
		return []float64{1}
	}
	for j, b := range s.bias {
		z := (b - s.mean) / s.u
		weights[j] = math.Exp(-z * z / 2)
	}
	floats.Scale(1/floats.Sum(weights), weights)
	return weights
}

// ofBias returns what the points of the bias weigh.
func (s *plane) ofBias() []float64 {
	weights := make([]float64, len(s.p))
	for j := range s.p {
		weights[j] = floats.Sum(s.p[j]) * s.step
	}
	return weights
}

// move lets the level go on: a part of its distance from a level is left, and a normal is added.
func (s *plane) move(left, about, sd, h float64) {
	if sd == 0 {
		return
	}
	for j := range s.p {
		if left == 1 {
			s.p[j] = walked(s.p[j], s.step, sd)
			continue
		}
		s.p[j] = s.reverted(s.p[j], left, about, sd, h)
	}
	if left == 1 {
		s.lo -= float64(reach(sd, s.step)) * s.step
		return
	}
	s.lo, s.step = about+left*(s.lo-about)-11*sd, h
}

// reach is over how many points a normal is summed.
func reach(sd, step float64) int { return int(11*sd/step) + 1 }

func walked(p []float64, step, sd float64) []float64 {
	k := reach(sd, step)
	kernel := make([]float64, 2*k+1)
	for i := range kernel {
		z := float64(i-k) * step / sd
		kernel[i] = math.Exp(-z*z/2) / sd / math.Sqrt(2*math.Pi) * step
	}
	if t := sd * sd / step / step; t < 0.7 { // a density that is smooth over steps feels the variance alone
		clear(kernel)
		kernel[k-1], kernel[k], kernel[k+1] = t/2, 1-t, t/2
	}
	out := make([]float64, len(p)+2*k)
	for i, v := range p {
		if v > 0 {
			floats.AddScaled(out[i:i+2*k+1], v, kernel)
		}
	}
	return out
}

func (s *plane) reverted(p []float64, left, about, sd, h float64) []float64 {
	lo, hi := about+left*(s.lo-about), about+left*(s.lo+float64(len(p)-1)*s.step-about)
	from := lo - 11*sd
	out := make([]float64, int((hi+11*sd-from)/h)+2)
	for j := range out {
		y := from + float64(j)*h
		first := max(0, int((y-11*sd-lo)/(left*s.step)))
		last := min(len(p)-1, int((y+11*sd-lo)/(left*s.step))+1)
		sum := 0.0
		for i := first; i <= last; i++ {
			z := (y - lo - float64(i)*left*s.step) / sd
			sum += p[i] * math.Exp(-z*z/2)
		}
		out[j] = sum * s.step / sd / math.Sqrt(2*math.Pi)
	}
	return out
}

// read multiplies by what a reading says, and leaves out what doesn't matter.
func (s *plane) read(y *blurred, r float64) {
	n := len(s.p[0])
	logs := make([]float64, n)
	for i := range logs {
		logs[i] = y.log(s.lo+float64(i)*s.step, r)
	}
	shift := floats.Max(logs)
	highest := make([]float64, n)
	top := 0.0
	for i, v := range logs {
		logs[i] = math.Exp(v - shift)
	}
	for j := range s.p {
		for i := range s.p[j] {
			s.p[j][i] *= logs[i]
			highest[i] = math.Max(highest[i], s.p[j][i])
		}
	}
	top = floats.Max(highest)
	s.log += shift + math.Log(top)
	first, last := n-1, 0
	for i, v := range highest {
		if v > top*1e-38 {
			first, last = min(first, i), max(last, i)
		}
	}
	for j := range s.p {
		s.p[j] = s.p[j][first : last+1]
		floats.Scale(1/top, s.p[j])
	}
	s.lo += float64(first) * s.step
}

// level returns ln of the density of the level: along the lines eta - bias.
func (s *plane) level() (lo float64, logs []float64) {
	n, m := len(s.p[0]), len(s.bias)
	logs = make([]float64, n+m-1)
	for j := range s.p {
		floats.Add(logs[m-1-j:m-1-j+n], s.p[j])
	}
	for i := range logs {
		logs[i] = math.Log(logs[i])
	}
	return s.lo - s.bias[m-1], logs
}

// recalibrate has a new bias, of which nothing is known but its calibration.
func (s *plane) recalibrate(bias []float64) {
	lo, logs := s.level()
	s.bias = bias
	weights := s.calibrated()
	s.p = make([][]float64, len(bias))
	for j := range s.p {
		s.p[j] = make([]float64, len(logs)+len(bias)-1)
		for i, v := range logs {
			s.p[j][i+j] = weights[j] * math.Exp(v)
		}
	}
	s.lo = lo + bias[0]
}
