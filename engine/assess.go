package engine

import (
	"context"
	"math"
	"sort"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// ModelCheckReport is what the readings say of the model itself.
type ModelCheckReport struct {
	Belief         Belief // at the last reading or now
	Report         modelcheck.Report
	Law            modelcheck.Law
	HasExplanation bool                   // there are readings enough, not all alike, and the level stays or walks
	Explanation    modelcheck.Explanation // of the last full window, before there is one of all readings
}

// ModelCheck reports how a quantity's readings agreed with what those before them
// foretold, and compares two explanations of neighbours that err alike.
func (k *Keeper) ModelCheck(_ context.Context, id QuantityID, now Instant) (ModelCheckReport, error) {
	t, ok := k.find(id)
	if !ok {
		return ModelCheckReport{}, notDeclared("quantity", id)
	}
	v := t.View()
	b, err := k.belief(v, &BeliefQuery{Now: now})
	if err != nil {
		return ModelCheckReport{}, err
	}
	r := ModelCheckReport{Belief: b, Report: b.Check, Law: v.basis.check}
	if v.basis.motion.Form > posterior.MotionWalk {
		return r, nil
	}
	rows, err := v.lookedAt(k.Ledger())
	if err != nil {
		return ModelCheckReport{}, err
	}
	points := v.points(rows)
	if len(points) >= modelcheck.MinWindow {
		n := v.basis.noise()
		r.Explanation = modelcheck.Explain(points, v.basis.motion.Walk, modelcheck.Learned{Guess: n.Guess, Worth: n.Worth, Floor: n.Floor})
		r.HasExplanation = r.Explanation.Readings > 0
	}
	return r, nil
}

// lookedAt returns the readings of the last full window, which the tests looked at; before there
// is one, all. Which readings had no score isn't kept; but for those after a renewal of
// which nothing was known, they are the first of all, which no window counts.
func (v *View) lookedAt(from Ledger) ([]entry, error) {
	check := &v.fold.check
	last, count := 0, v.fold.count // of the readings that came after, and of those asked for
	if check.Looked() {
		last, count = check.Filled(), v.basis.check.Settings().Window
	}
	rows := v.rows[v.markFrom:]
	if v.Rebuilding || len(rows) < last+count {
		var err error
		if rows, err = v.entries(from); err != nil {
			return nil, err
		}
	}
	end := len(rows) - last
	return rows[end-count : end], nil
}

// points returns readings, of which something two-sided is said, as values with the white
// noise that is declared.
func (v *View) points(rows []entry) []modelcheck.Point {
	m := v.basis
	var all []modelcheck.Point
	for i := range rows {
		e := &rows[i].Row
		y := m.indication(e)
		_, _, bias := m.calibration(e.Instrument, e.Time)
		p := modelcheck.Point{Seconds: lasting(rows[0].Time, e.Time), Value: y.Lower/2 + y.Upper/2 - bias.Mean}
		display := y.Upper - y.Lower
		if by := m.instrument(e.Instrument); by != nil && (m.form == jointForm || m.form == bankForm) {
			display = by.Declaration.Resolution
		}
		p.Variance = display * display / 12 // JCGM 100:2008, F.2.2.1
		if m.teaches(e) {
			p.Learned = 1 / e.samples()
		} else {
			sd := m.spread(e, 0).SD
			p.Variance += sd * sd
		}
		if !math.IsInf(p.Value, 0) && !math.IsNaN(p.Value) && p.Variance+p.Learned > 0 {
			all = append(all, p)
		}
	}
	return all
}

// Assessment is what a reading was worth.
type Assessment struct {
	Reading         StoredReading
	HasTail         bool    // there was something foretold
	TailProbability float64 // two-sided, of what the readings before it foretold
	Outlying        bool    // TailProbability is below modelcheck.OutlyingProbability
	HasOutlier      bool    // outliers are declared
	Outlier         float64 // probability that it was one, given it and the readings before
	HasHindsight    bool
	Hindsight       float64 // given all readings
}

// AssessQuery selects readings to assess, by time and ledger position as Readings does.
type AssessQuery struct {
	HasStart, HasEnd bool
	Start, End       Instant // End exclusive
	HasAfter         bool
	After            ReadingCursor
	Hindsight        bool // with all readings; at most MaxHindsight of them
	Limit            int
}

// MaxHindsight bounds the readings that are assessed with all others: each takes two folds of all.
const MaxHindsight = 20

// Assess tells what readings of a quantity were worth. It folds all of them anew, in the
// caller's goroutine.
func (k *Keeper) Assess(ctx context.Context, id QuantityID, q AssessQuery) (page []Assessment, more bool, err error) {
	t, ok := k.find(id)
	if !ok {
		return nil, false, notDeclared("quantity", id)
	}
	v := t.View()
	if q.Hindsight {
		q.Limit = min(q.Limit, MaxHindsight)
	}
	stored, more, err := k.Readings(ctx, ReadingsQuery{
		Quantity: id, Status: Applied, HasStart: q.HasStart, Start: q.Start, HasEnd: q.HasEnd, End: q.End, HasAfter: q.HasAfter, After: q.After, Limit: q.Limit,
	})
	if err != nil || len(stored) == 0 {
		return nil, false, err
	}
	select { // it takes a core for long: one at a time
	case k.budgeting <- struct{}{}:
		defer func() { <-k.budgeting }()
	case <-ctx.Done():
		return nil, false, ctx.Err()
	}
	all, err := v.entries(k.Ledger())
	if err != nil {
		return nil, false, err
	}
	page = make([]Assessment, len(stored))
	asked := map[Position]*Assessment{}
	for i := range stored {
		page[i].Reading = stored[i]
		asked[stored[i].Position] = &page[i]
	}
	l := lawOf(v.basis)
	f, err := assess(ctx, &l, all, asked)
	if err != nil || !q.Hindsight || v.basis.declaration().Outliers == (Outliers{}) {
		return page, more, err
	}
	for i := range page {
		a := &page[i]
		at := sort.Search(len(all), func(n int) bool { return all[n].Time > a.Reading.Time })
		if ctx.Err() != nil {
			return nil, false, ctx.Err()
		}
		if at > 0 {
			a.Hindsight, a.HasHindsight = f.bank.hindsight(ctx, v.basis, all, a.Reading.Position)
		}
	}
	return page, more, nil
}

// assess folds all readings and takes down what those asked for said.
func assess(ctx context.Context, l *law, all []entry, asked map[Position]*Assessment) (*fold, error) {
	f := new(fold)
	for i := range all {
		said := f.add(l, &all[i].Row)
		if f.outgrown(l.model) {
			f.bank.replace(l.model, all[:i+1])
		}
		if i%64 == 0 && ctx.Err() != nil {
			return nil, ctx.Err()
		}
		a := asked[all[i].Position]
		if a == nil {
			continue
		}
		if said.foretold {
			a.TailProbability, a.HasTail = f.check.Tail()
			a.Outlying = a.HasTail && a.TailProbability < modelcheck.OutlyingProbability
		}
		if a.HasOutlier = said.foretold && l.model.declaration().Outliers != (Outliers{}); a.HasOutlier {
			a.Outlier = said.outlier
		}
	}
	return f, nil
}

// hindsight returns the probability that a reading is an outlier, given all: by Bayes'
// rule from the density of all readings if it is one and if it isn't.
func (b *bank) hindsight(ctx context.Context, m *model, all []entry, position Position) (p float64, ok bool) {
	if len(b.nodes) == 0 {
		return 0, false
	}
	o := m.declaration().Outliers
	odds := math.Log(o.Probability) - math.Log1p(-o.Probability)
	for _, outlier := range [...]bool{false, true} {
		given := *m
		given.forced = &forced{position, outlier}
		c := b.clone()
		for n := range c.nodes { // one by one, so that a caller who leaves isn't waited for
			if ctx.Err() != nil {
				return 0, false
			}
			one := bank{widened: c.widened, wide: c.wide}
			one.fill(&given, c.nodes[n:n+1], c.step, all)
		}
		if outlier {
			odds += c.logEvidence()
		} else {
			odds -= c.logEvidence()
		}
	}
	return 1 / (1 + math.Exp(-odds)), true
}

// logEvidence returns ln of the readings' density, up to what all such banks share.
func (b *bank) logEvidence() float64 {
	logs := b.logWeights()
	top, sum := logs[0], 0.0
	for _, w := range logs {
		top = max(top, w)
	}
	for _, w := range logs {
		sum += math.Exp(w - top)
	}
	return top + math.Log(sum)
}
