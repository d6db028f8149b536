package engine

import (
	"cmp"
	"math"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// entry is a row with the reading's ID, which the canonical order may need.
// IDs of rows that come from storage are filled in only where times tie.
type entry struct {
	Row
	ID ReadingID
}

// tiesNameless tells whether the order of e and f rests on an ID that isn't
// filled in.
func (e *entry) tiesNameless(f *entry) bool {
	return e.Time == f.Time && (e.HasID && e.ID == "" || f.HasID && f.ID == "")
}

// compareEntries is the canonical order: time, then instrument (in the order of
// first declaration), then reading ID, then value, then all else that a fold sees
// of a reading. What is left equal folds the same either way; the position makes
// the order total.
func compareEntries(a, b *entry) int {
	if c := cmp.Compare(a.Time, b.Time); c != 0 {
		return c
	}
	return cmp.Or(cmp.Compare(a.Instrument, b.Instrument), cmp.Compare(a.ID, b.ID), cmp.Compare(a.Value, b.Value),
		cmp.Compare(a.Extent, b.Extent), cmp.Compare(a.Upper, b.Upper), cmp.Compare(a.Samples, b.Samples),
		cmp.Compare(a.Occasion, b.Occasion), cmp.Compare(a.Uncertainty, b.Uncertainty), cmp.Compare(a.Position, b.Position))
}

func (e entry) compare(f entry) int { return compareEntries(&e, &f) }

// fold is the belief after a set of readings, as the numbers from which the
// posterior follows, and what the readings said of the model. The zero value is the
// belief before any reading. Copies are made by copied, so that they share nothing
// that changes.
type fold struct {
	count      int
	since      int     // of those, readings since the prior or the last renewal
	renewed    int     // renewals before the latest reading
	first      Instant // of the earliest reading in count
	lastTime   Instant // of the latest
	last       InstrumentNumber
	flagged    [len(CalibrationStates)]int
	linearised bool
	check      modelcheck.Tally
	scored     bool        // something was foretold of the latest reading
	lost       bool        // readings were beyond what the form can hold
	outlier    float64     // probability that it was an outlier
	detected   []StepEvent // in readings folded since they were last taken; not part of the state

	constant posterior.Constant
	walk     posterior.Walk // at lastTime
	joint    *joint         // at lastTime; nil before any reading, and in other forms
	counts   *tallied
	bank     *bank
}

func (f *fold) copied() fold {
	c := *f
	c.detected = nil
	if f.joint != nil {
		c.joint = f.joint.clone()
	}
	c.counts, c.bank = f.counts.clone(), f.bank.clone()
	return c
}

// law is what folding a reading needs of a model, in one place beside the fold.
type law struct {
	model *model
	form  form
	known bool    // r is
	r     float64 // where it is known
	step  float64 // standard deviation that a walk gains in per
	per   float64 // nanoseconds
	log   bool
	widen float64 // variance that a step adds to the level
}

func lawOf(m *model) law {
	d := m.declaration()
	return law{
		model: m, form: m.form,
		known: d.Repeatability.Form == RepeatabilityKnown, r: d.Repeatability.StandardDeviation,
		step: d.Dynamics.StandardDeviation, per: float64(d.Dynamics.Per),
		log: d.Scale == ScaleLog, widen: d.StepDetection.Widen * d.StepDetection.Widen,
	}
}

// variance returns what a random walk gains in a time given in nanoseconds:
// d^2 h / T (Harvey 1989, Forecasting, Structural Time Series Models, 9.1, from
// memory).
func (l *law) variance(nanoseconds float64) float64 {
	return l.step * l.step * (nanoseconds / l.per)
}

// value returns what a reading that says a value says of the level, on its scale.
func (l *law) value(e *Row) float64 {
	if l.log {
		return math.Log(e.Value)
	}
	return e.Value
}

// outgrown tells whether the nodes of a learned repeatability are to be placed anew, for
// which all readings are folded again.
func (f *fold) outgrown(m *model) bool { return f.bank != nil && !f.lost && f.bank.ruined(m) }

// foldAll folds rows, which are all of a quantity up to some instant.
func foldAll(l *law, rows []entry) *fold {
	f := new(fold)
	for i := range rows {
		f.add(l, &rows[i].Row)
		if f.outgrown(l.model) {
			f.bank.replace(l.model, rows[:i+1])
		}
	}
	return f
}

// add folds one reading in, which must not precede any reading already in f in canonical
// order, and returns what it said of the model.
func (f *fold) add(l *law, e *Row) word {
	for f.renewed < len(l.model.renewals) && l.model.renewals[f.renewed].Time <= e.Time {
		f.renewed++
		f.since = 0
		f.check.Renewed()
	}
	var said word
	switch l.form {
	case sumForm:
		said = f.addConstant(l, e)
	case walkForm:
		said = f.addWalk(l, e)
	case jointForm:
		said = f.addJoint(l, e)
	default:
		said = f.addGuarded(l, e)
	}
	f.note(l, e)
	f.judge(l, e, &said)
	return said
}

// note counts a reading.
func (f *fold) note(l *law, e *Row) {
	if f.count == 0 {
		f.first = e.Time
	}
	if f.count == 0 || e.Time > f.lastTime {
		f.lastTime = e.Time
	}
	f.count++
	f.since++
	f.last = e.Instrument
	if e.Instrument != 0 {
		d := &l.model.instrument(e.Instrument).Declaration
		f.flagged[d.State(e.Time)]++
		f.linearised = f.linearised || d.linearised(e.Time)
	}
}

func (f *fold) addConstant(l *law, e *Row) word {
	y := l.value(e)
	n := l.model.declaration().noise()
	switch {
	case e.HasUncertainty || l.known:
		u := e.white(l.r)
		var said word
		if l.known || n.Absent { // else r is learned, which this reading doesn't share
			said = foretold(f.constant.Predictive(l.model.prior, posterior.Noise{Known: true, SD: u}), y)
		}
		f.constant.AddKnown(y, u)
		return said
	}
	var said word
	said.below, said.above, said.foretold = f.constant.Foretell(l.model.prior, n, y)
	f.constant.AddLearned(y)
	return said
}

func (f *fold) addWalk(l *law, e *Row) word {
	from := f.lastTime
	if f.count == 0 {
		f.walk = posterior.NewWalk(l.model.prior)
		if from = e.Time; l.model.declaration().Prior.HasTime {
			from = l.model.declaration().Prior.Time
		}
	}
	f.walk.Predict(l.variance(e.Time.Sub(from)))
	y, u := l.value(e), e.white(l.r)
	said := foretold(f.walk.Predictive(u), y)
	f.walk.Update(y, u)
	return said
}

func (f *fold) addJoint(l *law, e *Row) word {
	if f.joint == nil {
		f.joint = startJoint(l.model, e.Time)
	}
	return surprised(f.joint.add(l.model, e, l.value(e)))
}

// level returns the distribution of the level at an instant that is not
// before the last reading in f.
func (f *fold) level(m *model, at Instant) posterior.Posterior { return m.shown(f.state(m, at)) }

// shown returns a distribution in the quantity's unit.
func (m *model) shown(p posterior.Posterior) posterior.Posterior {
	if m.declaration().Scale == ScaleLog {
		return p.Exp()
	}
	return p
}

// state is level on the scale on which it is held. What isn't a number is no belief.
func (f *fold) state(m *model, at Instant) posterior.Posterior {
	if f.lost {
		return posterior.Posterior{}
	}
	p := f.held(m, at)
	if math.IsNaN(p.Location()) {
		return posterior.Posterior{}
	}
	return p
}

func (f *fold) held(m *model, at Instant) posterior.Posterior {
	switch m.form {
	case sumForm:
		return f.constant.Posterior(m.prior, m.declaration().noise())
	case walkForm:
		if w, ok := f.walkAt(m, at); ok {
			return w.Posterior()
		}
	case jointForm:
		if j := f.joint; j != nil && !j.renewsBy(m, at) {
			return j.filter.PosteriorAfter(lasting(j.at, at))
		}
		if j := f.jointAt(m, at); j != nil {
			return j.level()
		}
	case countsForm:
		return f.counts.level(m)
	default:
		if f.count == 0 {
			if j := f.jointAt(m, at); j != nil {
				return j.level()
			}
			return posterior.Posterior{}
		}
		return f.bank.level(m, at)
	}
	return posterior.Posterior{}
}

// predictive returns the distribution of an indication at that instant, by an
// instrument or, if that is nil, by none.
func (f *fold) predictive(m *model, at Instant, by *Instrument) posterior.Posterior {
	return m.shown(f.foresight(m, at, by))
}

// foresight is predictive on the scale on which the level is held.
func (f *fold) foresight(m *model, at Instant, by *Instrument) posterior.Posterior {
	d := m.declaration()
	switch {
	case f.lost:
		return posterior.Posterior{}
	case m.form == countsForm:
		return f.counts.predictive(m, at, by)
	case m.form >= bankForm:
		return f.bank.predictive(m, at, by)
	case m.form == sumForm && by == nil:
		return f.constant.Predictive(m.prior, d.noise())
	case m.form == walkForm && by == nil:
		if w, ok := f.walkAt(m, at); ok && d.Repeatability.Form == RepeatabilityKnown {
			return w.Predictive(d.Repeatability.StandardDeviation)
		}
		return posterior.Posterior{}
	}
	if j := f.jointAt(m, at); j != nil {
		return j.predictive(m, by)
	}
	return posterior.Posterior{}
}

// repeatability returns what is known of r.
func (f *fold) repeatability(m *model, coverage float64) posterior.Repeatability {
	r := m.learns()
	switch {
	case f.lost:
		return posterior.Repeatability{}
	case r != nil && m.form == countsForm:
		return f.counts.repeatability(m, coverage)
	case r != nil && m.form >= bankForm:
		return f.bank.repeatability(m, coverage)
	case r != nil && m.form == sumForm:
		return f.constant.Repeatability(m.prior, m.declaration().noise(), coverage)
	case m.declaration().Repeatability.Form == RepeatabilityKnown:
		return posterior.Repeatability{Known: true, StandardDeviation: m.declaration().Repeatability.StandardDeviation}
	}
	return posterior.Repeatability{}
}

// walkAt moves the walk on to an instant. Before a stated prior time nothing
// is known: not ok.
func (f *fold) walkAt(m *model, at Instant) (posterior.Walk, bool) {
	w, from := f.walk, f.lastTime
	if d := m.declaration(); f.count == 0 {
		w = posterior.NewWalk(m.prior)
		if !d.Prior.HasTime {
			return w, true // the prior's time is that of a reading yet to come
		}
		from = d.Prior.Time
	}
	if at < from {
		return w, false
	}
	l := lawOf(m)
	w.Predict(l.variance(at.Sub(from)))
	return w, true
}

// jointAt returns the joint moved on to an instant, to keep; nil before a
// stated prior time, when nothing is known, and of a belief that isn't normal.
func (f *fold) jointAt(m *model, at Instant) *joint {
	var j *joint
	switch {
	case f.joint != nil:
		j = f.joint.clone()
	case f.count == 0:
		if j = startJoint(m, at); at < j.at {
			return nil
		}
	default:
		return f.jointOfLevel(m, at)
	}
	j.move(m, at)
	return j
}

// jointOfLevel makes a joint of a belief that is held otherwise.
func (f *fold) jointOfLevel(m *model, at Instant) *joint {
	p := f.state(m, at)
	if p.Form() != posterior.FormNormal {
		return nil
	}
	here := *m
	here.prior = posterior.Prior{Mean: p.Location(), SD: p.Scale()}
	return newJoint(&here, at)
}
