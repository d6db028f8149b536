package posterior

import "math"

// Foretell returns the probabilities that an indication whose random part is r lies below and
// above y, as Predictive's tails do, but where r is mixed over in a tenth of the time
// and to some 1e-4 of themselves down to 1e-8 only: for checks at every reading. It reports
// false where Predictive is FormNone.
//
// The trapezoid rule over x, as mixture has it, begins at the maximum of the weights, with
// a step of a third of the standard deviation that ln r has where its weight is
// nearly a scaled inverse chi-squared, 1 / sqrt(2 nu) (Trefethen & Weideman 2014, SIAM
// Review 56, 3.2, from memory), and goes on as long as they matter.
func (c *Constant) Foretell(p Prior, n Noise, y float64) (below, above float64, ok bool) {
	level := c.informed(p, n)
	s, has := spread{}, false
	if n.learned() {
		s, has = c.spread(n)
	}
	if !has || level.flat {
		q := c.Predictive(p, n)
		return q.LowerTail(y), q.UpperTail(y), q.form != FormNone
	}
	m := prepared(level, s, true)
	m.start(0)
	step := 1 / (3 * math.Sqrt(2*m.nu))
	top := m.crest(step)
	m.start(top)
	at := m.place(y)
	total := 0.0
	for _, by := range [...]float64{step, -step} {
		x := top
		if by < 0 {
			x += by
		}
		for range foretellReach {
			w := math.Exp(m.logWeight(x))
			k := m.component(x)
			z := m.standard(at, &k)
			total += w
			below += w * normalTail(pair{hi: -z})
			above += w * normalTail(pair{hi: z})
			if w < foretellLeast {
				break
			}
			x += by
		}
	}
	return below / total, above / total, true
}

const (
	foretellLeast = 1e-9
	foretellReach = 400 // steps to a side
)

// crest returns where the weights are highest, to a step, going up from 0.
func (m *mixture) crest(step float64) float64 {
	x, here := 0.0, m.logWeight(0)
	for _, by := range [...]float64{step, -step} {
		for stride := by; math.Abs(stride) >= step; {
			if next := m.logWeight(x + stride); next > here {
				x, here = x+stride, next
				stride *= 2
			} else {
				stride /= 2
			}
		}
	}
	return x
}
