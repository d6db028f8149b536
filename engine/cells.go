package engine

import (
	"leadline.example/engine/posterior"
)

// cells is a belief on points, given r.
type cells struct {
	grid        posterior.Grid
	at          Instant // where the grid stands
	renewed     int     // of the model's renewals, those taken in
	by          InstrumentNumber
	calibration int     // of by, under which the readings now are; -1 for none
	until       Instant // when its next one begins
}

// startCells starts where the prior holds, with what is known of the bias under the
// calibration of the first reading.
func startCells(m *model, first *Row, bias posterior.Bias) *cells {
	j := startJoint(m, first.Time)
	c := &cells{at: j.at, by: first.Instrument}
	c.calibration, c.until, _ = m.calibration(first.Instrument, first.Time)
	c.grid = posterior.NewGrid(m.motion, m.prior, bias)
	return c
}

// calibration returns the index of an instrument's calibration in force at an instant, -1
// for none, until when it is, and what it states of the bias.
func (m *model) calibration(by InstrumentNumber, at Instant) (n int, until Instant, bias posterior.Bias) {
	i := m.instrument(by)
	if i == nil || len(i.Declaration.Calibrations) == 0 {
		return -1, MaxInstant, posterior.Bias{}
	}
	d := &i.Declaration
	n, until = d.at(at), MaxInstant
	if n+1 < len(d.Calibrations) {
		until = d.Calibrations[n+1].ValidFrom
	}
	c := &d.Calibrations[n]
	return n, until, posterior.Bias{Mean: c.Bias, SD: c.StandardUncertainty()}
}

func (c *cells) clone() holder {
	d := *c
	d.grid = c.grid.Clone()
	return &d
}

// move goes on to an instant, through the renewals up to then.
func (c *cells) move(m *model, to Instant) {
	for c.renewed < len(m.renewals) && m.renewals[c.renewed].Time <= to {
		r := &m.renewals[c.renewed]
		c.step(r.Time)
		level, _ := m.renewalPrior(r)
		c.grid.Renew(level)
		c.renewed++
	}
	c.step(to)
}

func (c *cells) step(to Instant) {
	if to > c.at {
		c.grid.Advance(lasting(c.at, to))
		c.at = to
	}
}

func (c *cells) add(m *model, e *Row, r float64) heard {
	c.move(m, e.Time)
	if e.Time >= c.until || c.by != e.Instrument {
		var bias posterior.Bias
		was := c.calibration
		c.by = e.Instrument
		if c.calibration, c.until, bias = m.calibration(e.Instrument, e.Time); was >= 0 || c.calibration >= 0 {
			c.grid.Recalibrate(bias)
		}
	}
	y, noise := m.indication(e), m.spread(e, r)
	var h heard
	h.below, h.above, h.foretold = c.grid.Foretell(y, noise)
	evidence := c.grid.Update(y, noise)
	h.log, h.outlier = evidence.Log, evidence.Outlier
	return h
}

func (c *cells) widen(variance float64) { c.grid.Widen(variance) }

func (c *cells) after(m *model, at Instant) posterior.Posterior {
	if c.renewed < len(m.renewals) && m.renewals[c.renewed].Time <= at {
		return c.moved(m, at).grid.Posterior()
	}
	return c.grid.PosteriorAfter(lasting(c.at, at))
}

// moved returns a copy of c moved on to an instant.
func (c *cells) moved(m *model, at Instant) *cells {
	d := *c
	d.grid = c.grid.Clone()
	d.move(m, at)
	return &d
}

// foresee returns the distribution of an indication before it is displayed; of another
// instrument than the readings so far, where neither has a bias, by its own noise.
func (c *cells) foresee(m *model, at Instant, by *Instrument, r float64) posterior.Posterior {
	e := Row{Time: at}
	if by != nil {
		e.Instrument = by.Number
		if m.instrument(by.Number) == nil {
			m = m.with(by)
		}
	}
	d := c.moved(m, at)
	n, _, bias := m.calibration(e.Instrument, at)
	if n >= 0 || d.calibration >= 0 {
		switch {
		case e.Instrument != d.by:
			return posterior.Posterior{}
		case n != d.calibration:
			d.grid.Recalibrate(bias)
		}
	}
	noise := m.spread(&e, r)
	if noise.SD == 0 {
		return posterior.Posterior{}
	}
	return d.grid.Predictive(noise)
}

func (c *cells) shared(m *model, at Instant, _ float64) (s sharedBelief) {
	if c.calibration < 0 {
		return s
	}
	i := m.instrument(c.by)
	mean, sd := c.moved(m, at).grid.BiasBelief()
	s.biases = []BiasBelief{{
		Instrument: i.ID, ValidFrom: i.Declaration.Calibrations[c.calibration].ValidFrom, Mean: mean, StandardDeviation: sd,
	}}
	return s
}
