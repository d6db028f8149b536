package server

import (
	"fmt"
	"math"
	"time"

	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
	"leadline.example/engine/modelcheck"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// setModelFigures writes what a belief says of its scale and method, and how it agrees
// with the readings.
func setModelFigures(m *leadlinev1.Belief, b *engine.Belief) {
	m.Method = string(b.Method)
	if b.Level.Logarithmic() {
		m.Scale = leadlinev1.Quantity_LOG.Enum()
		m.GeometricMean = ifExists(b.Level.GeometricMean())
		m.GeometricStandardDeviation = ifExists(b.Level.GeometricStandardDeviation())
	}
	m.ModelCheck = modelCheckMessage(&b.Check)
	if !b.HasLast {
		return
	}
	m.LastReading = &leadlinev1.Belief_LastReading{Time: timestamp(b.LastTime)}
	if b.HasTail {
		m.LastReading.TailProbability, m.LastReading.Outlying = &b.Tail, b.Tail < modelcheck.OutlyingProbability
	}
	if b.HasOutlier {
		m.LastReading.OutlierProbability = &b.Outlier
	}
}

func ifExists(x float64, ok bool) *float64 {
	if !ok {
		return nil
	}
	return &x
}

// modelCheckMessage is nil where nothing was checked yet.
func modelCheckMessage(r *modelcheck.Report) *leadlinev1.ModelCheck {
	if r.Result == 0 {
		return nil
	}
	m := &leadlinev1.ModelCheck{
		Result: checkResultMessage(r.Result), ScoredCount: uint32(r.Total.Readings),
		OutlyingCount: uint32(r.Outlying), StepCount: uint32(r.Steps),
	}
	for _, o := range r.Objections {
		m.Objections = append(m.Objections, checkResultMessage(o))
	}
	if t := &r.Total; t.Readings > 0 {
		m.Coverage_50, m.Coverage_95, m.MeanSquaredNormalScore = &t.Within50, &t.Within95, &t.MeanSquare
	}
	if s := r.LastStep; s.Direction != modelcheck.NoStep {
		m.LastStep = &leadlinev1.ModelCheck_LastStep{
			Time: timestamp(engine.Instant(s.At)), Since: timestamp(engine.Instant(s.Since)), Direction: directionMessage(s.Direction == modelcheck.StepUp),
		}
	}
	for i := range r.Tests {
		t := &r.Tests[i]
		m.Tests = append(m.Tests, &leadlinev1.ModelCheck_Test{
			Objection: checkResultMessage(t.Objection), Name: t.Name, Statistic: t.Statistic, Probability: t.Probability, Level: t.Level,
		})
	}
	return m
}

// checkResultMessage relies on both lists having the same words, which a test compares.
func checkResultMessage(r modelcheck.Result) leadlinev1.ModelCheck_Result {
	value, ok := leadlinev1.ModelCheck_Result_value[r.String()]
	if !ok {
		panic(fmt.Sprintf("result %d of a model check has no word in the interface", r))
	}
	return leadlinev1.ModelCheck_Result(value)
}

func directionMessage(up bool) leadlinev1.StepEvent_Direction {
	if up {
		return leadlinev1.StepEvent_UP
	}
	return leadlinev1.StepEvent_DOWN
}

// wholeCheckMessage writes all that is told of a model.
func wholeCheckMessage(r *engine.ModelCheckReport) *leadlinev1.ModelCheck {
	m := modelCheckMessage(&r.Report)
	m.Quantity = new(string(r.Belief.Quantity.ID))
	m.Window = new(uint32(r.Law.Settings().Window))
	if finite(r.Report.Lag1) && len(r.Report.Tests) > 0 {
		m.Lag_1 = &r.Report.Lag1
	}
	m.Cusum = &leadlinev1.ModelCheck_Cusum{Up: r.Report.CUSUMUp, Down: r.Report.CUSUMDown, Limit: r.Law.Threshold()}
	if r.HasExplanation {
		m.Explanation = explanationMessage(&r.Explanation)
	}
	return m
}

func explanationMessage(e *modelcheck.Explanation) *leadlinev1.ModelCheck_Explanation {
	return &leadlinev1.ModelCheck_Explanation{
		AsDeclared: &leadlinev1.ModelCheck_AsDeclared{LogLikelihood: e.Declared},
		Moving: &leadlinev1.ModelCheck_Moving{
			LogLikelihood: e.Moving.LogLikelihood, StandardDeviation: dailyWalk(&e.Moving), Per: durationpb.New(24 * time.Hour),
		},
		CorrelatedNoise: &leadlinev1.ModelCheck_CorrelatedNoise{
			LogLikelihood: e.Correlated.LogLikelihood, StandardDeviation: e.Correlated.SD,
			CorrelationTime: durationpb.New(durationOfSeconds(e.Correlated.Seconds)),
		},
	}
}

// dailyWalk is the standard deviation of a walk within a day.
func dailyWalk(m *modelcheck.Moving) float64 { return math.Sqrt(86400 * m.Walk) }

// durationOfSeconds is at most the longest Duration.
func durationOfSeconds(s float64) time.Duration {
	if s >= math.MaxInt64/1e9 {
		return math.MaxInt64
	}
	return time.Duration(s * 1e9)
}

func stepEventMessage(s *engine.RecordedStep) *leadlinev1.StepEvent {
	return &leadlinev1.StepEvent{
		Time: timestamp(s.Time), Since: timestamp(s.Since), Direction: directionMessage(s.Up), Widen: s.Widen,
		LedgerPosition: uint64(s.Position), CreateTime: timestamp(s.CreateTime),
	}
}

func assessmentMessage(a *engine.Assessment) *leadlinev1.Assessment {
	m := &leadlinev1.Assessment{Reading: recordedMessage(&a.Reading), Outlying: a.Outlying}
	if a.HasTail {
		m.TailProbability = &a.TailProbability
	}
	if a.HasOutlier {
		m.OutlierProbability = &a.Outlier
	}
	if a.HasHindsight {
		m.OutlierProbabilityInHindsight = &a.Hindsight
	}
	return m
}
