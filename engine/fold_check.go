package engine

import (
	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// addGuarded folds a reading into counts or a bank. Should the numbers be beyond them after
// all, the belief is lost, and says so by being undetermined; others go on.
func (f *fold) addGuarded(l *law, e *Row) (said word) {
	if f.lost {
		return word{}
	}
	defer func() {
		if recover() != nil {
			f.lost, said = true, word{}
		}
	}()
	if l.form == countsForm {
		return f.addCounts(l, e)
	}
	return f.addBank(l, e)
}

// word is what a reading said of the model: where it fell in what the readings before
// it foretold.
type word struct {
	foretold     bool
	normal       bool // score is it
	score        float64
	below, above float64 // else: probabilities that the indication would be beyond its ends
	between      bool    // it is known to lie between two ends
	outlier      float64
}

// surprised returns the word of a reading whose predictive is normal.
func surprised(s posterior.Surprise) word {
	z, ok := s.Score()
	return word{foretold: ok, normal: true, score: z}
}

// foretold returns the word of a reading of the value y.
func foretold(p posterior.Posterior, y float64) word {
	if p.Form() == posterior.FormNormal {
		return word{foretold: true, normal: true, score: p.Standard(y)}
	}
	return word{foretold: p.Form() != posterior.FormNone, below: p.LowerTail(y), above: p.UpperTail(y)}
}

// judge lets the model be checked by what the reading that was just folded in said of it.
func (f *fold) judge(l *law, e *Row, said *word) {
	f.outlier, f.scored = said.outlier, said.foretold
	step := modelcheck.NoStep
	switch {
	case !said.foretold:
		f.check.Pass(int64(e.Time))
	case said.normal:
		step = f.check.Add(&l.model.check, modelcheck.ScoreAt(said.score), int64(e.Time))
	case said.between:
		z := modelcheck.ScoreBetween(said.below, max(1-said.below, said.above), max(1-said.above, said.below), said.above)
		step = f.check.Add(&l.model.check, z, int64(e.Time))
	default:
		step = f.check.Add(&l.model.check, modelcheck.ScoreOf(said.below, said.above), int64(e.Time))
	}
	if step != modelcheck.NoStep {
		f.detect(l, step)
	}
	if f.check.PriorLook(f.since) {
		f.lookAtPrior(l.model, e.Time)
	}
}

// detect takes note of a step at the reading just folded in.
func (f *fold) detect(l *law, step modelcheck.Step) {
	last := f.check.LastStep()
	widen := l.model.declaration().StepDetection.Widen
	f.detected = append(f.detected, StepEvent{
		Time: Instant(last.At), Since: Instant(last.Since), Up: step == modelcheck.StepUp, Widen: widen,
	})
	if widen > 0 {
		f.widen(l)
	}
}

// widen lets the level be less known after a step.
func (f *fold) widen(l *law) {
	switch {
	case l.form == walkForm:
		f.walk.Predict(l.widen)
	case f.joint != nil:
		f.joint.filter.WidenLevel(l.widen)
	case f.bank != nil:
		f.bank.widen(l.widen)
	}
}

// lookAtPrior lets the model check compare what is believed at an instant with what would
// be without readings.
func (f *fold) lookAtPrior(m *model, at Instant) {
	j := startJoint(m, f.first)
	j.move(m, max(at, j.at))
	before, after := j.level(), f.state(m, at)
	mean, hasMean := after.Mean()
	sd, hasSD := after.StandardDeviation()
	if before.Form() == posterior.FormNone || !hasMean || !hasSD {
		return
	}
	f.check.Prior(&m.check, f.since, mean-before.Location(), before.Scale()*before.Scale(), sd*sd)
}
