package engine

import (
	"math"
	"slices"
)

// with returns the model with one more instrument.
func (m *model) with(i *Instrument) *model {
	n := *m
	n.instruments = append(slices.Clip(m.instruments), i)
	return &n
}

// learns returns what is known beforehand of the repeatability that the model learns; nil
// where it learns none.
func (m *model) learns() *Repeatability {
	for _, i := range m.instruments {
		if r := &i.Declaration.Repeatability.Learned; r.Learned() {
			return r
		}
	}
	if r := &m.declaration().Repeatability; r.Learned() {
		return r
	}
	return nil
}

// teaches tells whether a reading says something of the repeatability that is learned.
func (m *model) teaches(e *Row) bool {
	if e.HasUncertainty || m.learns() == nil {
		return false
	}
	if e.Instrument == 0 {
		return m.declaration().Repeatability.Learned()
	}
	r := &m.instrument(e.Instrument).Declaration.Repeatability
	return r.Learned.Learned() || r.StandardDeviation == 0 && m.declaration().Repeatability.Learned()
}

// given returns the model with the repeatability that is learned being r.
func (m *model) given(r float64) *model {
	if m.learns() == nil {
		return m
	}
	g := *m
	own := false
	g.instruments = make([]*Instrument, len(m.instruments))
	for n, i := range m.instruments {
		g.instruments[n] = i
		if i.Declaration.Repeatability.Learned.Learned() {
			own = true
			known := *i
			known.Declaration.Repeatability.Learned = Repeatability{}
			known.Declaration.Repeatability.StandardDeviation = r
			g.instruments[n] = &known
		}
	}
	if !own {
		q := *m.quantity
		q.Declaration.Repeatability = Repeatability{Form: RepeatabilityKnown, StandardDeviation: r}
		g.quantity = &q
	}
	return &g
}

// scale is the variable v over which a learned r is summed: ln r, or, above a floor f,
// ln r = ln f + ln(1 + exp v), so that the prior, cut off there, vanishes smoothly at both
// ends; the trapezoid rule then errs by exp(-2 pi^2 sd^2 / step^2) at most about
// (Trefethen & Weideman 2014, SIAM Review 56, 3.2, from memory).
type scale struct {
	learned bool
	proper  bool // the prior of r is
	worth   float64
	guess   float64
	floor   float64
	ruling  ruling
}

func (m *model) scale() scale {
	r := m.learns()
	if r == nil {
		return scale{proper: true}
	}
	return scale{
		learned: true, proper: r.Form == RepeatabilityLearned,
		worth: r.Worth, guess: r.Guess, floor: r.Floor, ruling: m.ruling(),
	}
}

// r returns the repeatability at v.
func (s *scale) r(v float64) float64 {
	if s.floor == 0 {
		return math.Exp(v)
	}
	return s.floor * math.Exp(softplus(v))
}

// v returns where r is, which is above the floor.
func (s *scale) v(r float64) float64 {
	if s.floor == 0 {
		return math.Log(r)
	}
	return logExpm1(math.Log(r / s.floor))
}

// logPrior is ln of the prior's density of v: for u = ln r, with r^2 ~ scaled
// inverse chi-squared(worth, guess^2), exp(-worth u - worth guess^2 / (2 r^2)) (Gelman et al. 2013,
// table A.1); 1 for the reference prior.
func (s *scale) logPrior(v float64) float64 {
	if !s.learned {
		return 0
	}
	log := 0.0
	if s.floor > 0 {
		log = -softplus(-v) // du/dv
	}
	if !s.proper {
		return log
	}
	x := v - math.Log(s.guess)
	if s.floor > 0 {
		x = softplus(v) + math.Log(s.floor/s.guess)
	}
	return log - s.worth*(x+math.Exp(-2*x)/2-0.5)
}

// softplus is ln(1 + exp x).
func softplus(x float64) float64 { return max(x, 0) + math.Log1p(math.Exp(-math.Abs(x))) }

// logExpm1 is ln(exp x - 1) for x > 0, at least -40.
func logExpm1(x float64) float64 {
	if x > 30 {
		return x
	}
	return max(-40, math.Log(math.Expm1(x)))
}

// ruling is how closely nodes are laid, in half-widths of the posterior at exp(-1/2): as placed,
// and when they are worn, to be placed anew; and ln by which weights fall from the top to
// the end of large r, on which far tails rest, as placed and when worn. To the end of small r
// half of that is enough.
type ruling struct{ spacing, worn, depth, shallow float64 }

// ruling returns how closely the model's nodes are laid: less so for beliefs on points, a
// node of which costs a hundred times as much.
func (m *model) ruling() ruling {
	if m.form == gridForm {
		return ruling{spacing: 0.55, worn: 1, depth: 24, shallow: 18}
	}
	return ruling{spacing: 0.25, worn: 0.5, depth: 29, shallow: 20}
}

// maxNodes bounds the nodes of a bank, farthest |ln r|, so that r stays a double.
const maxNodes, farthest = 240, 600

// fromPrior places nodes on a proper prior, which has one maximum.
func (s *scale) fromPrior() (nodes []node, step float64) {
	top := s.v(max(s.guess, s.floor*(1+1e-3)))
	width := 1 / math.Sqrt(2*s.worth)
	for move := width; move > width/64; {
		switch here := s.logPrior(top); {
		case s.logPrior(top+move) > here:
			top += move
			move *= 2
		case s.logPrior(top-move) > here:
			top -= move
			move *= 2
		default:
			move /= 4
		}
	}
	right, left := s.drop(top, width), s.drop(top, -width)
	half := min((right+left)/2, steep*min(right, left))
	return s.place(s.logPrior, top, half)
}

// drop returns how far from the top the prior falls by exp(-1/2).
func (s *scale) drop(top, width float64) float64 {
	target, far := s.logPrior(top)-0.5, width
	for s.logPrior(top+far) > target {
		far *= 2
	}
	near := 0.0
	for range 30 {
		if middle := (near + far) / 2; s.logPrior(top+middle) > target {
			near = middle
		} else {
			far = middle
		}
	}
	return math.Abs(far)
}

// place puts nodes about the top of a density given by its logarithm, as far as it matters.
func (s *scale) place(log func(v float64) float64, top, half float64) (nodes []node, step float64) {
	step = s.ruling.spacing * half
	for {
		below, above := s.reach(log, top, -step, s.ruling.depth/2), s.reach(log, top, step, s.ruling.depth)
		if below+above+1 <= maxNodes {
			for i := -below; i <= above; i++ {
				v := top + float64(i)*step
				nodes = append(nodes, node{v: v, prior: s.logPrior(v)})
			}
			return nodes, step
		}
		step *= float64(below+above+1) / (maxNodes - 8)
	}
}

// reach returns after how many steps a density has fallen to where it no longer matters.
func (s *scale) reach(log func(v float64) float64, top, step, depth float64) int {
	floor := log(top) - depth
	n := 1
	for ; n < 16*maxNodes && math.Abs(top+float64(n)*step) < farthest && log(top+float64(n)*step) > floor; n++ {
	}
	return n
}
