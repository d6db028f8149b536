package engine

import (
	"math"
	"slices"

	"leadline.example/engine/posterior"
)

// bank is a belief while r, a repeatability, is learned: one belief given r at each of some
// nodes in ln r, with the weight that the readings give it. It also is what a belief
// on points is held in when r is known, with a single node.
//
// Where the nodes ought to lie, the posterior of r says, which narrows as readings
// come: a fixed grid would need hundreds. So nodes are placed on the posterior, and when that has
// become too narrow for their distance, or has moved to their end, they
// are placed anew and all readings folded again (replace). When that happens follows
// from the readings in canonical order alone, so the belief still is a function of these.
type bank struct {
	nodes   []node
	step    float64 // distance of the nodes in v
	placed  int     // readings on which they were placed
	count   int     // readings
	widened []int   // counts after which the level was widened
	wide    float64 // variance of that
	learned spread
	part    part // of the readings since the prior or the last renewal
	lost    int  // earlier parts whose level took a reading that would have taught r
	blank   bool // no reading taught r yet, of which the prior says nothing: the node stands for any r
}

// spread is what bounds r from below: whether readings that teach it differ, on the scale of
// the level.
type spread struct {
	count       int
	least, most float64
}

// part is what bounds the level of a part that is measured.
type part struct {
	renewed int  // renewals before it
	vague   bool // its prior is flat
	pinned  bool // a reading that doesn't teach r bounds it
	taught  bool // a reading that does was made of it
}

// floats tells whether only readings that teach r bound the level.
func (p *part) floats() bool { return p.vague && !p.pinned }

func (b *bank) clone() *bank {
	if b == nil {
		return nil
	}
	c := *b
	c.nodes = slices.Clone(b.nodes)
	for i := range c.nodes {
		c.nodes[i].held = c.nodes[i].held.clone()
	}
	c.widened = slices.Clip(b.widened)
	return &c
}

// addBank folds a reading into the bank.
func (f *fold) addBank(l *law, e *Row) word {
	m := l.model
	if f.bank == nil {
		f.bank = &bank{}
		f.bank.begin(m, e)
	}
	return f.bank.add(m, e)
}

// begin places the first nodes.
func (b *bank) begin(m *model, first *Row) {
	s := m.scale()
	switch b.blank = !s.proper; {
	case b.blank:
		b.nodes = []node{{v: s.v(max(1, 2*s.floor))}}
	case s.learned:
		b.nodes, b.step = s.fromPrior()
	default:
		b.nodes = m.strata(first)
	}
	b.part = part{vague: m.prior.Vague}
	b.start(m, first)
}

// start gives each node the belief before any reading.
func (b *bank) start(m *model, first *Row) {
	for i := range b.nodes {
		n := &b.nodes[i]
		n.log = 0
		switch {
		case m.form != gridForm:
			n.held = &lone{joint: startJoint(m, first.Time)}
		case n.bias.SD > 0:
			n.held = startCells(m, first, n.bias)
		default:
			_, _, bias := m.calibration(first.Instrument, first.Time)
			n.held = startCells(m, first, bias)
		}
	}
}

// strata returns the nodes of a belief on points with a known repeatability: one, but for a
// level that walks under a bias wider than the noise, of which each point could keep mean and
// variance alone. It is split into narrower ones (posterior.Bias.Strata), given which that is enough.
func (m *model) strata(first *Row) []node {
	_, _, bias := m.calibration(first.Instrument, first.Time)
	if m.form != gridForm || bias.SD == 0 || m.motion.Form != posterior.MotionWalk {
		return []node{{}}
	}
	noise := m.spread(first, 0)
	if noise.OutlierProbability > 0 {
		noise.SD /= 2
	}
	parts, logs := bias.Strata(noise.SD)
	nodes := make([]node, len(parts))
	for i := range parts {
		nodes[i] = node{bias: parts[i], prior: logs[i]}
	}
	return nodes
}

// add folds a reading into every node.
func (b *bank) add(m *model, e *Row) word {
	b.count++
	b.renew(m, e.Time)
	switch {
	case m.teaches(e):
		if y := m.indication(e); !math.IsInf(y.Lower, 0) && !math.IsInf(y.Upper, 0) { // else it doesn't fall with r
			b.learned.add(y.Lower/2 + y.Upper/2)
			b.part.taught = true
		}
		if b.blank {
			b.nodes, b.blank = nil, false
		}
	case e.Extent == ExtentValue || e.Extent == ExtentBetween:
		b.part.pinned = true
	}
	weights := b.weights()
	s := m.scale()
	said := word{foretold: len(b.nodes) > 0}
	outliers := make([]float64, len(b.nodes))
	for i := range b.nodes {
		n := &b.nodes[i]
		h := n.held.add(m, e, s.r(n.v))
		n.log += h.log
		said.foretold = said.foretold && h.foretold
		said.below += weights[i] * h.below
		said.above += weights[i] * h.above
		outliers[i] = h.outlier
	}
	for i, w := range b.weights() { // which are those after the reading, as the probabilities are
		said.outlier += w * outliers[i]
	}
	said.between = !m.indication(e).Exact()
	b.prune()
	return said
}

// prune lets go of nodes at the ends whose weight has vanished for good.
func (b *bank) prune() {
	if len(b.nodes) == 0 {
		return
	}
	const vanished = 60 // beyond e^-60 of the top
	logs := b.logWeights()
	top, first, last := slices.Max(logs), 0, len(logs)-1
	for top-logs[first] > vanished/2 {
		first++
	}
	for top-logs[last] > vanished {
		last--
	}
	b.nodes = b.nodes[first : last+1]
}

// renew begins new parts for the renewals up to an instant.
func (b *bank) renew(m *model, at Instant) {
	for b.part.renewed < len(m.renewals) && m.renewals[b.part.renewed].Time <= at {
		if b.part.floats() && b.part.taught {
			b.lost++
		}
		prior, _ := m.renewalPrior(&m.renewals[b.part.renewed])
		b.part = part{renewed: b.part.renewed + 1, vague: prior.Vague}
	}
}

func (s *spread) add(y float64) {
	if s.count == 0 {
		s.least, s.most = y, y
	}
	s.least, s.most = min(s.least, y), max(s.most, y)
	s.count++
}

// weights returns those of the nodes, which sum to 1.
func (b *bank) weights() []float64 {
	logs := b.logWeights()
	top := slices.Max(append(logs, math.Inf(-1)))
	sum := 0.0
	for i, w := range logs {
		logs[i] = math.Exp(w - top)
		sum += logs[i]
	}
	for i := range logs {
		logs[i] /= sum
	}
	return logs
}

func (b *bank) logWeights() []float64 {
	logs := make([]float64, len(b.nodes), len(b.nodes)+1)
	for i := range b.nodes {
		logs[i] = b.nodes[i].prior + b.nodes[i].log
	}
	return logs
}

// widen lets the level be less known, at every node.
func (b *bank) widen(variance float64) {
	b.widened, b.wide = append(b.widened, b.count), variance
	for i := range b.nodes {
		b.nodes[i].held.widen(variance)
	}
}

// level returns the distribution of the level at an instant.
func (b *bank) level(m *model, at Instant) posterior.Posterior {
	as := *b
	as.renew(m, at)
	return b.blend(m, as.part.floats(), func(n *node) posterior.Posterior { return n.held.after(m, at) })
}

// blend mixes what the nodes say; wide tells whether that is as wide as r where r is large.
func (b *bank) blend(m *model, wide bool, say func(*node) posterior.Posterior) posterior.Posterior {
	parts := make([]posterior.Posterior, len(b.nodes))
	for i := range b.nodes {
		parts[i] = say(&b.nodes[i])
	}
	p := posterior.Blend(b.logWeights(), parts)
	if m.learns() == nil || len(parts) == 0 {
		return p
	}
	p = p.WithoutExponentialMoments()
	if wide {
		return b.existing(m, p, &parts[len(parts)-1])
	}
	return p
}

// falls returns the exponent with which the density of ln r falls in the end, as r^-falls:
// each reading that teaches r gives 1/r, but the first of a flat level, which that takes.
func (b *bank) falls(m *model) float64 {
	falls := float64(b.learned.count - b.lost)
	if m.learns() != nil {
		falls += m.learns().Worth
	}
	if b.part.floats() && b.part.taught {
		falls--
	}
	return falls
}

// existing takes away the moments that don't exist where a distribution is as wide as r:
// those of r up to its own order. What the second has beyond the last node it adds: a geometric
// series, as weights fall by the step's share of falls, and variances grow by 2.
func (b *bank) existing(m *model, p posterior.Posterior, last *posterior.Posterior) posterior.Posterior {
	falls := b.falls(m)
	mean, hasMean := p.Mean()
	sd, hasSD := p.StandardDeviation()
	if hasMean, hasSD = hasMean && falls > 1, hasSD && falls > 2; hasSD && len(b.nodes) > 1 {
		weights := b.weights()
		end, _ := last.Mean()
		wide, _ := last.StandardDeviation()
		ratio := math.Exp(-(falls - 2) * b.step)
		beyond := weights[len(weights)-1] * (wide*wide + (end-mean)*(end-mean)) * ratio / (1 - ratio)
		p = p.WithStandardDeviation(math.Sqrt(sd*sd + beyond))
	}
	return p.WithMoments(hasMean, hasSD)
}

// predictive returns the distribution of an indication at an instant, by an instrument or none.
func (b *bank) predictive(m *model, at Instant, by *Instrument) posterior.Posterior {
	if b == nil {
		b = &bank{}
		b.begin(m, &Row{Time: at})
	}
	next := Row{Time: at}
	if by != nil {
		next.Instrument = by.Number
	}
	if by != nil && m.instrument(by.Number) == nil {
		if by.Declaration.Repeatability.Learned.Learned() {
			return posterior.Posterior{} // of whose r nothing is known here
		}
		m = m.with(by)
	}
	if b.blank && m.teaches(&next) {
		return posterior.Posterior{}
	}
	s := m.scale()
	return b.blend(m, true, func(n *node) posterior.Posterior { return n.held.foresee(m, at, by, s.r(n.v)) })
}
