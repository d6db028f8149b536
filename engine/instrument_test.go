package engine_test

import (
	"context"
	"errors"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"leadline.example/engine"
)

// gauge is a calibrated instrument.
func gauge() engine.InstrumentDeclaration {
	return engine.InstrumentDeclaration{
		Unit:          "mm",
		Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.5},
		Calibrations: []engine.Calibration{
			{ValidFrom: seconds(-1000), Bias: 1, BiasStandardUncertainty: 0.3},
			{ValidFrom: seconds(1000), Bias: -1, ExpandedUncertainty: 0.4, CoverageFactor: 2, HasDue: true, Due: seconds(2000)},
		},
	}
}

// with returns a declaration changed.
func with[T any](d T, change func(*T)) T {
	change(&d)
	return d
}

func TestInstrumentDeclarationIsChecked(t *testing.T) {
	first := func(change func(*engine.Calibration)) func(*engine.InstrumentDeclaration) {
		return func(d *engine.InstrumentDeclaration) {
			d.Calibrations = slices.Clone(d.Calibrations)
			change(&d.Calibrations[0])
		}
	}
	for _, test := range []struct {
		field  string
		remedy string // part of the sentence
		change func(*engine.InstrumentDeclaration)
	}{
		{"unit", "printable", func(d *engine.InstrumentDeclaration) { d.Unit = "m\nm" }},
		{"description", "at most 512", func(d *engine.InstrumentDeclaration) { d.Description = strings.Repeat("x", 513) }},
		{"repeatability.standard_deviation", "above 0", func(d *engine.InstrumentDeclaration) { d.Repeatability.StandardDeviation = -1 }},
		{"repeatability.relative", "0.01 for one percent", func(d *engine.InstrumentDeclaration) { d.Repeatability.Relative = 2 }},
		{"repeatability.standard_deviation", "around zero", func(d *engine.InstrumentDeclaration) {
			d.Repeatability = engine.InstrumentRepeatability{Relative: 0.01}
		}},
		{"repeatability.between_occasions", "above 0", func(d *engine.InstrumentDeclaration) { d.Repeatability.BetweenOccasions = math.NaN() }},
		{"repeatability.correlated.standard_deviation", "above 0", func(d *engine.InstrumentDeclaration) { d.Repeatability.Correlated.Time = time.Minute }},
		{"repeatability.correlated.correlation_time", "above 0", func(d *engine.InstrumentDeclaration) { d.Repeatability.Correlated.StandardDeviation = 1 }},
		{"resolution", "above 0", func(d *engine.InstrumentDeclaration) { d.Resolution = math.Inf(1) }},
		{"measuring_interval.upper", "lower < upper", func(d *engine.InstrumentDeclaration) {
			d.MeasuringInterval = engine.MeasuringInterval{HasLower: true, Lower: 5, HasUpper: true, Upper: 5}
		}},
		{"calibrations[1].valid_from", "distinct", first(func(c *engine.Calibration) { c.ValidFrom = seconds(1000) })},
		{"calibrations[0].valid_from", "1678 to 2262", first(func(c *engine.Calibration) { c.ValidFrom = math.MinInt64 })},
		{"calibrations[0].due", "later", first(func(c *engine.Calibration) { c.HasDue, c.Due = true, c.ValidFrom })},
		{"calibrations[0].bias", "magnitude", first(func(c *engine.Calibration) { c.Bias = math.NaN() })},
		{"calibrations[0].bias_standard_uncertainty", "above 0", first(func(c *engine.Calibration) { c.BiasStandardUncertainty = -0.1 })},
		{"calibrations[0].bias_standard_uncertainty", "missing", first(func(c *engine.Calibration) { c.BiasStandardUncertainty = 0 })},
		{"calibrations[0].expanded_uncertainty", "one of them", first(func(c *engine.Calibration) { c.ExpandedUncertainty, c.CoverageFactor = 1, 2 })},
		{"calibrations[0].expanded_uncertainty", "give the U", first(func(c *engine.Calibration) { c.CoverageFactor = 2 })},
		{"calibrations[0].relative_bias_standard_uncertainty", "0.01", first(func(c *engine.Calibration) { c.RelativeBiasStandardUncertainty = -1 })},
		{"calibrations[0].common_standard_uncertainty", "all who rest on", first(func(c *engine.Calibration) { c.Reference = "block 7" })},
		{"calibrations[0].reference", "name the standard", first(func(c *engine.Calibration) { c.CommonStandardUncertainty = 0.1 })},
		{"calibrations[0].common_standard_uncertainty", "a part", first(func(c *engine.Calibration) { c.Reference, c.CommonStandardUncertainty = "block 7", 0.31 })},
		{"calibrations[0].drift_per", "such as", first(func(c *engine.Calibration) { c.DriftStandardDeviation = 0.1 })},
		{"calibrations[0].drift_standard_deviation", "how far", first(func(c *engine.Calibration) { c.DriftPer = time.Hour })},
		{"calibrations[0].coverage_factor", "at least 1", first(func(c *engine.Calibration) {
			c.BiasStandardUncertainty, c.ExpandedUncertainty, c.CoverageFactor = 0, 1, 0.5
		})},
		{"calibrations[0].certificate", "printable", first(func(c *engine.Calibration) { c.Certificate = "\x00" })},
	} {
		d := with(gauge(), test.change)
		var refused *engine.Error
		if err := d.Check(); !errors.As(err, &refused) || refused.Field != test.field || !strings.Contains(err.Error(), test.remedy) {
			t.Errorf("%+v: got %v, want an objection to %s that says %q", d, err, test.field, test.remedy)
		}
	}
	d := gauge()
	if err := d.Check(); err != nil {
		t.Errorf("a sound instrument: %v", err)
	}
}

func TestReadingsByInstrumentsAreRefusedWithReason(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	r.declare("learned", with(gap(), func(d *engine.Declaration) {
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	}))
	r.declare("bare", with(gap(), func(d *engine.Declaration) { d.Repeatability = engine.Repeatability{} }))
	r.declareInstrument("gauge", gauge())
	r.declareInstrument("silent", with(gauge(), func(d *engine.InstrumentDeclaration) { d.Repeatability = engine.InstrumentRepeatability{} }))
	r.declareInstrument("fine", engine.InstrumentDeclaration{Unit: "mm", Resolution: 0.01})
	r.declareInstrument("inches", with(gauge(), func(d *engine.InstrumentDeclaration) { d.Unit = "in" }))
	r.declareInstrument("old", gauge())
	if _, err := r.keeper.RetireInstrument(context.Background(), "old", engine.Condition{}, start); err != nil {
		t.Fatal(err)
	}
	for _, test := range []struct {
		quantity   engine.QuantityID
		instrument engine.InstrumentID
		occasion   string
		want       engine.Reason // empty: applied
	}{
		{gapID, "gauge", "visit 1", ""},
		{"bare", "gauge", "", ""},
		{"bare", "silent", "", engine.NoRepeatability},
		{gapID, "silent", "", ""},
		{gapID, "stranger", "", engine.UnknownInstrument},
		{gapID, "old", "", engine.InstrumentRetired},
		{gapID, "inches", "", engine.UnitMismatch},
		{"learned", "gauge", "", ""},
		{"learned", "fine", "", engine.NotSupported}, // whose display could explain all differences
		{gapID, "", "visit 1", engine.NotSupported},
	} {
		res := r.post(start, engine.Reading{Quantity: test.quantity, Value: 100, Instrument: test.instrument, Occasion: test.occasion})[0]
		if res.Reason != test.want || (res.Status == engine.Applied) != (test.want == "") {
			t.Errorf("%+v is %v %s (%s)", test, res.Status, res.Reason, res.Detail)
		}
	}
}

// What would pull the ground from under readings is refused; all else goes
// through, and the beliefs follow.
func TestInstrumentInUseChangesWithinBounds(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	r.declare("bare", with(gap(), func(d *engine.Declaration) { d.Repeatability = engine.Repeatability{} }))
	r.declareInstrument("gauge", gauge())
	by := func(id engine.QuantityID, at engine.Instant) engine.Reading {
		return engine.Reading{Quantity: id, HasTime: true, Time: at, Value: 101, Instrument: "gauge"}
	}
	r.post(seconds(600), by(gapID, start), by("bare", seconds(500)))
	redeclare := func(change func(*engine.InstrumentDeclaration)) error {
		_, _, err := r.keeper.DeclareInstrument(context.Background(), "gauge", with(gauge(), change), engine.Condition{}, start)
		return err
	}
	for _, test := range []struct {
		field  string
		change func(*engine.InstrumentDeclaration)
	}{
		{"unit", func(d *engine.InstrumentDeclaration) { d.Unit = "in" }},
		{"calibrations", func(d *engine.InstrumentDeclaration) { d.Calibrations = d.Calibrations[1:] }},
		{"calibrations", func(d *engine.InstrumentDeclaration) { d.Calibrations = nil }},
		{"repeatability.standard_deviation", func(d *engine.InstrumentDeclaration) { d.Repeatability = engine.InstrumentRepeatability{} }},
	} {
		var refused *engine.Error
		if err := redeclare(test.change); !errors.As(err, &refused) || refused.Field != test.field {
			t.Errorf("got %v, want an objection to %s", err, test.field)
		}
	}
	before := r.belief(gapID, engine.BeliefQuery{Now: start})
	if err := redeclare(func(d *engine.InstrumentDeclaration) { d.Calibrations = d.Calibrations[:1] }); err != nil {
		t.Errorf("a calibration that no reading rests on: %v", err)
	}
	if err := redeclare(func(d *engine.InstrumentDeclaration) { d.Calibrations[0].Bias = 2 }); err != nil {
		t.Fatal(err)
	}
	after := r.settled(gapID, engine.BeliefQuery{Now: start})
	if was, is := before.Level.Location(), after.Level.Location(); was-is < 0.3 {
		t.Errorf("with a bias of 2 in place of 1 the level went from %v to %v", was, is)
	}
	if last := engine.Position(r.keeper.Stats().Position); after.Position != last {
		t.Errorf("the belief is of ledger position %d, want that of the instrument's record, %d", after.Position, last)
	}
	for _, clean := range []bool{true, false} {
		r.restart(clean)
		if again := r.settled(gapID, engine.BeliefQuery{Now: start}); again.Level != after.Level || again.Position != after.Position {
			t.Errorf("after a restart the level is %+v at %d, want %+v at %d", again.Level, again.Position, after.Level, after.Position)
		}
	}
	if v, err := r.keeper.Instrument("gauge"); err != nil || v.Quantities != 2 || v.Instrument.Revision != 3 {
		t.Errorf("got %+v (%v), want 2 quantities and revision 3", v, err)
	}
	if _, _, err := r.keeper.Declare(context.Background(), gapID, with(gap(), func(d *engine.Declaration) {
		d.Outliers = engine.Outliers{Probability: 0.01, Inflation: 10}
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsMeanReverting, Mean: 100, StandardDeviation: 1, HalfLife: time.Hour}
	}), engine.Condition{}, start); err == nil {
		t.Error("a reverting quantity read by a calibrated instrument has outliers")
	}
}

func TestInstrumentsAreListedAndConditional(t *testing.T) {
	r := newRig(t, engine.Options{})
	ctx := context.Background()
	for _, id := range []engine.InstrumentID{"b", "a", "a/2", "c"} {
		r.declareInstrument(id, gauge())
	}
	for _, test := range []struct {
		c    engine.Condition
		want engine.Reason
	}{
		{engine.Condition{IfNoneMatch: true}, engine.AlreadyExists},
		{engine.Condition{IfMatch: "7"}, engine.ETagMismatch},
		{engine.Condition{IfMatch: "1"}, ""},
		{engine.Condition{IfMatch: "*"}, ""},
	} {
		_, created, err := r.keeper.DeclareInstrument(ctx, "a", gauge(), test.c, start)
		var refused *engine.Error
		if errors.As(err, &refused); created || (refused == nil) != (test.want == "") || refused != nil && refused.Reason != test.want {
			t.Errorf("%+v: %v, want %s", test.c, err, test.want)
		}
	}
	if _, err := r.keeper.RetireInstrument(ctx, "b", engine.Condition{}, start); err != nil {
		t.Fatal(err)
	}
	r.restart(false)
	list := func(prefix string, after engine.InstrumentID, limit int, retired bool) (ids string, more bool) {
		page, more := r.keeper.Instruments(prefix, after, limit, retired)
		for _, v := range page {
			ids += string(v.Instrument.ID) + " "
		}
		return ids, more
	}
	for _, test := range []struct {
		prefix  string
		after   engine.InstrumentID
		limit   int
		retired bool
		want    string
		more    bool
	}{
		{"", "", 10, false, "a a/2 c ", false},
		{"", "", 10, true, "a a/2 b c ", false},
		{"", "a", 1, false, "a/2 ", true},
		{"a", "", 2, false, "a a/2 ", false},
	} {
		if ids, more := list(test.prefix, test.after, test.limit, test.retired); ids != test.want || more != test.more {
			t.Errorf("%+v: got %q, %v", test, ids, more)
		}
	}
}

// Readings are flagged by how they stand to the calibration they rest on.
func TestReadingsAreFlagged(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	r.declareInstrument("gauge", gauge())
	r.declareInstrument("uncalibrated", with(gauge(), func(d *engine.InstrumentDeclaration) { d.Calibrations = nil }))
	r.post(seconds(3000),
		engine.Reading{Quantity: gapID, HasTime: true, Time: seconds(-2000), Value: 101, Instrument: "gauge"},
		engine.Reading{Quantity: gapID, HasTime: true, Time: seconds(0), Value: 101, Instrument: "gauge"},
		engine.Reading{Quantity: gapID, HasTime: true, Time: seconds(2001), Value: 99, Instrument: "gauge"},
		engine.Reading{Quantity: gapID, HasTime: true, Time: seconds(2002), Value: 99, Instrument: "uncalibrated"},
		engine.Reading{Quantity: gapID, HasTime: true, Time: seconds(2003), Value: 100})
	b := r.belief(gapID, engine.BeliefQuery{Now: seconds(3000)})
	if want := [...]int{1, 1, 1, 1}; b.Flagged != want {
		t.Errorf("flagged %v, want %v", b.Flagged, want)
	}
	page, _, err := r.keeper.Readings(context.Background(), engine.ReadingsQuery{Quantity: gapID, Limit: 10})
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, s := range page {
		if s.HasCalibration {
			got = append(got, s.Calibration.String())
		}
	}
	if want := []string{"NOT_YET_VALID", "IN_FORCE", "OVERDUE", "UNCALIBRATED"}; !slices.Equal(got, want) {
		t.Errorf("readings are listed as %v, want %v", got, want)
	}
	if counts := r.keeper.Stats().Calibration; counts != [...]uint64{1, 1, 1, 1} {
		t.Errorf("counted %v", counts)
	}
}
