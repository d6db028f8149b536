package posterior

import "math"

// place is a point of the line, as seen from both anchors of the mean.
type place struct{ fromBefore, fromData float64 }

func (m *mixture) place(x float64) place { return m.placed(LevelOf(x), 0) }

// placed is the place at some distance from l.
func (m *mixture) placed(l Level, distance float64) place {
	p := place{fromBefore: l.Minus(m.before.mean) + distance}
	if m.n > 0 {
		p.fromData = l.Minus(m.data) + distance
	}
	return p
}

// standard returns (place - mean) / sd of the component; from whichever anchor
// is nearer in weight.
func (m *mixture) standard(p place, c *component) float64 {
	if c.won > 0.5 {
		return (p.fromData + m.difference*c.kept) / c.sd
	}
	return (p.fromBefore - m.difference*c.won) / c.sd
}

// tail returns P(X > x), or P(X < x) for the lower side.
func (m *mixture) tail(x float64, s side) float64 {
	switch {
	case math.IsNaN(x):
		return math.NaN()
	case math.IsInf(x, int(s)):
		return 0
	case math.IsInf(x, 0):
		return 1
	}
	return math.Exp(m.logTail(m.place(x), s))
}

// logTail returns the logarithm of the tail.
func (m *mixture) logTail(p place, s side) float64 {
	m.count(len(m.nodes))
	var half [2]float64
	for i := range m.nodes {
		k := &m.nodes[i]
		half[i&1] += k.weight * math.Erfc(float64(s)*m.standard(p, &k.component)*sqrtHalf.hi) / 2
	}
	if served(half) {
		return math.Min(0, math.Log(half[0]+half[1]))
	}
	h := func(x float64) float64 {
		c := m.component(x)
		return m.logWeight(x) + logNormalTail(float64(s)*m.standard(p, &c))
	}
	return math.Min(0, m.integral(h, p)-m.total)
}

// served tells whether p's own nodes serve for a probability that was averaged
// over the even and the odd ones. They are as good for it as for p itself
// unless it is small, when its integrand peaks where the nodes end, or
// the probability given r changes faster than their step, which shows as a
// difference between the halves.
func served(half [2]float64) bool {
	return half[0]+half[1] > 1e-7 && agree(half[0], half[1])
}

// count adds to the work done.
func (m *mixture) count(points int) {
	if m.work != nil {
		*m.work += points
	}
}

// integral returns ln of the integral of exp(h), where h is logWeight plus the
// logarithm of a probability that concerns the places.
func (m *mixture) integral(h func(float64) float64, places ...place) float64 {
	s := m.span()
	for _, p := range places {
		s.add(m.marks(p)...)
	}
	g := s.survey(h)
	if g.top-m.total < vanished {
		return g.top
	}
	return g.integral(h)
}

// marks returns the x about which the probabilities at p change their course: r
// or r / sqrt(n) reaches a distance; the mean given r passes p, or is as far
// from it as the anchors are. Beyond, they change it no more.
func (m *mixture) marks(p place) []float64 {
	all := [3]float64{math.Abs(p.fromBefore), math.Abs(p.fromData), math.Abs(m.difference)}
	out := make([]float64, 0, 12)
	for i, d := range all {
		if d == 0 {
			continue
		}
		near := math.Log(math.Min(d, farthest)) - math.Log(m.r0)
		out = append(out, near)
		if m.n == 0 {
			continue
		}
		out = append(out, near+math.Log(m.n)/2)
		if e := all[(i+1)%3]; e > 0 {
			ratio := math.Log(math.Min(d, farthest)) - math.Log(math.Min(e, farthest))
			out = append(out, (ratio-m.logC)/2, (-ratio-m.logC)/2)
		}
	}
	return out
}

// vanished is a logarithm so far below that of the smallest double that no
// width of an integrand makes up for it.
const vanished = -800

// farthest bounds the distances that the search for maxima follows.
const farthest = 1e300

// between returns P(lo <= X <= hi), lo < hi.
func (m *mixture) between(lo, hi float64) float64 {
	if math.IsInf(lo, -1) {
		return m.tail(hi, lower)
	}
	if math.IsInf(hi, 1) {
		return m.tail(lo, upper)
	}
	m.count(len(m.nodes))
	a, b := m.place(lo), m.place(hi)
	var half [2]float64
	for i := range m.nodes {
		k := &m.nodes[i]
		za, zb := m.standard(a, &k.component), m.standard(b, &k.component)
		half[i&1] += k.weight * normalBetween(pair{hi: za}, pair{hi: zb}, (hi-lo)/k.sd)
	}
	if served(half) {
		return math.Min(1, half[0]+half[1])
	}
	h := func(x float64) float64 {
		c := m.component(x)
		return m.logWeight(x) + logNormalBetween(m.standard(a, &c), m.standard(b, &c), (hi-lo)/c.sd)
	}
	return math.Exp(math.Min(0, m.integral(h, a, b)-m.total))
}
