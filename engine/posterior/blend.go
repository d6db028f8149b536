package posterior

import "math"

// blend is a mixture of distributions of one scale.
type blend struct {
	parts   []Posterior
	weights []float64 // above 0, summing to 1
	normals bool      // all parts are
	hasMean bool
	hasSD   bool
}

// Blend returns the mixture of the parts with weights proportional to
// exp(logWeights), as many as parts, each finite or -Inf. A part whose weight
// vanishes beside the largest (below 1e-300 of it) counts for nothing. The parts
// are all of one scale, linear or logarithmic (Exp), which is that of the blend.
//
// Its form is GRID if a part's is and MIXTURE else; FormNone without a part of any
// weight or if one of them is FormNone. If a single part has weight it is
// returned as it is. Moments exist if all parts have them:
//
//	mean = sum w m_i,  variance = sum w (s_i^2 + (m_i - mean)^2)
//
// (law of total variance; Gelman et al. 2013, equation 1.9). Tails are sums of
// positive terms and keep the parts' relative accuracy down to 1e-300; with normal
// parts they allocate nothing. Slices are copied.
func Blend(logWeights []float64, parts []Posterior) Posterior {
	b, ok := weighed(logWeights, parts)
	if !ok {
		return Posterior{}
	}
	if len(b.parts) == 1 {
		return b.parts[0]
	}
	return b.posterior()
}

// posterior works out form and moments.
func (b *blend) posterior() Posterior {
	out := Posterior{form: FormMixture, shape: b, logarithmic: b.parts[0].logarithmic}
	b.normals, b.hasMean, b.hasSD = true, true, true
	for i := range b.parts {
		p := &b.parts[i]
		_, hasMean := p.mean()
		_, hasSD := p.sd()
		b.hasMean, b.hasSD = b.hasMean && hasMean, b.hasSD && hasSD
		b.normals = b.normals && p.form == FormNormal
		out.momentless = out.momentless || p.momentless
		if p.form == FormGrid {
			out.form = FormGrid
		}
	}
	out.location, out.scale = b.total(func(p *Posterior) (Level, float64) {
		sd, _ := p.sd()
		return p.location, sd
	})
	return out
}

// weighed returns the parts that have weight, and false if there are none or
// nothing is known of one.
func weighed(logWeights []float64, parts []Posterior) (*blend, bool) {
	top := math.Inf(-1)
	for _, w := range logWeights {
		top = math.Max(top, w)
	}
	if math.IsInf(top, -1) {
		return nil, false
	}
	b := &blend{parts: make([]Posterior, 0, len(parts)), weights: make([]float64, 0, len(parts))}
	whole := 0.0
	for i, p := range parts {
		w := math.Exp(logWeights[i] - top)
		switch {
		case w < 1e-300:
			continue
		case p.form == FormNone:
			return nil, false
		}
		whole += w
		b.parts, b.weights = append(b.parts, p), append(b.weights, w)
	}
	for i := range b.weights {
		b.weights[i] /= whole
	}
	return b, true
}

// total returns mean and standard deviation of the whole from those of the parts,
// the mean relative to that of the heaviest part, so that its error is small
// beside the distances between the parts.
func (b *blend) total(of func(*Posterior) (mean Level, sd float64)) (Level, float64) {
	anchor, _ := of(&b.parts[b.heaviest()])
	offset := 0.0
	for i := range b.parts {
		m, _ := of(&b.parts[i])
		offset += b.weights[i] * m.Minus(anchor)
	}
	whole := 0.0
	for i := range b.parts {
		m, s := of(&b.parts[i])
		whole = math.Hypot(whole, math.Sqrt(b.weights[i])*math.Hypot(s, m.Minus(anchor)-offset))
	}
	return anchor.Plus(offset), whole
}

// heaviest returns the index of the part of largest weight.
func (b *blend) heaviest() int {
	best := 0
	for i, w := range b.weights {
		if w > b.weights[best] {
			best = i
		}
	}
	return best
}

func (b *blend) moments() (hasMean, hasSD bool) { return b.hasMean, b.hasSD }

func (b *blend) tail(x float64, s side) float64 { return b.tailAt(pair{hi: x}, s) }

func (b *blend) between(lo, hi float64) float64 {
	return b.betweenAt(pair{hi: lo}, pair{hi: hi}, hi-lo)
}

func (b *blend) tailAt(x pair, s side) float64 {
	sum := 0.0
	if !b.normals || math.IsInf(x.hi, 0) {
		for i := range b.parts {
			sum += b.weights[i] * b.parts[i].tail(x, s)
		}
		return math.Min(1, sum)
	}
	// A plain double serves as argument: erfc amplifies its error by 1400 at 1e-300.
	side := float64(s) * sqrtHalf.hi
	for i := range b.parts {
		p := &b.parts[i]
		z := ((x.hi - p.location.Hi) + (x.lo - p.location.Lo)) / p.scale
		sum += b.weights[i] * math.Erfc(side*z)
	}
	return math.Min(1, sum/2)
}

func (b *blend) betweenAt(lo, hi pair, width float64) float64 {
	sum := 0.0
	for i := range b.parts {
		sum += b.weights[i] * b.parts[i].between(lo, hi, width)
	}
	return math.Min(1, sum)
}

// exponentialMoments returns mean and standard deviation of exp(X), NaN or infinite
// where a part has none.
func (b *blend) exponentialMoments() (mean, sd float64, ok bool) {
	m, sd := b.total(func(p *Posterior) (Level, float64) {
		mean, sd := p.exponentialMoments()
		return LevelOf(mean), sd
	})
	return m.Value(), sd, isFinite(m.Value())
}
