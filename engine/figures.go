package engine

import (
	"leadline.example/engine/decide"
	"leadline.example/engine/posterior"
)

// Figures is what a scrape publishes of a belief, at DefaultCoverage. What
// does not exist is false in its Has.
type Figures struct {
	ReadingCount                  int
	HasLast                       bool
	LastTime                      Instant
	HasMean, HasStandardDeviation bool
	Mean, StandardDeviation       float64
	HasInterval                   bool
	Lower, Upper                  float64
	HasBreach                     bool
	Breach                        Breach
	Verdict                       decide.Verdict // 0 without a tolerance
}

// Figures evaluates a view at an instant, from the readings up to then. It
// gives the same numbers as Belief. It reads the ledger, and can fail, only
// where the view has readings later than the instant.
func (k *Keeper) Figures(v *View, at Instant) (Figures, error) {
	if v.still.Load() != nil && at >= v.LastTime {
		return *v.still.Load(), nil
	}
	m, err := k.moment(v, at)
	if err != nil {
		return Figures{}, err
	}
	f := figuresOf(m.level(&v.basis.Declaration, at), &v.Declared().Declaration)
	f.ReadingCount, f.HasLast, f.LastTime = m.count, m.count > 0, m.lastTime
	if !v.basis.Declaration.ordered() && m.count == v.ReadingCount {
		still := f
		v.still.Store(&still)
	}
	return f, nil
}

// Evaluate returns the level at an instant, from the readings up to then.
func (k *Keeper) Evaluate(v *View, at Instant) (posterior.Posterior, error) {
	m, err := k.moment(v, at)
	if err != nil {
		return posterior.Posterior{}, err
	}
	return m.level(&v.basis.Declaration, at), nil
}

// figuresOf evaluates a level under the declaration in force.
func figuresOf(p posterior.Posterior, d *Declaration) Figures {
	var f Figures
	if d.Tolerance.Declared() {
		f.Verdict = decide.Inconclusive
	}
	if p.Form() == posterior.FormNone {
		return f
	}
	f.Mean, f.HasMean = p.Mean()
	f.StandardDeviation, f.HasStandardDeviation = p.StandardDeviation()
	f.HasInterval = true
	f.Lower, f.Upper = p.Interval(DefaultCoverage)
	if d.Tolerance.Declared() {
		f.HasBreach = true
		f.Breach = breachOf(p, d.Tolerance)
		f.Verdict = d.DecisionRule().Verdict(f.Breach.Conformance, f.Breach.Either)
	}
	return f
}

// moment returns the fold of the readings up to an instant.
func (k *Keeper) moment(v *View, at Instant) (*fold, error) {
	if !v.HasLast || at >= v.LastTime {
		return &v.fold, nil
	}
	d := &v.basis.Declaration
	if base := &v.marks[0]; v.canonical && (base.count == 0 || base.lastTime <= at) {
		return v.recentMoment(d, at), nil
	}
	all, err := loadEntries(k.Ledger(), v.Quantity.Number, v.Position, v.tally.count, v.rows)
	if err != nil {
		return nil, err
	}
	l := lawOf(d)
	var f fold
	for i := range all {
		if all[i].Time > at {
			break
		}
		f.add(&l, &all[i].Row)
	}
	return &f, nil
}

// recentMoment folds on from the last mark that is not later than at.
func (v *View) recentMoment(d *Declaration, at Instant) *fold {
	mark := 0
	for mark+1 < len(v.marks) && v.marks[mark+1].lastTime <= at {
		mark++
	}
	l, f := lawOf(d), v.marks[mark]
	for i := v.markFrom + mark*markSpacing; i < len(v.rows) && v.rows[i].Time <= at; i++ {
		f.add(&l, &v.rows[i].Row)
	}
	return &f
}
