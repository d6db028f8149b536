package server

import (
	"strings"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

// The numbers below are invented; they need not agree with each other.

func calliperView(t testing.TB) engine.InstrumentView {
	return engine.InstrumentView{
		Instrument: engine.Instrument{
			ID: "calliper-7", Number: 1, Revision: 3,
			CreateTime: instant(t, "2026-02-01T08:00:00Z"), UpdateTime: instant(t, "2026-02-20T09:30:00Z"),
			Declaration: engine.InstrumentDeclaration{
				Unit: "mm", Description: "calliper of the workshop",
				Repeatability: engine.InstrumentRepeatability{
					StandardDeviation: 0.01, Relative: 0.002, BetweenOccasions: 0.02,
					Correlated: engine.Correlated{StandardDeviation: 0.005, Time: 90 * time.Second},
				},
				Resolution:        0.01,
				MeasuringInterval: engine.MeasuringInterval{HasLower: true, HasUpper: true, Upper: 150},
				Calibrations: []engine.Calibration{
					{ValidFrom: instant(t, "2025-01-10T00:00:00Z"), Bias: 0.012, ExpandedUncertainty: 0.02, CoverageFactor: 2,
						RelativeBiasStandardUncertainty: 0.001, DriftStandardDeviation: 0.01, DriftPer: 365 * 24 * time.Hour,
						Reference: "gauge blocks 4", CommonStandardUncertainty: 0.004, Certificate: "K 25/117",
						HasDue: true, Due: instant(t, "2026-01-10T00:00:00Z")},
					{ValidFrom: instant(t, "2026-01-12T00:00:00Z"), BiasStandardUncertainty: 0.01},
				},
			},
		},
		Quantities: 12, Rebuilding: 3,
	}
}

func TestInstrumentsReadAsDeclared(t *testing.T) {
	full, plain := calliperView(t), calliperView(t)
	i := &plain.Instrument
	i.ID, i.Declaration = "feeler", engine.InstrumentDeclaration{Unit: "mm"}
	i.Retired, i.RetireTime = true, instant(t, "2026-03-02T00:00:00Z")
	plain.Quantities, plain.Rebuilding = 1, 0
	checkGolden(t, "instrument", instrumentText(&full))
	checkGolden(t, "instrument-retired", instrumentText(&plain))
	checkGolden(t, "instruments", instrumentsText([]engine.InstrumentView{full, plain}, "bmV4dA"))
	checkGolden(t, "instruments-none", instrumentsText(nil, ""))
}

func TestForecastReadsAtAGlance(t *testing.T) {
	f := engine.Forecast{
		Quantity: gapQuantity(t), Time: instant(t, "2026-03-01T12:00:00Z"), Horizon: 48 * time.Hour, Coverage: 0.95, Position: 812,
		HasCrossing: true, Probability: 0.5712, LowerDecile: 7*time.Hour + 20*time.Minute, Median: 40 * time.Hour, UpperDecile: -1,
	}
	for n := range 2 {
		f.Steps = append(f.Steps, engine.ForecastStep{
			Time:  f.Time + engine.Instant((n+1)*24*int(time.Hour)),
			Level: posterior.Normal(posterior.LevelOf(0.81234), 0.05+0.01*float64(n)), Lower: 0.7, Upper: 0.93,
			HasBreach: true, Breach: engine.Breach{Below: 0.01, Above: 0.03, Either: 0.04}, HasCrossed: true, Crossed: posterior.Crossing{Below: 0.1, Above: 0.2, Either: 0.3},
		})
	}
	checkGolden(t, "forecast", forecastText(&f))
	f.HasCrossing, f.Rebuilding = false, true
	f.Steps = []engine.ForecastStep{{Time: f.Steps[1].Time}}
	checkGolden(t, "forecast-nothing-known", forecastText(&f))
}

func TestBudgetLinesUp(t *testing.T) {
	b := engine.Budget{
		Quantity: gapQuantity(t), Time: instant(t, "2026-03-01T12:00:00Z"), Variance: 0.0013, Position: 812,
		Parts: []engine.BudgetPart{
			{Source: engine.Bias, Instrument: "calliper-7", Variance: 0.0005},
			{Source: engine.CommonReference, Reference: "gauge blocks 4", Variance: 0.0004},
			{Source: engine.RepeatabilityNoise, Variance: 0.0004},
		},
	}
	checkGolden(t, "budget", budgetText(&b))
	b.Undetermined, b.Parts = []string{"variance", "parts"}, nil
	checkGolden(t, "budget-nothing-known", budgetText(&b))
}

func TestRenewalsLineUp(t *testing.T) {
	checkGolden(t, "renewals", renewalsText([]engine.Renewal{
		{RequestID: "job 4711", Time: instant(t, "2026-02-01T08:00:00Z"), Reason: "lining replaced",
			Prior: engine.Prior{Form: engine.PriorNormal, Mean: 10, StandardDeviation: 0.2}},
		{RequestID: "renewal-17", Time: instant(t, "2026-02-03T08:00:00Z"), HasSlope: true, Withdrawn: true, WithdrawTime: instant(t, "2026-02-03T09:00:00Z"),
			Slope: engine.Slope{Mean: -0.01, StandardDeviation: 0.005, Per: 24 * time.Hour}},
	}))
	checkGolden(t, "renewals-none", renewalsText(nil))
}

func TestTextOfInstrumentsStaysOnItsLine(t *testing.T) {
	v := calliperView(t)
	v.Instrument.Declaration.Description = "calliper\n  retired       2026-01-01"
	if text := instrumentText(&v); strings.Contains(text, "\n  retired ") {
		t.Errorf("a description made a line:\n%s", text)
	}
}
