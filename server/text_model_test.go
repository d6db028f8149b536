package server

import (
	"testing"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

func TestModelReadsAsDeclared(t *testing.T) {
	q := gapQuantity(t)
	d := &q.Declaration
	d.Unit, d.Scale = "mg/l", engine.ScaleLog
	d.Outliers = engine.Outliers{Probability: 0.02, Inflation: 8}
	d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.1, Worth: 3, Floor: 0.02}
	d.ModelCheck = engine.ModelCheck{Window: 100, ObjectionsPerYear: 0.01}
	d.StepDetection = engine.StepDetection{FalseAlarmInterval: 1e4, Widen: 0.5}
	checkGolden(t, "quantity-model", quantityText(&q))
	v := calliperView(t)
	v.Instrument.Declaration.Repeatability = engine.InstrumentRepeatability{
		Learned: engine.Repeatability{Form: engine.RepeatabilityLearnedReference, Floor: 0.005}, BetweenOccasions: 0.02,
	}
	checkGolden(t, "instrument-learned", instrumentText(&v))
}

func TestBeliefOnALogarithmicScaleReads(t *testing.T) {
	b := gapBelief(t)
	d := &b.Quantity.Declaration
	d.Unit, d.Description, d.Scale = "mg/l", "chlorine, dosing 2", engine.ScaleLog
	b.Level = posterior.Normal(posterior.LevelOf(0.5), 0.05).Exp()
	b.Lower, b.Upper = b.Level.Interval(0.95)
	b.Predictive = posterior.Posterior{}
	checkGolden(t, "belief-logarithmic", beliefText(&b))
	b.Level = posterior.Student(posterior.LevelOf(0.5), 0.05, 5).Exp()
	b.Lower, b.Upper = b.Level.Interval(0.95)
	checkGolden(t, "belief-logarithmic-learned", beliefText(&b))
}
