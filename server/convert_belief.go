package server

import (
	"leadline.example/engine"
	"leadline.example/engine/decide"
	"leadline.example/engine/posterior"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// beliefMessage writes a belief. What doesn't exist is left out, and is named
// in undetermined by the engine.
func beliefMessage(b *engine.Belief) *leadlinev1.Belief {
	d := &b.Quantity.Declaration
	m := &leadlinev1.Belief{
		Quantity:       string(b.Quantity.ID),
		Unit:           d.Unit,
		Time:           timestamp(b.Time),
		Distribution:   distributionMessage(b.Level),
		Repeatability:  repeatabilityBeliefMessage(b),
		ReadingCount:   uint32(b.ReadingCount),
		Revision:       b.Quantity.Revision,
		LedgerPosition: uint64(b.Position),
		Rebuilding:     b.Rebuilding,
		Undetermined:   b.Undetermined,
		Predictive:     predictiveMessage(b),
		Slope:          slopeBeliefMessage(b),
		Biases:         biasMessages(b.Biases),
		References:     referenceMessages(b.References),
		Linearised:     b.Linearised,

		ResolutionAsVariance: b.ResolutionAsVariance,
		Flagged:              flaggedMessage(b),
	}
	m.Mean, m.StandardDeviation, m.Interval = summary(b.Level, b.Coverage, b.Lower, b.Upper)
	if b.HasBreach {
		m.Breach = &leadlinev1.Belief_Breach{Below: b.Below, Above: b.Above, Either: b.Either}
		m.ConformanceProbability = new(b.Conformance)
	}
	if b.HasThreshold && b.Level.Form() != posterior.FormNone {
		m.Threshold = &leadlinev1.Belief_Threshold{Value: b.Threshold, ProbabilityBelow: b.ProbabilityBelow}
	}
	if b.Verdict != 0 {
		m.Verdict = verdictMessage(b.Verdict).Enum()
	}
	if b.HasLast {
		m.LastReadingTime = timestamp(b.LastTime)
	}
	setModelFigures(m, b)
	if b.HasRenewal {
		m.RenewalTime = timestamp(b.RenewalTime)
	}
	return m
}

// summary gives what exists of a distribution's moments and interval.
func summary(p posterior.Posterior, coverage, lower, upper float64) (mean, sd *float64, interval *leadlinev1.Interval) {
	if p.Form() == posterior.FormNone {
		return nil, nil, nil
	}
	if x, ok := p.Mean(); ok {
		mean = &x
	}
	if x, ok := p.StandardDeviation(); ok {
		sd = &x
	}
	return mean, sd, &leadlinev1.Interval{Lower: lower, Upper: upper, CoverageProbability: coverage}
}

func distributionMessage(p posterior.Posterior) *leadlinev1.Distribution {
	switch p.Form() {
	case posterior.FormNormal:
		return &leadlinev1.Distribution{Form: leadlinev1.Distribution_NORMAL}
	case posterior.FormStudent:
		return &leadlinev1.Distribution{
			Form:             leadlinev1.Distribution_STUDENT,
			Location:         new(p.Location()),
			Scale:            new(p.Scale()),
			DegreesOfFreedom: new(p.DegreesOfFreedom()),
		}
	case posterior.FormMixture:
		return &leadlinev1.Distribution{Form: leadlinev1.Distribution_MIXTURE}
	case posterior.FormGrid:
		return &leadlinev1.Distribution{Form: leadlinev1.Distribution_GRID}
	}
	return &leadlinev1.Distribution{Form: leadlinev1.Distribution_NONE}
}

func predictiveMessage(b *engine.Belief) *leadlinev1.Predictive {
	if b.Predictive.Form() == posterior.FormNone {
		return nil
	}
	m := &leadlinev1.Predictive{Instrument: string(b.PredictiveInstrument)}
	m.Mean, m.StandardDeviation, m.Interval = summary(b.Predictive, b.Coverage, b.PredictiveLower, b.PredictiveUpper)
	if b.Quantity.Declaration.Tolerance.Declared() {
		m.Outside = &leadlinev1.Predictive_Outside{Below: b.OutsideBelow, Above: b.OutsideAbove, Either: b.OutsideEither}
	}
	return m
}

func repeatabilityBeliefMessage(b *engine.Belief) *leadlinev1.RepeatabilityBelief {
	r := &b.Repeatability
	m := &leadlinev1.RepeatabilityBelief{}
	switch {
	case r.Known:
		m.StandardDeviation = &r.StandardDeviation
	case !b.Quantity.Declaration.Repeatability.Learned():
		return nil
	}
	if r.HasMedian {
		m.Median = &r.Median
		m.Interval = &leadlinev1.Interval{Lower: r.Lower, Upper: r.Upper, CoverageProbability: b.Coverage}
	}
	if r.HasEstimate {
		m.Estimate = &r.Estimate
	}
	return m
}

func verdictMessage(v decide.Verdict) leadlinev1.Belief_Verdict {
	switch v {
	case decide.Conforms:
		return leadlinev1.Belief_CONFORMS
	case decide.Breaches:
		return leadlinev1.Belief_BREACHES
	case decide.Inconclusive:
		return leadlinev1.Belief_INCONCLUSIVE
	}
	return leadlinev1.Belief_UNSPECIFIED
}

func slopeBeliefMessage(b *engine.Belief) *leadlinev1.Slope {
	if !b.HasSlope {
		return nil
	}
	return slopeMessage(&engine.Slope{Mean: b.SlopeMean, StandardDeviation: b.SlopeStandardDeviation, Per: b.SlopePer})
}

func biasMessages(biases []engine.BiasBelief) []*leadlinev1.BiasBelief {
	var all []*leadlinev1.BiasBelief
	for _, b := range biases {
		all = append(all, &leadlinev1.BiasBelief{
			Instrument: string(b.Instrument), ValidFrom: timestamp(b.ValidFrom),
			Mean: b.Mean, StandardDeviation: b.StandardDeviation, Reference: b.Reference,
		})
	}
	return all
}

func referenceMessages(references []engine.ReferenceBelief) []*leadlinev1.ReferenceBelief {
	var all []*leadlinev1.ReferenceBelief
	for _, r := range references {
		all = append(all, &leadlinev1.ReferenceBelief{Reference: r.Reference, Mean: r.Mean, StandardDeviation: r.StandardDeviation})
	}
	return all
}

// flaggedMessage is nil if no reading is flagged.
func flaggedMessage(b *engine.Belief) *leadlinev1.Belief_Flagged {
	m := &leadlinev1.Belief_Flagged{
		Overdue:      uint32(b.Flagged[engine.CalibrationOverdue]),
		NotYetValid:  uint32(b.Flagged[engine.CalibrationNotYet]),
		Uncalibrated: uint32(b.Flagged[engine.CalibrationNone]),
	}
	if m.GetOverdue() == 0 && m.GetNotYetValid() == 0 && m.GetUncalibrated() == 0 {
		return nil
	}
	return m
}
