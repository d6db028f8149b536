package engine_test

import (
	"context"
	"errors"
	"math"
	"strings"
	"testing"
	"time"

	"leadline.example/engine"
)

// tried is a reading and what becomes of it.
type tried struct {
	name    string
	reading engine.Reading
	want    engine.Reason // empty: applied
}

func (r *rig) try(t *testing.T, all []tried) {
	t.Helper()
	for i, test := range all {
		y := test.reading
		y.HasTime, y.Time = true, seconds(float64(i))
		if got := r.post(y.Time, y)[0]; got.Reason != test.want || (got.Status == engine.Applied) != (test.want == "") {
			t.Errorf("%s: %v %s (%s)", test.name, got.Status, got.Reason, got.Detail)
		}
	}
}

func plain() engine.Declaration {
	return engine.Declaration{
		Unit: "bar", Prior: engine.Prior{Form: engine.PriorNormal, Mean: 5, StandardDeviation: 1},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.5},
		Tolerance:     engine.Tolerance{HasUpper: true, Upper: 7},
	}
}

// A censored reading so far off that nothing could be made of it is refused before it harms the belief.
func TestAbsurdLimitsAreRefused(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("pressure", plain())
	r.try(t, []tried{
		{"far above", engine.Reading{Quantity: "pressure", Extent: engine.ExtentAbove, Value: 1e10}, engine.NotSupported},
		{"far below", engine.Reading{Quantity: "pressure", Extent: engine.ExtentBelow, Value: -1e90}, engine.NotSupported},
		{"reversed", engine.Reading{Quantity: "pressure", Extent: engine.ExtentBetween, Value: 6, Upper: 5}, engine.ValueOutOfRange},
		{"above", engine.Reading{Quantity: "pressure", Extent: engine.ExtentAbove, Value: 5.5}, ""},
		{"a value far off, now that one is censored", engine.Reading{Quantity: "pressure", Value: 1e9}, engine.NotSupported},
		{"a value", engine.Reading{Quantity: "pressure", Value: 5.8}, ""},
	})
	b := r.settled("pressure", engine.BeliefQuery{Now: seconds(10)})
	if mean, ok := b.Level.Mean(); !ok || math.IsNaN(mean) || b.ReadingCount != 2 {
		t.Errorf("mean %v of %d readings", mean, b.ReadingCount)
	}
}

// An instrument says no more than its measuring interval allows, however it is put.
func TestMeasuringIntervalBoundsWhatIsSaid(t *testing.T) {
	means := map[string]float64{}
	for name, y := range map[string]engine.Reading{
		"value 8":      {Value: 8},
		"above 8":      {Extent: engine.ExtentAbove, Value: 8},
		"between 7, 9": {Extent: engine.ExtentBetween, Value: 7, Upper: 9},
		"above 6":      {Extent: engine.ExtentAbove, Value: 6},
	} {
		r := newRig(t, engine.Options{})
		r.declare("pressure", plain())
		r.declareInstrument("gauge", engine.InstrumentDeclaration{
			Unit: "bar", MeasuringInterval: engine.MeasuringInterval{HasLower: true, HasUpper: true, Upper: 6},
		})
		y.Quantity, y.Instrument, y.HasTime, y.Time = "pressure", "gauge", true, seconds(1)
		if res := r.post(y.Time, y)[0]; res.Status != engine.Applied {
			t.Fatalf("%s: %s", name, res.Detail)
		}
		means[name], _ = r.settled("pressure", engine.BeliefQuery{Now: seconds(2)}).Level.Mean()
	}
	for name, mean := range means {
		if mean != means["above 6"] || !(mean > 5.5) {
			t.Errorf("after %s the mean is %v, after above 6 it is %v", name, mean, means["above 6"])
		}
	}
}

// What has no logarithm is refused wherever it can be given, and so is noise in the unit.
func TestLogarithmicScaleIsGuarded(t *testing.T) {
	r := newRig(t, engine.Options{})
	d := plain()
	d.Scale, d.Tolerance = engine.ScaleLog, engine.Tolerance{}
	r.declare("residual", d)
	r.declareInstrument("noisy", engine.InstrumentDeclaration{Unit: "bar", Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.1}})
	r.try(t, []tried{
		{"zero", engine.Reading{Quantity: "residual", Value: 0}, engine.ValueOutOfRange},
		{"below nothing", engine.Reading{Quantity: "residual", Extent: engine.ExtentBelow, Value: -1}, engine.ValueOutOfRange},
		{"noise in the unit", engine.Reading{Quantity: "residual", Instrument: "noisy", Value: 4}, engine.NotSupported},
		{"a value", engine.Reading{Quantity: "residual", Value: 4}, ""},
	})
	for _, p := range []engine.Prior{
		{Form: engine.PriorNormal, Mean: -10, StandardDeviation: 1},
		{Form: engine.PriorInterval, Low: 0, High: 1, Probability: 0.5},
	} {
		var refused *engine.Error
		if _, err := r.keeper.Renew(context.Background(), "residual", engine.Renewal{Time: seconds(5), Prior: p}, seconds(5)); !errors.As(err, &refused) || !strings.HasPrefix(refused.Field, "prior.") {
			t.Errorf("renewed with %+v: %v", p, err)
		}
	}
}

// An instrument from which nothing could ever be learned is refused where it is declared.
func TestImproperInstrumentIsRefused(t *testing.T) {
	r := newRig(t, engine.Options{})
	reference := engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	_, _, err := r.keeper.DeclareInstrument(context.Background(), "shown", engine.InstrumentDeclaration{
		Resolution: 1, Repeatability: engine.InstrumentRepeatability{Learned: reference},
	}, engine.Condition{}, start)
	var refused *engine.Error
	if !errors.As(err, &refused) || refused.Field != "repeatability.learned" {
		t.Errorf("declared with %v", err)
	}
}

// The first reading of its kind takes the belief to another method with all readings before it.
func TestFirstCensoredReadingKeepsTheOthers(t *testing.T) {
	r := newRig(t, engine.Options{})
	d := plain()
	d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.1, Per: time.Minute}
	r.declare("pressure", d)
	for i := range 12 {
		r.try(t, []tried{{"a value", engine.Reading{Quantity: "pressure", Value: 5 + 0.1*float64(i)}, ""}})
	}
	r.try(t, []tried{{"above", engine.Reading{Quantity: "pressure", Extent: engine.ExtentAbove, Value: 5.5}, ""}})
	if b := r.settled("pressure", engine.BeliefQuery{Now: seconds(20)}); b.ReadingCount != 13 || b.Method != engine.MethodGrid {
		t.Errorf("%d readings by %s, want 13 by GRID", b.ReadingCount, b.Method)
	}
}
