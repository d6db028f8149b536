package server

import (
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/modelcheck"
)

func TestBeliefTellsWhetherItIsHonest(t *testing.T) {
	b := gapBelief(t)
	b.Check, b.HasOutlier, b.Outlier = objected(t), true, 0.9712
	b.HasTail, b.Tail = true, b.Check.Last.Tail()
	checkGolden(t, "belief-objected-to", beliefText(&b))
	b.Check = modelcheck.Report{Result: modelcheck.TooFew}
	b.HasOutlier, b.HasTail = false, false
	checkGolden(t, "belief-too-few", beliefText(&b))
}

func TestModelCheckLinesUp(t *testing.T) {
	r := engine.ModelCheckReport{
		Belief: gapBelief(t), Report: objected(t), Law: modelcheck.LawOf(modelcheck.Settings{}), HasExplanation: true,
		Explanation: modelcheck.Explanation{
			Declared: -120.5, Moving: modelcheck.Moving{LogLikelihood: -101.25, Walk: 1e-9},
			Correlated: modelcheck.Correlated{LogLikelihood: -99.75, SD: 0.0123, Seconds: 5400},
		},
	}
	checkGolden(t, "model-check", modelCheckText(&r))
	r.Explanation.Correlated = modelcheck.Correlated{LogLikelihood: -120.5}
	r.Report = modelcheck.Report{Result: modelcheck.TooFew}
	checkGolden(t, "model-check-nothing-known", modelCheckText(&r))
}

func TestStepsLineUp(t *testing.T) {
	checkGolden(t, "steps", stepsText([]engine.RecordedStep{
		{StepEvent: engine.StepEvent{Time: instant(t, "2026-02-27T06:00:00Z"), Since: instant(t, "2026-02-25T18:00:00Z"), Widen: 0.05},
			Position: 812, CreateTime: instant(t, "2026-02-27T06:00:02.5Z")},
		{StepEvent: engine.StepEvent{Time: instant(t, "2026-03-01T06:00:00Z"), Since: instant(t, "2026-02-28T06:00:00Z"), Up: true},
			Position: 900, CreateTime: instant(t, "2026-03-01T06:00:01Z")},
	}))
	checkGolden(t, "steps-none", stepsText(nil))
}

func TestAssessmentsLineUp(t *testing.T) {
	at := instant(t, "2026-03-01T11:00:00Z")
	reading := func(minutes int, r engine.Reading) engine.StoredReading {
		r.Quantity, r.Unit, r.Time = "brine-pump-3.coupling-gap", "mm", at+engine.Instant(time.Duration(minutes)*time.Minute)
		return engine.StoredReading{Reading: r, Status: engine.Applied}
	}
	checkGolden(t, "assessments", assessmentsText([]engine.Assessment{
		{Reading: reading(0, engine.Reading{Value: 0.81, ID: "gap-1"})},
		{Reading: reading(1, engine.Reading{Value: 0.93, Instrument: "calliper-7", ID: "gap-2"}),
			HasTail: true, TailProbability: 2.31e-6, Outlying: true, HasOutlier: true, Outlier: 0.9712, HasHindsight: true, Hindsight: 0.99123},
		{Reading: reading(2, engine.Reading{Extent: engine.ExtentAbove, Value: 1.5}), HasTail: true, TailProbability: 0.041, HasOutlier: true, Outlier: 0.12},
	}, "bmV4dA"))
	checkGolden(t, "assessments-none", assessmentsText(nil, ""))
}
