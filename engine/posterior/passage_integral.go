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

// kernel is a probability of crossing, given the distance from the limit and the
// mean drift in the time; and the size of the terms that it is the sum of, in
// whose last digits it is uncertain.
type kernel func(distance, drift float64) (p, size float64)

// most is how many standard deviations of the level are looked at: beyond is
// 2e-33.
const most = 12

// over integrates the probabilities of crossing below and above over the level's
// belief inside the limits, and adds the mass outside.
func (p *Passage) over(o overlay, below, above kernel) Crossing {
	now := p.now()
	b, a := now.Below, now.Above
	if p.limits.HasLower {
		b += p.integral(o, 1, p.course.Mean-p.limits.Lower, b, below)
	}
	if p.limits.HasUpper {
		a += p.integral(o, -1, p.limits.Upper-p.course.Mean, a, above)
	}
	return crossing(b, a)
}

// integral is that of one limit, whose distance from a level of mean + sd z is
// gap + sign sd z. It is good to some 1e-11 of itself and of the mass outside: a
// layer too thin for the digits of z adds nothing to that mass.
func (p *Passage) integral(o overlay, sign, gap, outside float64, f kernel) float64 {
	c := p.course
	lo, hi := p.inside(most)
	if !(lo < hi) {
		return 0
	}
	if c.SD == 0 {
		p, _ := f(gap, c.Slope*o.time)
		return p
	}
	tilt := c.Correlation * c.SlopeSD * o.time
	g := func(z float64) (v, size float64) {
		distance := math.Max(0, gap+sign*c.SD*z)
		v, size = f(distance, c.Slope*o.time+tilt*z)
		density := math.Exp(logNormalDensity(z))
		return density * v, density * size
	}
	cuts := []float64{lo, hi}
	for _, z := range [...]float64{-8, -5, -2.5, 0, 2.5, 5, 8} {
		cuts = append(cuts, z)
	}
	limit := -sign * gap / c.SD
	for d := 2 * o.finest / c.SD; d < 4 && d > 0; d *= 8 {
		cuts = append(cuts, limit+sign*d)
	}
	// Where the drift alone just reaches a limit, and where it turns.
	for _, kink := range p.kinks(o, tilt) {
		for d := 3 * kink.width; d < 4 && d > 0; d *= 8 {
			cuts = append(cuts, kink.z-d, kink.z+d)
		}
		cuts = append(cuts, kink.z)
	}
	root := math.Sqrt(2 * math.Pi)
	return integrate(g, cuts, lo, hi, outside*root) / root
}

// kink is where, in standard deviations of the level, what happens turns, and how
// narrowly.
type kink struct{ z, width float64 }

// kinks returns those of a level whose mean drift changes by tilt with z.
func (p *Passage) kinks(o overlay, tilt float64) []kink {
	c := p.course
	var all []kink
	add := func(distance, rise float64) {
		if rise != 0 && !math.IsInf(distance, 0) {
			all = append(all, kink{distance / rise, o.smear / math.Abs(rise)})
		}
	}
	if p.limits.HasLower {
		add(p.limits.Lower-c.Mean-c.Slope*o.time, c.SD+tilt)
	}
	if p.limits.HasUpper {
		add(p.limits.Upper-c.Mean-c.Slope*o.time, c.SD+tilt)
	}
	add(-c.Slope*o.time, tilt)
	return all
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

// panel is an interval with the integral over it, how far that may be off, and the
// integral of the terms' size.
type panel struct{ lo, hi, sum, off, size float64 }

// mostPanels bounds the work where rounding keeps an integrand from looking
// smooth.
const mostPanels = 600

// integrate returns the integral of a function >= 0 over [lo, hi], to some 1e-11
// of it and what it is added to. It starts from the cuts inside and halves what isn't exact yet.
func integrate(f func(float64) (v, size float64), cuts []float64, lo, hi, besides float64) float64 {
	slices.Sort(cuts)
	var panels []panel
	total, size, from := 0.0, 0.0, lo
	for _, c := range cuts {
		if !(c > from) || c > hi {
			continue
		}
		q := newPanel(f, from, c)
		panels = append(panels, q)
		total += q.sum
		size += q.size
		from = c
	}
	sum := 0.0
	left := mostPanels
	for _, q := range panels {
		sum += q.refine(f, 1e-12*(total+besides)+1e-16*size, &left)
	}
	return sum
}

func (q panel) refine(f func(float64) (v, size float64), tolerance float64, left *int) float64 {
	middle := q.lo/2 + q.hi/2
	if !(q.off > tolerance) || *left <= 0 || middle <= q.lo || middle >= q.hi {
		return q.sum
	}
	*left -= 2
	return newPanel(f, q.lo, middle).refine(f, tolerance, left) +
		newPanel(f, middle, q.hi).refine(f, tolerance, left)
}

// newPanel estimates its error as QUADPACK does: the Kronrod rule is much better
// than its difference from the Gauss rule.
func newPanel(f func(float64) (v, size float64), lo, hi float64) panel {
	middle, half := lo/2+hi/2, hi/2-lo/2
	at, size := f(middle)
	fine, coarse := kronrodWeights[7]*at, gaussWeights[3]*at
	size *= kronrodWeights[7]
	for i := range 7 {
		d := half * kronrodNodes[i]
		left, leftSize := f(middle - d)
		right, rightSize := f(middle + d)
		fine += kronrodWeights[i] * (left + right)
		size += kronrodWeights[i] * (leftSize + rightSize)
		if i%2 == 1 {
			coarse += gaussWeights[i/2] * (left + right)
		}
	}
	off := math.Abs(fine - coarse)
	if fine > 0 {
		off *= math.Min(1, 100*math.Sqrt(off/fine))
	}
	return panel{lo: lo, hi: hi, sum: half * fine, off: half * off, size: half * size}
}
