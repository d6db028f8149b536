package engine

import "leadline.example/engine/posterior"

// tallied is a belief about a level that stays, from readings that are displayed or censored.
// What readings say is counted, and the posterior worked out when it is asked for; a few
// points stand for it in foretelling the next reading.
type tallied struct {
	counts posterior.Counts
	points posterior.Points
	laid   int            // readings on which the points were laid
	bias   posterior.Bias // of the calibration under which all readings are
	by     InstrumentNumber
}

func (t *tallied) clone() *tallied {
	if t == nil {
		return nil
	}
	c := *t
	c.counts, c.points = t.counts.Clone(), t.points.Clone()
	return &c
}

// noise returns what is known of the repeatability that readings teach.
func (m *model) noise() posterior.Noise {
	r := m.learns()
	if r == nil {
		return m.declaration().noise()
	}
	return (&Declaration{Repeatability: *r}).noise()
}

// addCounts folds a reading into the counts.
func (f *fold) addCounts(l *law, e *Row) word {
	m := l.model
	if f.counts == nil {
		f.counts = &tallied{by: e.Instrument}
		_, _, f.counts.bias = m.calibration(e.Instrument, e.Time)
		f.counts.points = f.counts.counts.Points(m.prior, m.noise(), f.counts.bias)
	}
	t := f.counts
	y, sd, samples := m.indication(e), m.spread(e, 0).SD, e.samples()
	if sd > 0 {
		samples = 1
	}
	if n := t.counts.Count(); t.points.Worn() && n >= t.laid+t.laid/4 {
		t.laid = n
		t.points = t.counts.Points(m.prior, m.noise(), t.bias)
	}
	said := word{between: !y.Exact()}
	said.below, said.above, said.foretold = t.points.Foretell(y, sd, samples)
	if !said.foretold && m.learns() == nil { // the points are too far apart for so sharp a noise
		p := t.counts.Predictive(m.prior, m.noise(), t.bias, sd)
		said.below, said.above, said.foretold = p.LowerTail(y.Lower), p.UpperTail(y.Upper), p.Form() != posterior.FormNone
	}
	t.counts.Add(y, sd, samples)
	t.points.Update(y, sd, samples)
	return said
}

// level returns the distribution of the level.
func (t *tallied) level(m *model) posterior.Posterior {
	if t == nil {
		t = &tallied{}
	}
	return t.counts.Posterior(m.prior, m.noise(), t.bias)
}

// predictive returns the distribution of an indication before it is displayed, by the
// instrument that has read the level, or by another where neither has a bias.
func (t *tallied) predictive(m *model, at Instant, by *Instrument) posterior.Posterior {
	e := Row{Time: at}
	if by != nil {
		e.Instrument = by.Number
		if m.instrument(by.Number) == nil {
			if by.Declaration.Repeatability.Learned.Learned() {
				return posterior.Posterior{} // of whose r nothing is known here
			}
			m = m.with(by)
		}
	}
	if t == nil {
		t = &tallied{by: e.Instrument}
		_, _, t.bias = m.calibration(e.Instrument, at)
	}
	if n, _, _ := m.calibration(e.Instrument, at); (n >= 0 || t.bias.SD > 0) && e.Instrument != t.by {
		return posterior.Posterior{}
	}
	sd := m.spread(&e, 0).SD
	if sd == 0 && !m.teaches(&e) {
		return posterior.Posterior{}
	}
	return t.counts.Predictive(m.prior, m.noise(), t.bias, sd)
}

func (t *tallied) repeatability(m *model, coverage float64) posterior.Repeatability {
	if t == nil {
		t = &tallied{}
	}
	return t.counts.Repeatability(m.prior, m.noise(), t.bias, coverage)
}
