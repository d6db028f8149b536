package server

import (
	"math"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/protobuf/testing/protocmp"
	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// objected is an invented report; its numbers need not agree with each other.
func objected(t testing.TB) modelcheck.Report {
	return modelcheck.Report{
		Result: modelcheck.Serial, Objections: []modelcheck.Result{modelcheck.Serial, modelcheck.IntervalsTooNarrow},
		Tests: []modelcheck.Test{
			{Objection: modelcheck.IntervalsTooNarrow, Name: "sum of squares", Statistic: 131.25, Probability: 1.5e-7, Level: 2.5e-6},
			{Objection: modelcheck.Serial, Name: "serial correlation", Statistic: 0.78, Probability: 2e-11, Level: 2.5e-6},
			{Objection: modelcheck.PriorConflict, Name: "normal score", Statistic: -1.2, Probability: 0.23, Level: 2.5e-4},
		},
		Total:    modelcheck.Coverage{Readings: 640, Within50: 0.4375, Within95: 0.90625, MeanSquare: 1.5625},
		Lag1:     0.78,
		Outlying: 3, Last: modelcheck.ScoreOf(0.5-0.49999, 0.5+0.49999),
		CUSUMUp: 3.25, CUSUMDown: 0, Steps: 2,
		LastStep: modelcheck.LastStep{
			At: int64(instant(t, "2026-02-27T06:00:00Z")), Since: int64(instant(t, "2026-02-25T18:00:00Z")), Direction: modelcheck.StepDown,
		},
	}
}

func TestModelCheckIsWritten(t *testing.T) {
	report := objected(t)
	got := modelCheckMessage(&report)
	want := &leadlinev1.ModelCheck{
		Result:      leadlinev1.ModelCheck_SERIAL,
		Objections:  []leadlinev1.ModelCheck_Result{leadlinev1.ModelCheck_SERIAL, leadlinev1.ModelCheck_INTERVALS_TOO_NARROW},
		ScoredCount: 640, Coverage_50: new(0.4375), Coverage_95: new(0.90625), MeanSquaredNormalScore: new(1.5625),
		OutlyingCount: 3, StepCount: 2,
		LastStep: &leadlinev1.ModelCheck_LastStep{
			Time:      timestamp(instant(t, "2026-02-27T06:00:00Z")),
			Since:     timestamp(instant(t, "2026-02-25T18:00:00Z")),
			Direction: leadlinev1.StepEvent_DOWN,
		},
		Tests: []*leadlinev1.ModelCheck_Test{
			{Objection: leadlinev1.ModelCheck_INTERVALS_TOO_NARROW, Name: "sum of squares", Statistic: 131.25, Probability: 1.5e-7, Level: 2.5e-6},
			{Objection: leadlinev1.ModelCheck_SERIAL, Name: "serial correlation", Statistic: 0.78, Probability: 2e-11, Level: 2.5e-6},
			{Objection: leadlinev1.ModelCheck_PRIOR_CONFLICT, Name: "normal score", Statistic: -1.2, Probability: 0.23, Level: 2.5e-4},
		},
	}
	if diff := cmp.Diff(want, got, protocmp.Transform()); diff != "" {
		t.Errorf("(-want +got)\n%s", diff)
	}
}

// TestModelCheckBeforeAScore: NaN, which JSON has no number for, is absence.
func TestModelCheckBeforeAScore(t *testing.T) {
	nothing := modelcheck.Report{}
	if got := modelCheckMessage(&nothing); got != nil {
		t.Errorf("nothing checked is written %v", got)
	}
	law := modelcheck.LawOf(modelcheck.Settings{Window: 100})
	tally := modelcheck.Tally{}
	report := engine.ModelCheckReport{Report: tally.Report(&law), Law: law}
	report.Belief.Quantity.ID = "gap"
	got := wholeCheckMessage(&report)
	want := &leadlinev1.ModelCheck{
		Result: leadlinev1.ModelCheck_TOO_FEW, Quantity: new("gap"), Window: new(uint32(100)),
		Cusum: &leadlinev1.ModelCheck_Cusum{Limit: law.Threshold()},
	}
	if diff := cmp.Diff(want, got, protocmp.Transform()); diff != "" {
		t.Errorf("(-want +got)\n%s", diff)
	}
}

// TestExplanationStatesAMovementByTheDay: a variance of 1e-4 a second is one of 8.64 a day.
func TestExplanationStatesAMovementByTheDay(t *testing.T) {
	got := explanationMessage(&modelcheck.Explanation{
		Declared: -120.5, Moving: modelcheck.Moving{LogLikelihood: -101.25, Walk: 1e-4},
		Correlated: modelcheck.Correlated{LogLikelihood: -99.75, SD: 0.3, Seconds: 90.5},
	})
	if sd := got.GetMoving().GetStandardDeviation(); math.Abs(sd*sd-8.64) > 1e-12 {
		t.Errorf("the standard deviation is %v, its square should be 8.64", sd)
	}
	got.GetMoving().StandardDeviation = 0
	want := &leadlinev1.ModelCheck_Explanation{
		AsDeclared:      &leadlinev1.ModelCheck_AsDeclared{LogLikelihood: -120.5},
		Moving:          &leadlinev1.ModelCheck_Moving{LogLikelihood: -101.25, Per: durationpb.New(86400 * time.Second)},
		CorrelatedNoise: &leadlinev1.ModelCheck_CorrelatedNoise{LogLikelihood: -99.75, StandardDeviation: 0.3, CorrelationTime: durationpb.New(90500 * time.Millisecond)},
	}
	if diff := cmp.Diff(want, got, protocmp.Transform()); diff != "" {
		t.Errorf("(-want +got)\n%s", diff)
	}
	if d := durationOfSeconds(1e12); d != math.MaxInt64 {
		t.Errorf("30,000 years are written %v", d)
	}
}

func TestEveryResultOfAModelCheckIsOneOfTheInterface(t *testing.T) {
	for _, r := range modelcheck.Results {
		if got := checkResultMessage(r); got.String() != r.String() || got == leadlinev1.ModelCheck_UNSPECIFIED {
			t.Errorf("result %s is written %s", r, got)
		}
	}
	if n := len(leadlinev1.ModelCheck_Result_name) - 1; n != len(modelcheck.Results) {
		t.Errorf("the interface has %d results, the check %d", n, len(modelcheck.Results))
	}
}

// TestBeliefOnALogarithmicScale: for a normal logarithm the geometric forms are exp of
// its mean and standard deviation (Johnson, Kotz & Balakrishnan 1994, chapter 14, from
// memory).
func TestBeliefOnALogarithmicScale(t *testing.T) {
	b := gapBelief(t)
	b.Method, b.Quantity.Declaration.Scale = engine.MethodFilter, engine.ScaleLog
	if m := beliefMessage(&b); m.Scale != nil || m.GeometricMean != nil || m.GetMethod() != "FILTER" {
		t.Errorf("scale %v, geometric mean %v, method %s", m.Scale, m.GeometricMean, m.GetMethod())
	}
	b.Level = posterior.Normal(posterior.LevelOf(0.5), 0.25).Exp()
	m := beliefMessage(&b)
	for name, test := range map[string]struct {
		got  *float64
		want float64
	}{
		"geometric_mean":               {m.GeometricMean, math.Exp(0.5)},
		"geometric_standard_deviation": {m.GeometricStandardDeviation, math.Exp(0.25)},
		"mean":                         {m.Mean, math.Exp(0.5 + 0.25*0.25/2)},
	} {
		if test.got == nil || math.Abs(*test.got/test.want-1) > 1e-14 {
			t.Errorf("%s is %v, want %v", name, test.got, test.want)
		}
	}
	if m.GetScale() != leadlinev1.Quantity_LOG {
		t.Errorf("scale %v", m.Scale)
	}
}

func TestBeliefTellsOfItsLastReading(t *testing.T) {
	b := gapBelief(t)
	b.HasLast = false
	if m := beliefMessage(&b); m.LastReading != nil {
		t.Errorf("without a reading: %v", m.LastReading)
	}
	b.HasLast = true
	if m := beliefMessage(&b).GetLastReading(); m == nil || m.TailProbability != nil || m.GetOutlying() || m.OutlierProbability != nil {
		t.Errorf("without a score: %v", m)
	}
	b.Check, b.HasOutlier, b.Outlier = objected(t), true, 0.875
	b.HasTail, b.Tail = true, b.Check.Last.Tail()
	m := beliefMessage(&b).GetLastReading()
	// 0.00001 below: twice that is the two-sided tail.
	if p := m.GetTailProbability(); math.Abs(p/2e-5-1) > 1e-9 || !m.GetOutlying() || m.GetOutlierProbability() != 0.875 || !m.GetTime().AsTime().Equal(b.LastTime.Time()) {
		t.Errorf("%v", m)
	}
	b.Tail = modelcheck.ScoreOf(0.25, 0.75).Tail()
	if m := beliefMessage(&b).GetLastReading(); m.GetOutlying() || math.Abs(m.GetTailProbability()-0.5) > 1e-12 {
		t.Errorf("%v", m)
	}
}

func TestAssessmentIsWritten(t *testing.T) {
	a := engine.Assessment{Reading: engine.StoredReading{Reading: engine.Reading{Quantity: "gap", Value: 0.83}, Status: engine.Applied}}
	m := assessmentMessage(&a)
	if m.GetReading().GetValue() != 0.83 || m.TailProbability != nil || m.OutlierProbability != nil || m.OutlierProbabilityInHindsight != nil || m.GetOutlying() {
		t.Errorf("%v", m)
	}
	a.HasTail, a.TailProbability, a.Outlying = true, 1e-5, true
	a.HasOutlier, a.Outlier, a.HasHindsight, a.Hindsight = true, 0.75, true, 0.25
	m = assessmentMessage(&a)
	if m.GetTailProbability() != 1e-5 || !m.GetOutlying() || m.GetOutlierProbability() != 0.75 || m.GetOutlierProbabilityInHindsight() != 0.25 {
		t.Errorf("%v", m)
	}
}
