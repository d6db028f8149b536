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

// compareEntries is the canonical order: time, then instrument (none so far),
// then reading ID, then value. What is left equal folds the same either way;
// the position makes the order total.
func compareEntries(a, b *entry) int {
	if c := cmp.Compare(a.Time, b.Time); c != 0 {
		return c
	}
	return cmp.Or(cmp.Compare(a.ID, b.ID), cmp.Compare(a.Value, b.Value), cmp.Compare(a.Position, b.Position))
}

func (e entry) compare(f entry) int { return compareEntries(&e, &f) }

// fold is the belief after a set of readings, as the numbers from which the
// posterior follows. The zero value is the belief before any reading. It is
// a plain value: copies share nothing.
type fold struct {
	count    int
	lastTime Instant // of the latest reading in count
	constant posterior.Constant
	walk     posterior.Walk // at lastTime
}

// ordered tells whether a fold under d depends on the order of its readings;
// where it doesn't, readings are added as they arrive.
func (d *Declaration) ordered() bool { return d.Dynamics.Form == DynamicsRandomWalk }

// law is what folding a reading needs of a declaration, in one place beside the
// fold.
type law struct {
	declaration *Declaration
	ordered     bool
	known       bool    // r is
	r           float64 // where it is known
	step        float64 // standard deviation that a walk gains in per
	per         float64 // nanoseconds
}

func lawOf(d *Declaration) law {
	return law{
		declaration: d, ordered: d.ordered(),
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

// add folds one reading in; under ordered dynamics e must not precede any
// reading already in f in canonical order.
func (f *fold) add(l *law, e *Row) {
	if l.ordered {
		f.addWalk(l, e)
	} else {
		f.addConstant(l, e)
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
		f.walk = posterior.NewWalk(l.declaration.levelPrior())
		if from = e.Time; l.declaration.Prior.HasTime {
			from = l.declaration.Prior.Time
		}
	}
	f.walk.Predict(l.variance(e.Time.Sub(from)))
	u := l.r
	if e.HasUncertainty {
		u = e.Uncertainty
	}
	f.walk.Update(e.Value, u)
}

// level returns the distribution of the level at an instant that is not
// before the last reading in f.
func (f *fold) level(d *Declaration, at Instant) posterior.Posterior {
	if !d.ordered() {
		return f.constant.Posterior(d.levelPrior(), d.noise())
	}
	w, ok := f.walkAt(d, at)
	if !ok {
		return posterior.Posterior{}
	}
	return w.Posterior()
}

// predictive returns the distribution of an indication at that instant.
func (f *fold) predictive(d *Declaration, at Instant) posterior.Posterior {
	if !d.ordered() {
		return f.constant.Predictive(d.levelPrior(), d.noise())
	}
	w, ok := f.walkAt(d, at)
	if !ok || d.Repeatability.Form != RepeatabilityKnown {
		return posterior.Posterior{}
	}
	return w.Predictive(d.Repeatability.StandardDeviation)
}

// repeatability returns what is known of r.
func (f *fold) repeatability(d *Declaration, coverage float64) posterior.Repeatability {
	switch d.Repeatability.Form {
	case RepeatabilityAbsent:
		return posterior.Repeatability{}
	case RepeatabilityKnown:
		return posterior.Repeatability{Known: true, StandardDeviation: d.Repeatability.StandardDeviation}
	}
	return f.constant.Repeatability(d.levelPrior(), d.noise(), coverage)
}

// walkAt moves the walk on to an instant. Before a stated prior time nothing
// is known: not ok.
func (f *fold) walkAt(d *Declaration, at Instant) (posterior.Walk, bool) {
	w, from := f.walk, f.lastTime
	if f.count == 0 {
		w = posterior.NewWalk(d.levelPrior())
		if !d.Prior.HasTime {
			return w, true // the prior's time is that of a reading yet to come
		}
		from = d.Prior.Time
	}
	if at < from {
		return w, false
	}
	l := lawOf(d)
	w.Predict(l.variance(at.Sub(from)))
	return w, true
}
