package engine

import (
	"math"
	"slices"
	"sort"

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
	HasHorizon                    bool           // a breach horizon is declared, and the forecaster has looked
	Check                         CheckFigures
	HorizonProbability            float64 // that a limit is crossed within it
	HasMedian                     bool    // the time to breach has its median within it
	MedianSeconds                 float64
}

// CheckFigures is what a scrape publishes of how readings agreed with the model.
type CheckFigures struct {
	Result                 string // the word of modelcheck.Result
	HasCoverage            bool   // some readings had been foretold
	Coverage50, Coverage95 float64
	MeanSquare             float64 // of the normal scores
	Steps, Outlying        int
}

func (f *fold) checkFigures(m *model) CheckFigures {
	total := f.check.Total()
	return CheckFigures{
		Result: f.check.Result(&m.check).String(), HasCoverage: total.Readings > 0,
		Coverage50: total.Within50, Coverage95: total.Within95, MeanSquare: total.MeanSquare,
		Steps: f.check.Steps(), Outlying: f.check.Outlying(),
	}
}

// Figures evaluates a view at an instant, from the readings up to then. It
// gives the same numbers as Belief. It reads the ledger, and can fail, only
// where the view has readings later than the instant.
func (k *Keeper) Figures(v *View, at Instant) (Figures, error) {
	f, err := k.figures(v, at)
	if err == nil {
		k.lookAhead(v, &f, at)
	}
	return f, err
}

// figures is Figures without what lies ahead.
func (k *Keeper) figures(v *View, at Instant) (Figures, error) {
	if v.still.Load() != nil && at >= v.LastTime {
		return *v.still.Load(), nil
	}
	m, err := k.moment(v, at)
	if err != nil {
		return Figures{}, err
	}
	f := figuresOf(v.level(m, at), &v.Declared().Declaration)
	f.ReadingCount, f.HasLast, f.LastTime = m.count, m.count > 0, m.lastTime
	f.Check = m.checkFigures(v.basis)
	if v.basis.still() && m.count == v.ReadingCount {
		still := f
		v.still.Store(&still)
	}
	return f, nil
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
	f.Lower, f.Upper = p.Interval(DefaultCoverage)
	f.HasInterval = !math.IsInf(f.Lower, 0) && !math.IsInf(f.Upper, 0) // as a logarithm can be too uncertain for its exponential
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
	l := lawOf(v.basis)
	if base := &v.marks[0]; !v.Rebuilding && (base.count == 0 || base.lastTime <= at) {
		if f := v.recentMoment(&l, at); f != nil {
			return f, nil
		}
	}
	all, err := v.entries(k.Ledger())
	if err != nil {
		return nil, err
	}
	n := sort.Search(len(all), func(i int) bool { return all[i].Time > at })
	return foldAll(&l, all[:n]), nil
}

// recentMoment folds on from the last mark that is not later than at; nil if that takes
// all readings.
func (v *View) recentMoment(l *law, at Instant) *fold {
	mark := 0
	for mark+1 < len(v.marks) && v.marks[mark+1].lastTime <= at {
		mark++
	}
	f := v.marks[mark].copied()
	for i := v.markFrom + mark*markSpacing; i < len(v.rows); i++ {
		e := &v.rows[i]
		if e.Time > at {
			break
		}
		if f.add(l, &e.Row); f.outgrown(l.model) {
			return nil
		}
	}
	return &f
}

// entries returns all readings in the belief in canonical order: while it is rebuilt,
// those of the position that it shows.
func (v *View) entries(from Ledger) ([]entry, error) {
	through, count, recent := v.Position, v.applied, v.rows
	if v.Rebuilding {
		through, count = v.foldedTo, v.fold.count
		recent = slices.DeleteFunc(slices.Clone(recent), func(e entry) bool { return e.Position > through })
	}
	all, err := loadEntries(from, v.Quantity.Number, through, count, recent)
	if err != nil {
		return nil, err
	}
	return all, orderTies(from, all)
}
