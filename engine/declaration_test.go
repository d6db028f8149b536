package engine_test

import (
	"errors"
	"math"
	"strings"
	"testing"

	"leadline.example/engine"
	"leadline.example/engine/decide"
)

func TestDeclarationCheckNamesTheField(t *testing.T) {
	tests := []struct {
		name   string
		change func(*engine.Declaration)
		field  string
	}{
		{"unit too long", func(d *engine.Declaration) { d.Unit = strings.Repeat("m", 33) }, "unit"},
		{"unit with newline", func(d *engine.Declaration) { d.Unit = "m\n" }, "unit"},
		{"description not UTF-8", func(d *engine.Declaration) { d.Description = "\xff" }, "description"},
		{"prior sd 0", func(d *engine.Declaration) { d.Prior.StandardDeviation = 0 }, "prior.standard_deviation"},
		{"prior sd negative", func(d *engine.Declaration) { d.Prior.StandardDeviation = -0.05 }, "prior.standard_deviation"},
		{"prior mean NaN", func(d *engine.Declaration) { d.Prior.Mean = math.NaN() }, "prior.mean"},
		{"prior reversed", func(d *engine.Declaration) {
			d.Prior = engine.Prior{Form: engine.PriorInterval, Low: 2, High: 1, Probability: 0.9}
		}, "prior.high"},
		{"prior certain", func(d *engine.Declaration) {
			d.Prior = engine.Prior{Form: engine.PriorInterval, Low: 1, High: 2, Probability: 1}
		}, "prior.probability"},
		{"prior time", func(d *engine.Declaration) { d.Prior.HasTime, d.Prior.Time = true, math.MinInt64 }, "prior.time"},
		{"repeatability infinite", func(d *engine.Declaration) { d.Repeatability.StandardDeviation = math.Inf(1) }, "repeatability.standard_deviation"},
		{"worth 0", func(d *engine.Declaration) {
			d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 1}
		}, "repeatability.learned.worth"},
		{"walk without time", func(d *engine.Declaration) {
			d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 1}
		}, "dynamics.random_walk.per"},
		{"learned walk", func(d *engine.Declaration) {
			d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 1, Per: 1}
			d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
		}, "repeatability.learned"},
		{"tolerance empty", func(d *engine.Declaration) {
			d.Tolerance = engine.Tolerance{HasLower: true, HasUpper: true, Lower: 1, Upper: 1}
		}, "tolerance.upper"},
		{"rule at one half", func(d *engine.Declaration) { d.Rule = decide.Rule{ConformProbability: 0.5, BreachProbability: 0.9} }, "decision_rule.conform_probability"},
		{"rule above one", func(d *engine.Declaration) { d.Rule = decide.Rule{ConformProbability: 0.9, BreachProbability: 1.1} }, "decision_rule.breach_probability"},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			d := gap()
			test.change(&d)
			var refused *engine.Error
			if err := d.Check(); !errors.As(err, &refused) || refused.Field != test.field || !strings.Contains(refused.Message, test.field) {
				t.Errorf("got %v, want an error about %s", err, test.field)
			}
		})
	}
	if d := gap(); d.Check() != nil {
		t.Errorf("a good declaration is refused: %v", d.Check())
	}
}
