package posterior

import "math"

// level returns the density of the level, eta less the bias. Where the bias given eta
// is of one variance and its mean on a line, as always of a level that stays, the
// lattice shrinks by what the mean takes and is then spread by the variance; else
// each point is spread by itself.
func (g *Grid) level() lattice {
	l := g.field.clone()
	l.mean, l.variance = nil, nil
	if g.field.mean == nil || g.field.flat() {
		return l
	}
	line := g.field.line()
	if line.straight || !line.wide {
		left := max(1-line.slope, 1e-14)
		l.shrink(l.origin.Plus(line.at), left)
		l.origin = l.origin.Plus(-line.mean)
		l.spread(line.variance)
		return l
	}
	return g.field.differences()
}

// line is the mean of the bias as a line over eta, with its mean variance.
type line struct {
	at, mean, slope, variance float64
	straight                  bool // there is but rounding besides
	wide                      bool // points are closer than the bias is spread
}

// line fits, weighted by the density.
func (l *lattice) line() line {
	top := l.highest()
	var weight, sx, sm, sv float64
	for i, v := range l.logs {
		w := math.Exp(v - top)
		weight, sx, sm, sv = weight+w, sx+w*l.x(i), sm+w*l.mean[i], sv+w*l.variance[i]
	}
	f := line{at: sx / weight, mean: sm / weight, variance: sv / weight, straight: true, wide: true}
	var sxx, sxm float64
	for i, v := range l.logs {
		w, d := math.Exp(v-top), l.x(i)-f.at
		sxx, sxm = sxx+w*d*d, sxm+w*d*(l.mean[i]-f.mean)
	}
	f.slope = sxm / sxx
	for i, v := range l.logs {
		if top-v > depthServed {
			continue
		}
		off := l.mean[i] - f.mean - f.slope*(l.x(i)-f.at)
		if off*off > 1e-8*f.variance || math.Abs(l.variance[i]-f.variance) > 1e-5*f.variance {
			f.straight = false
		}
		if gap := l.step * (1 - f.slope); gap*gap > l.variance[i] {
			f.wide = false
		}
	}
	return f
}

// differences returns the density of eta less the bias, each point of eta spread by the
// bias given it.
func (l *lattice) differences() lattice {
	top := l.highest()
	s := l.stretch(len(l.logs), top-depthKept-depthServed)
	stride := 1
	for 2*stride <= 16 && l.resolves(2*stride, top) && s.apart(2*stride, top) {
		stride *= 2
	}
	var centres, rates, masses []float64
	var m moments
	for i := 0; i < len(s.logs); i += stride {
		w, v := math.Exp(s.logs[i]-top), s.variance[i]
		if !(v > 0) {
			continue // too deep to have had a density to mix
		}
		centres, rates = append(centres, s.x(i)-s.mean[i]), append(rates, 1/(2*v))
		masses = append(masses, w*float64(stride)*s.step/math.Sqrt(2*math.Pi*v))
		m.add(w, s.x(i)-s.mean[i], v)
	}
	mean, variance := m.about(0)
	p := placed{open: l.open, f: func(x float64) float64 {
		sum := 0.0
		for i, c := range centres {
			sum += masses[i] * math.Exp(-(x-c)*(x-c)*rates[i])
		}
		return top + math.Log(max(sum, math.SmallestNonzeroFloat64))
	}}
	b := lattice{origin: l.origin, step: powerOfTwo(math.Sqrt(variance) / 14), open: l.open}
	reach := math.Sqrt(2*depthKept*variance) + b.step
	lo, hi := mean-reach, mean+reach
	for range 20 {
		b.lay(lo, hi, &p)
		if !b.wider(b.highest(), &lo, &hi) {
			break
		}
	}
	for len(b.logs) <= mostPoints && !b.resolves(1, b.highest()) {
		b.halve(&p)
	}
	b.trim()
	return b
}

// apart tells whether every stride-th point is near enough to the next for the spread
// of the bias.
func (l *lattice) apart(stride int, top float64) bool {
	for i := stride; i < len(l.logs); i += stride {
		gap := (l.x(i) - l.mean[i]) - (l.x(i-stride) - l.mean[i-stride])
		if top-l.logs[i] < depthServed && gap*gap > 0.6*l.variance[i] {
			return false
		}
	}
	return true
}
