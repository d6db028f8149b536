package engine

import (
	"math"

	"leadline.example/engine/posterior"
)

// ruined tells whether the posterior of r has become too narrow for the nodes, or reaches
// beyond them: whether they ought to be placed anew.
func (b *bank) ruined(m *model) bool {
	s := m.scale()
	switch {
	case !s.learned || b.blank:
		return false
	case len(b.nodes) == 0:
		return b.ready(m, &s) && b.count > b.placed+b.placed/4
	case b.count <= b.placed+b.placed/8:
		return false
	}
	return !b.fits(&s.ruling)
}

// ready tells whether readings can bound r where its prior doesn't: from above, and, without
// a floor, from below, for which it takes two that differ.
func (b *bank) ready(m *model, s *scale) bool {
	return b.learned.count >= 2 && b.falls(m) > 0 && (s.floor > 0 || b.learned.most > b.learned.least)
}

// fits tells whether the nodes are close enough and cover the posterior.
func (b *bank) fits(r *ruling) bool {
	_, half := summit(b.logWeights())
	return half*r.worn >= 1 && b.covers(r)
}

// covers tells whether the density at the ends of the nodes is small beside the top.
func (b *bank) covers(r *ruling) bool {
	logs := b.logWeights()
	top, _ := summit(logs)
	return logs[top]-logs[0] > r.shallow/2 && logs[top]-logs[len(logs)-1] > r.shallow
}

// steep bounds the half-width by that of the steeper side, which the nodes have to follow.
const steep = 1.5

// summit returns the index of the highest of logarithms of a density at equal distances, and the
// half-width at which it has fallen by exp(-1/2), in distances.
func summit(logs []float64) (top int, half float64) {
	for i := range logs {
		if logs[i] > logs[top] {
			top = i
		}
	}
	side := func(by int) float64 {
		for n := 1; ; n++ {
			i := top + n*by
			if i < 0 || i >= len(logs) {
				return float64(n)
			}
			if fallen := logs[top] - logs[i]; fallen >= 0.5 {
				before := logs[top] - logs[i-by]
				return float64(n-1) + (0.5-before)/(fallen-before)
			}
		}
	}
	right, left := side(1), side(-1)
	return top, min((right+left)/2, steep*min(right, left))
}

// replace places the nodes anew on the posterior after rows, which are all, and folds
// them again. If r isn't bounded by them, there are no nodes after it.
func (b *bank) replace(m *model, rows []entry) {
	s := m.scale()
	if len(b.nodes) == 0 || b.adrift() {
		nodes, step := b.survey(m, &s)
		b.fill(m, nodes, step, rows)
	}
	for range 6 {
		logs := b.logWeights()
		top, half := summit(logs)
		if width := half * b.step; !(width > 0) || math.IsInf(width, 0) || math.IsNaN(logs[top]) {
			b.nodes, b.step = nil, 0 // numbers beyond the doubles
			break
		}
		nodes, step := s.place(b.outline(logs), b.nodes[top].v, half*b.step)
		b.fill(m, nodes, step, rows)
		if tight := s.ruling; b.fits(&ruling{tight.spacing * 1.3, tight.spacing * 1.3, tight.depth, tight.shallow}) {
			break
		}
	}
	b.placed = len(rows)
	if len(b.nodes) > 0 && !s.proper && !b.covers(&s.ruling) {
		b.nodes, b.step = nil, 0
	}
}

// adrift tells whether the posterior of r has its top at the end of the nodes or beyond.
func (b *bank) adrift() bool {
	top, _ := summit(b.logWeights())
	return top < 2 || top > len(b.nodes)-3
}

// survey places coarse nodes wherever readings and prior together can put r: between what was
// guessed and what readings differ by, and as far beyond as the density may matter.
func (b *bank) survey(m *model, s *scale) (nodes []node, step float64) {
	const surveyed = 160
	difference := (b.learned.most - b.learned.least) / 2
	low, high := math.Inf(1), math.Inf(-1)
	for _, r := range [...]float64{difference, s.guess, 2 * s.floor} {
		if r = max(r, s.floor*(1+1e-6)); r > 0 {
			low, high = min(low, s.v(r)), max(high, s.v(r))
		}
	}
	low -= s.ruling.depth / 2
	if s.floor > 0 {
		low -= s.ruling.depth / 2
	}
	high += 2 + s.ruling.depth/max(1, b.falls(m))
	step = (high - low) / (surveyed - 1)
	for i := range surveyed {
		v := low + float64(i)*step
		nodes = append(nodes, node{v: v, prior: s.logPrior(v)})
	}
	return nodes, step
}

// outline returns the logarithm of the density between and beyond the nodes: parabolas, and
// straight lines that go on.
func (b *bank) outline(logs []float64) func(v float64) float64 {
	first, last := b.nodes[0].v, len(logs)-1
	return func(v float64) float64 {
		x := (v - first) / b.step
		switch {
		case x <= 0:
			return logs[0] + x*max(0, logs[1]-logs[0])
		case x >= float64(last):
			return logs[last] + (x-float64(last))*min(0, logs[last]-logs[last-1])
		}
		i := min(max(int(x+0.5), 1), last-1)
		d := x - float64(i)
		return logs[i] + d*(logs[i+1]-logs[i-1])/2 + d*d*(logs[i+1]-2*logs[i]+logs[i-1])/2
	}
}

// fill makes b the bank of nodes after rows.
func (b *bank) fill(m *model, nodes []node, step float64, rows []entry) {
	b.nodes, b.step = nodes, step
	b.start(m, &rows[0].Row)
	s, widened := m.scale(), b.widened
	for i := range b.nodes {
		n := &b.nodes[i]
		r, next := s.r(n.v), 0
		for k := range rows {
			n.log += n.held.add(m, &rows[k].Row, r).log
			if next < len(widened) && widened[next] == k+1 {
				n.held.widen(b.wide)
				next++
			}
		}
	}
}

// repeatability returns the posterior median and interval of r: the distribution function
// is summed by the trapezoid rule with its end correction (Euler-Maclaurin), and between
// nodes its normal score goes along a straight line.
func (b *bank) repeatability(m *model, coverage float64) posterior.Repeatability {
	if b == nil || len(b.nodes) < 3 {
		return posterior.Repeatability{}
	}
	w := b.weights()
	scores := make([]float64, len(w))
	below := 0.0
	for i := range w {
		slope := 0.0
		if i > 0 && i+1 < len(w) {
			slope = (w[i+1] - w[i-1]) / 2
		}
		p := min(1-1e-16, max(1e-300, below+w[i]/2-slope/12))
		scores[i] = posterior.Normal(posterior.Level{}, 1).Quantile(p)
		below += w[i]
	}
	s := m.scale()
	at := func(p float64) float64 {
		z := posterior.Normal(posterior.Level{}, 1).Quantile(p)
		for i := 1; i < len(scores); i++ {
			if scores[i] >= z || i == len(scores)-1 {
				share := (z - scores[i-1]) / (scores[i] - scores[i-1])
				return s.r(b.nodes[i-1].v + share*b.step)
			}
		}
		return math.NaN()
	}
	tail := (1 - coverage) / 2
	return posterior.Repeatability{HasMedian: true, Median: at(0.5), Lower: at(tail), Upper: at(1 - tail)}
}
