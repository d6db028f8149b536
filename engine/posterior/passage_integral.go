package posterior

import (
	"math"
	"slices"
)

// overlay says where a crossing probability given the level has its features.
type overlay struct {
	time   float64 // seconds
	finest float64 // the width of the narrowest layer at a limit, in the quantity's unit
	smear  float64 // the width of the step where the drift just reaches a limit
}

// most is how many standard deviations of the level are looked at: beyond is
// 2e-33.
const most = 12

// over integrates the probabilities of crossing below and above over the level's
// belief inside the limits, and adds the mass outside. They are functions of the
// distance from their limit and the mean drift in the time, both given the level.
func (p *Passage) over(o overlay, below, above func(distance, drift float64) float64) Crossing {
	now := p.now()
	b, a := now.Below, now.Above
	if p.limits.HasLower {
		b += p.integral(o, 1, p.course.Mean-p.limits.Lower, below)
	}
	if p.limits.HasUpper {
		a += p.integral(o, -1, p.limits.Upper-p.course.Mean, above)
	}
	return crossing(b, a)
}

// integral is that of one limit, whose distance from a level of mean + sd z is
// gap + sign sd z.
func (p *Passage) integral(o overlay, sign, gap float64, f func(distance, drift float64) float64) float64 {
	c := p.course
	lo, hi := p.inside(most)
	if !(lo < hi) {
		return 0
	}
	if c.SD == 0 {
		return f(gap, c.Slope*o.time)
	}
	tilt := c.Correlation * c.SlopeSD * o.time
	g := func(z float64) float64 {
		distance := math.Max(0, gap+sign*c.SD*z)
		return math.Exp(logNormalDensity(z)) * f(distance, c.Slope*o.time+tilt*z)
	}
	cuts := []float64{lo, hi}
	for _, z := range [...]float64{-8, -5, -2.5, 0, 2.5, 5, 8} {
		cuts = append(cuts, z)
	}
	limit := -sign * gap / c.SD
	for d := 2 * o.finest / c.SD; d < 4 && d > 0; d *= 8 {
		cuts = append(cuts, limit+sign*d)
	}
	// Where the drift alone just reaches the limit.
	if rise := c.SD + tilt; rise != 0 {
		kink, width := -(sign*gap+c.Slope*o.time)/rise, 3*o.smear/math.Abs(rise)
		if width < 1 {
			cuts = append(cuts, kink-width, kink, kink+width)
		}
	}
	return integrate(g, cuts, lo, hi) / math.Sqrt(2*math.Pi)
}

// Nodes and weights of the 15-point Kronrod rule on [-1, 1] that extends the
// 7-point Gauss rule: QUADPACK (Piessens et al. 1983), qk15, from memory; a test
// integrates the powers that they must get right.
var (
	kronrodNodes = [8]float64{
		0.991455371120812639206854697526329, 0.949107912342758524526189684047851,
		0.864864423359769072789712788640926, 0.741531185599394439863864773280788,
		0.586087235467691130294144691658730, 0.405845151377397166906606412076961,
		0.207784955007898467600689403773245, 0,
	}
	kronrodWeights = [8]float64{
		0.022935322010529224963732008058970, 0.063092092629978553290700663189204,
		0.104790010322250183839876322541518, 0.140653259715525918745189590510238,
		0.169004726639267902826583426598550, 0.190350578064785409913256402421014,
		0.204432940075298892414161999234649, 0.209482141084727828012999174891714,
	}
	gaussWeights = [4]float64{
		0.129484966168869693270611432679082, 0.279705391489276667901467771423780,
		0.381830050505118944950369775488975, 0.417959183673469387755102040816327,
	}
)

// panel is an interval with the integral over it and how far that may be off.
type panel struct{ lo, hi, sum, off float64 }

// integrate returns the integral of a function >= 0 over [lo, hi], to some 1e-11
// of it. It starts from the cuts inside and halves what isn't exact yet.
func integrate(f func(float64) float64, cuts []float64, lo, hi float64) float64 {
	slices.Sort(cuts)
	var panels []panel
	total, from := 0.0, lo
	for _, c := range cuts {
		if !(c > from) || c > hi {
			continue
		}
		q := newPanel(f, from, c)
		panels = append(panels, q)
		total += q.sum
		from = c
	}
	sum := 0.0
	for _, q := range panels {
		sum += q.refine(f, 1e-12*total, 40)
	}
	return sum
}

func (q panel) refine(f func(float64) float64, tolerance float64, depth int) float64 {
	if q.off <= tolerance || depth == 0 {
		return q.sum
	}
	middle := q.lo/2 + q.hi/2
	return newPanel(f, q.lo, middle).refine(f, tolerance, depth-1) +
		newPanel(f, middle, q.hi).refine(f, tolerance, depth-1)
}

// newPanel estimates its error as QUADPACK does: the Kronrod rule is much better
// than its difference from the Gauss rule.
func newPanel(f func(float64) float64, lo, hi float64) panel {
	middle, half := lo/2+hi/2, hi/2-lo/2
	at := f(middle)
	fine, coarse := kronrodWeights[7]*at, gaussWeights[3]*at
	for i := range 7 {
		d := half * kronrodNodes[i]
		both := f(middle-d) + f(middle+d)
		fine += kronrodWeights[i] * both
		if i%2 == 1 {
			coarse += gaussWeights[i/2] * both
		}
	}
	off := math.Abs(fine - coarse)
	if fine > 0 {
		off *= math.Min(1, 100*math.Sqrt(off/fine))
	}
	return panel{lo: lo, hi: hi, sum: half * fine, off: half * off}
}
