package main

import (
	"context"
	"fmt"
	"net/http"
	"time"

	"leadline.example/engine"
)

// crashItem is a quantity of the crash tests, with the law of its readings.
type crashItem struct {
	id          engine.QuantityID
	declaration engine.Declaration
	level       float64
	noise       float64
	by          engine.InstrumentID // which takes all its readings; empty: none
}

// crashPlan has each kind of belief: constant and walking, known and learned
// repeatability, vague and proper prior; a level and a trend with instruments'
// errors beside them.
var crashPlan = []crashItem{
	{"brine-pump-1.coupling-gap", engine.Declaration{
		Unit: "mm", Prior: normal(0.8, 0.05), Repeatability: known(0.02), Tolerance: between(0.7, 0.9),
	}, 0.81, 0.02, ""},
	{"brine-pump-2.coupling-gap", engine.Declaration{
		Unit: "mm", Repeatability: known(0.02), Tolerance: between(0.7, 0.9),
	}, 0.84, 0.02, ""},
	{"store-1.temperature", engine.Declaration{
		Unit: "Cel", Prior: normal(-20, 2), Repeatability: known(0.1), Dynamics: walk(0.5, time.Hour), Tolerance: below(-18),
	}, -20, 0.1, ""},
	{"store-2.temperature", engine.Declaration{
		Unit: "Cel", Repeatability: known(0.1), Dynamics: walk(0.2, time.Minute), Tolerance: below(-18),
	}, -19, 0.1, ""},
	{"winch.rope-diameter", engine.Declaration{
		Unit: "mm", Repeatability: learned(0, 0),
	}, 15.7, 0.03, ""},
	{"winch.brake-lining", engine.Declaration{
		Unit: "mm", Prior: normal(5, 1), Repeatability: learned(0.05, 4), Tolerance: above(4),
	}, 4.4, 0.05, ""},
	{"dosing.residual", engine.Declaration{
		Unit: "mg/L", Prior: normal(0.8, 0.1), Repeatability: known(0.02), Tolerance: below(0.9),
	}, 0.83, 0.02, "photometer"},
	{"compressor-2.bearing", engine.Declaration{
		Unit: "Cel", Prior: normal(50, 5), Dynamics: engine.Dynamics{
			Form: engine.DynamicsLinearTrend, StandardDeviation: 0.1, Per: time.Hour,
			Slope: engine.Slope{Mean: 0.5, StandardDeviation: 0.5, Per: time.Hour},
		}, Tolerance: below(70),
	}, 52, 0.2, "bearing-probe"},
}

// crashInstrument is an instrument of the crash tests.
type crashInstrument struct {
	id          engine.InstrumentID
	declaration engine.InstrumentDeclaration
}

// crashInstruments are those of the plan: one with the uncertain bias of its
// calibration alone, one with everything that is exact.
var crashInstruments = []crashInstrument{
	{"photometer", engine.InstrumentDeclaration{
		Unit: "mg/L", Calibrations: []engine.Calibration{{ValidFrom: beginning, Bias: 0.02, BiasStandardUncertainty: 0.05}},
	}},
	{"bearing-probe", engine.InstrumentDeclaration{
		Unit: "Cel",
		Repeatability: engine.InstrumentRepeatability{
			StandardDeviation: 0.1, Correlated: engine.Correlated{StandardDeviation: 0.1, Time: time.Minute}, BetweenOccasions: 0.1,
		},
		Calibrations: []engine.Calibration{{
			ValidFrom: beginning, Bias: -0.3, BiasStandardUncertainty: 0.2, Reference: "ice point", CommonStandardUncertainty: 0.1,
			DriftStandardDeviation: 0.1, DriftPer: 24 * time.Hour,
		}},
	}},
}

// beginning is before the readings of every test: midnight of 1 January 2026.
const beginning = engine.Instant(1767225600e9)

// declareAll declares the plan, the instruments first; where it is declared already
// nothing changes.
func declareAll(ctx context.Context, base string) error {
	for _, i := range crashInstruments {
		var answer struct{ Revision int }
		url := base + "/v1/instruments/" + string(i.id)
		if err := call(ctx, http.DefaultClient, http.MethodPut, url, wireInstrument(i.declaration), &answer); err != nil {
			return err
		}
		if answer.Revision != 1 {
			return fmt.Errorf("%s is at revision %d after an equal declaration, want 1", i.id, answer.Revision)
		}
	}
	for _, item := range crashPlan {
		var answer struct{ Revision int }
		url := base + "/v1/quantities/" + string(item.id)
		if err := call(ctx, http.DefaultClient, http.MethodPut, url, wireDeclaration(item.declaration), &answer); err != nil {
			return err
		}
		if answer.Revision != 1 {
			return fmt.Errorf("%s is at revision %d after an equal declaration, want 1", item.id, answer.Revision)
		}
	}
	return nil
}

// wireDeclaration words the declarations of the plan as a client would.
func wireDeclaration(d engine.Declaration) map[string]any {
	out := map[string]any{"unit": d.Unit}
	if d.Prior.Form == engine.PriorNormal {
		out["prior"] = map[string]any{"mean": d.Prior.Mean, "standard_deviation": d.Prior.StandardDeviation}
	}
	switch r := d.Repeatability; r.Form {
	case engine.RepeatabilityKnown:
		out["repeatability"] = map[string]any{"standard_deviation": r.StandardDeviation}
	case engine.RepeatabilityLearned:
		out["repeatability"] = map[string]any{"learned": map[string]any{"guess": r.Guess, "worth": r.Worth}}
	case engine.RepeatabilityLearnedReference:
		out["repeatability"] = map[string]any{"learned": map[string]any{}}
	}
	walk := map[string]any{"standard_deviation": d.Dynamics.StandardDeviation, "per": wireDuration(d.Dynamics.Per)}
	switch d.Dynamics.Form {
	case engine.DynamicsRandomWalk:
		out["dynamics"] = map[string]any{"random_walk": walk}
	case engine.DynamicsLinearTrend:
		s := d.Dynamics.Slope
		walk["slope"] = map[string]any{"mean": s.Mean, "standard_deviation": s.StandardDeviation, "per": wireDuration(s.Per)}
		out["dynamics"] = map[string]any{"linear_trend": walk}
	}
	tolerance := map[string]any{}
	if d.Tolerance.HasLower {
		tolerance["lower"] = d.Tolerance.Lower
	}
	if d.Tolerance.HasUpper {
		tolerance["upper"] = d.Tolerance.Upper
	}
	if len(tolerance) > 0 {
		out["tolerance"] = tolerance
	}
	return out
}

func wireDuration(d time.Duration) string { return fmt.Sprintf("%gs", d.Seconds()) }

// wireInstrument words the instruments of the plan as a client would.
func wireInstrument(d engine.InstrumentDeclaration) map[string]any {
	c := d.Calibrations[0]
	calibration := map[string]any{
		"valid_from": c.ValidFrom.String(), "bias": c.Bias, "bias_standard_uncertainty": c.BiasStandardUncertainty,
	}
	if c.Reference != "" {
		calibration["reference"], calibration["common_standard_uncertainty"] = c.Reference, c.CommonStandardUncertainty
		calibration["drift_standard_deviation"], calibration["drift_per"] = c.DriftStandardDeviation, wireDuration(c.DriftPer)
	}
	out := map[string]any{"unit": d.Unit, "calibrations": []any{calibration}}
	if r := d.Repeatability; r.StandardDeviation > 0 {
		out["repeatability"] = map[string]any{
			"standard_deviation": r.StandardDeviation, "between_occasions": r.BetweenOccasions,
			"correlated": map[string]any{"standard_deviation": r.Correlated.StandardDeviation, "correlation_time": wireDuration(r.Correlated.Time)},
		}
	}
	return out
}
