package engine

import (
	"cmp"

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
// posterior follows. The zero value is the belief before any reading. Copies are
// made by copied, so that they share nothing that changes.
type fold struct {
	count    int
	lastTime Instant // of the latest reading in count
	constant posterior.Constant
	walk     posterior.Walk // at lastTime
	joint    *joint         // at lastTime; nil before any reading, and in other forms
}

func (f *fold) copied() fold {
	c := *f
	if f.joint != nil {
		c.joint = f.joint.clone()
	}
	return c
}

// law is what folding a reading needs of a model, in one place beside the fold.
type law struct {
	model   *model
	form    form
	ordered bool
	known   bool    // r is
	r       float64 // where it is known
	step    float64 // standard deviation that a walk gains in per
	per     float64 // nanoseconds
}

func lawOf(m *model) law {
	d := m.declaration()
	return law{
		model: m, form: m.form, ordered: m.ordered(),
		known: d.Repeatability.Form == RepeatabilityKnown, r: d.Repeatability.StandardDeviation,
		step: d.Dynamics.StandardDeviation, per: float64(d.Dynamics.Per),
	}
}

// variance returns what a random walk gains in a time given in nanoseconds:
// d^2 h / T (Harvey 1989, Forecasting, Structural Time Series Models, 9.1, from
// memory).
func (l *law) variance(nanoseconds float64) float64 {
	return l.step * l.step * (nanoseconds / l.per)
}

// add folds one reading in; where order matters e must not precede any
// reading already in f in canonical order.
func (f *fold) add(l *law, e *Row) {
	switch l.form {
	case sumForm:
		f.addConstant(l, e)
	case walkForm:
		f.addWalk(l, e)
	default:
		f.addJoint(l, e)
	}
	if f.count == 0 || e.Time > f.lastTime {
		f.lastTime = e.Time
	}
	f.count++
}

func (f *fold) addConstant(l *law, e *Row) {
	switch {
	case e.HasUncertainty:
		f.constant.AddKnown(e.Value, e.Uncertainty)
	case l.known:
		f.constant.AddKnown(e.Value, l.r)
	default:
		f.constant.AddLearned(e.Value)
	}
}

func (f *fold) addWalk(l *law, e *Row) {
	from := f.lastTime
	if f.count == 0 {
		f.walk = posterior.NewWalk(l.model.prior)
		if from = e.Time; l.model.declaration().Prior.HasTime {
			from = l.model.declaration().Prior.Time
		}
	}
	f.walk.Predict(l.variance(e.Time.Sub(from)))
	u := l.r
	if e.HasUncertainty {
		u = e.Uncertainty
	}
	f.walk.Update(e.Value, u)
}

func (f *fold) addJoint(l *law, e *Row) {
	if f.joint == nil {
		f.joint = startJoint(l.model, e.Time)
	}
	f.joint.add(l.model, e)
}

// level returns the distribution of the level at an instant that is not
// before the last reading in f.
func (f *fold) level(m *model, at Instant) posterior.Posterior {
	switch m.form {
	case sumForm:
		return f.constant.Posterior(m.prior, m.declaration().noise())
	case walkForm:
		if w, ok := f.walkAt(m, at); ok {
			return w.Posterior()
		}
	default:
		if j := f.joint; j != nil && !j.renewsBy(m, at) {
			return j.filter.PosteriorAfter(lasting(j.at, at))
		}
		if j := f.jointAt(m, at); j != nil {
			return j.level()
		}
	}
	return posterior.Posterior{}
}

// predictive returns the distribution of an indication at that instant, by an
// instrument or, if that is nil, by none.
func (f *fold) predictive(m *model, at Instant, by *Instrument) posterior.Posterior {
	d := m.declaration()
	switch {
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
	switch d := m.declaration(); d.Repeatability.Form {
	case RepeatabilityAbsent:
		return posterior.Repeatability{}
	case RepeatabilityKnown:
		return posterior.Repeatability{Known: true, StandardDeviation: d.Repeatability.StandardDeviation}
	default:
		return f.constant.Repeatability(m.prior, d.noise(), coverage)
	}
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
	p := f.level(m, at)
	if p.Form() != posterior.FormNormal {
		return nil
	}
	here := *m
	here.prior = posterior.Prior{Mean: p.Location(), SD: p.Scale()}
	return newJoint(&here, at)
}
