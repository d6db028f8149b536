package persist

import (
	"encoding/hex"
	"math"
	"strings"
	"testing"
	"time"

	"google.golang.org/protobuf/encoding/protowire"
	"pgregory.net/rapid"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

func drawDuration(t *rapid.T) time.Duration {
	return time.Duration(rapid.OneOf(rapid.Just(int64(0)), rapid.Int64()).Draw(t, "duration"))
}

func drawText(t *rapid.T) string {
	return rapid.OneOf(rapid.Just(""), rapid.Just("dial_gauge_2"), rapid.String()).Draw(t, "text")
}

func drawFlag(t *rapid.T) bool { return rapid.Bool().Draw(t, "flag") }

func drawPrior(t *rapid.T) engine.Prior {
	return engine.Prior{
		Form: engine.PriorForm(rapid.IntRange(0, 2).Draw(t, "form")),
		Mean: drawFloat(t), StandardDeviation: drawFloat(t), Low: drawFloat(t), High: drawFloat(t),
		Probability: drawFloat(t), HasTime: drawFlag(t), Time: drawInstant(t),
	}
}

func drawSlope(t *rapid.T) engine.Slope {
	return engine.Slope{Mean: drawFloat(t), StandardDeviation: drawFloat(t), Per: drawDuration(t)}
}

func drawDynamics(t *rapid.T) engine.Dynamics {
	return engine.Dynamics{
		Form:              engine.DynamicsForm(rapid.IntRange(0, 3).Draw(t, "form")),
		StandardDeviation: drawFloat(t), Per: drawDuration(t), Slope: drawSlope(t),
		Wander: engine.Wander{StandardDeviation: drawFloat(t), Per: drawDuration(t)},
		Mean:   drawFloat(t), HalfLife: drawDuration(t),
	}
}

func drawRenewal(t *rapid.T) *engine.Renewal {
	return &engine.Renewal{
		RequestID: drawText(t), Time: drawInstant(t), Reason: drawText(t), Prior: drawPrior(t),
		HasSlope: drawFlag(t), Slope: drawSlope(t), Position: engine.Position(rapid.Uint64().Draw(t, "position")),
		CreateTime: drawInstant(t), Withdrawn: drawFlag(t), WithdrawTime: drawInstant(t),
	}
}

func drawInstrument(t *rapid.T) *engine.Instrument {
	i := &engine.Instrument{
		ID: engine.InstrumentID(drawText(t)), Number: engine.InstrumentNumber(rapid.Uint32Min(1).Draw(t, "number")),
		Revision: rapid.Uint32().Draw(t, "revision"), CreateTime: drawInstant(t), UpdateTime: drawInstant(t),
		Retired: drawFlag(t), RetireTime: drawInstant(t),
		Declaration: engine.InstrumentDeclaration{
			Unit: drawText(t), Description: drawText(t),
			Repeatability: engine.InstrumentRepeatability{
				StandardDeviation: drawFloat(t), Relative: drawFloat(t), BetweenOccasions: drawFloat(t),
				Correlated: engine.Correlated{StandardDeviation: drawFloat(t), Time: drawDuration(t)},
				Learned:    drawRepeatability(t),
			},
			Resolution: drawFloat(t),
			MeasuringInterval: engine.MeasuringInterval{
				HasLower: drawFlag(t), HasUpper: drawFlag(t), Lower: drawFloat(t), Upper: drawFloat(t),
			},
		},
	}
	for range rapid.IntRange(0, 3).Draw(t, "calibrations") {
		i.Declaration.Calibrations = append(i.Declaration.Calibrations, drawCalibration(t))
	}
	return i
}

func drawCalibration(t *rapid.T) engine.Calibration {
	if drawFlag(t) {
		return engine.Calibration{}
	}
	return engine.Calibration{
		ValidFrom: drawInstant(t), Bias: drawFloat(t), BiasStandardUncertainty: drawFloat(t),
		ExpandedUncertainty: drawFloat(t), CoverageFactor: drawFloat(t), RelativeBiasStandardUncertainty: drawFloat(t),
		DriftStandardDeviation: drawFloat(t), DriftPer: drawDuration(t),
		Reference: drawText(t), CommonStandardUncertainty: drawFloat(t), Certificate: drawText(t),
		HasDue: drawFlag(t), Due: drawInstant(t),
	}
}

// TestUnknownFormsAreRefused: what this version can't hold is an error, never
// something else.
func TestUnknownFormsAreRefused(t *testing.T) {
	for _, c := range []struct {
		name string
		body []byte
	}{
		{"a kind of a later version", appendUint(nil, fieldKind, uint64(engine.KindStep))},
		{"no instrument", appendUint(nil, fieldKind, uint64(engine.KindInstrument)-1)},
		{"an instrument without a number", about(engine.KindInstrument, fieldDevice, appendText(nil, instrumentID, "dial_gauge_1"))},
		{"a number beyond 32 bits", about(engine.KindInstrument, fieldDevice, appendUint(nil, instrumentNumber, math.MaxUint32+1))},
		{"an instrument that is no message", about(engine.KindInstrument, fieldDevice, []byte{0xff})},
		{"no renewal", appendUint(nil, fieldKind, uint64(engine.KindRenewal)-1)},
		{"a renewal that is no message", about(engine.KindRenewal, fieldRenewal, []byte{0xff})},
		{"a prior of a later form", about(engine.KindRenewal, fieldRenewal,
			appendMessage(nil, renewalPrior, func(b []byte) []byte { return appendUint(b, priorForm, uint64(engine.PriorInterval)+1) }))},
		{"dynamics of a later form", about(engine.KindDeclaration, fieldDeclaration,
			appendMessage(nil, declarationDynamics, func(b []byte) []byte { return appendUint(b, dynamicsForm, uint64(engine.DynamicsMeanReverting)+1) }))},
		{"no step", appendUint(nil, fieldKind, uint64(engine.KindStep)-1)},
		{"a step that is no message", about(engine.KindStep, fieldStep, []byte{0xff})},
		{"an extent of a later form", appendUint(nil, fieldExtent, uint64(engine.ExtentBetween)+1)},
		{"samples beyond 32 bits", appendUint(nil, fieldSamples, math.MaxUint32+1)},
		{"a later scale", about(engine.KindDeclaration, fieldDeclaration, appendUint(nil, declarationScale, uint64(engine.ScaleLog)+1))},
		{"outliers that are no message", about(engine.KindDeclaration, fieldDeclaration, alwaysText(nil, declarationOutliers, "\xff"))},
		{"a model check that is no message", about(engine.KindDeclaration, fieldDeclaration, alwaysText(nil, declarationModelCheck, "\xff"))},
		{"a window beyond 16 bits", about(engine.KindDeclaration, fieldDeclaration,
			appendMessage(nil, declarationModelCheck, func(b []byte) []byte { return appendUint(b, checkWindow, math.MaxUint16+1) }))},
		{"a step detection that is no message", about(engine.KindDeclaration, fieldDeclaration, alwaysText(nil, declarationStepDetection, "\xff"))},
		{"a repeatability learned by a later form", about(engine.KindInstrument, fieldDevice, appendInstrument(nil, learnedBy(engine.RepeatabilityLearnedReference+1)))},
		{"a slope that is no message", about(engine.KindDeclaration, fieldDeclaration,
			appendMessage(nil, declarationDynamics, func(b []byte) []byte { return alwaysText(b, dynamicsSlope, "\xff") }))},
	} {
		var r engine.Record
		before := start(0)
		if err := before.decodeBody(c.body, &r); err == nil {
			t.Errorf("%s: decoded to %+v", c.name, r)
		}
	}
}

// about returns the body of a record whose kind is about one message.
func about(kind engine.Kind, field protowire.Number, message []byte) []byte {
	return alwaysText(appendUint(nil, fieldKind, uint64(kind)-1), field, string(message))
}

// TestFormatVersion2 fails when the bytes that version 2 adds change: then give
// them another version number and keep reading the old ones.
func TestFormatVersion2(t *testing.T) {
	records := ledgertest.FurtherRecords(0, 24)
	for i := range records {
		records[i].Position, records[i].CommitTime = engine.Position(i+1), 1_772_366_400_000_000_000
	}
	e := newEncoder()
	e.encode(records, [32]byte{1, 2, 3})
	var b strings.Builder
	for i := range e.chunks {
		b.WriteString("ledger " + hex.EncodeToString(e.key(i)) + "\n" + hex.Dump(e.value(i)))
	}
	b.WriteString("rows\n" + hex.Dump(appendRows(nil, ledgertest.OriginRows(1, 20))))
	q := engine.Quantity{ID: "slipway_winch.bearing_play", Number: 3, Declaration: *records[2].Declaration, Revision: 2,
		CreateTime: 1, UpdateTime: 2, Renewals: []engine.Renewal{*records[1].Renewal, *records[7].Renewal}}
	b.WriteString("quantity\n" + hex.Dump(appendQuantity(nil, &q)))
	golden(t, "format2.golden", b.String())
}

// TestRowsWithoutOriginAreOfVersion1: they have the bytes that they had, and an
// origin that stays costs nothing more.
func TestRowsWithoutOriginAreOfVersion1(t *testing.T) {
	rows := ledgertest.Rows(1, 128)
	plain := len(appendRows(nil, rows))
	for i := range rows {
		rows[i].Instrument = 7
	}
	if got := len(appendRows(nil, rows)); got != plain+1 {
		t.Errorf("%d bytes with one instrument; want one more than the %d without", got, plain)
	}
	for i := range rows {
		rows[i].Instrument = engine.InstrumentNumber(1 + i%2)
	}
	if got := len(appendRows(nil, rows)); got != plain+len(rows) {
		t.Errorf("%d bytes with two instruments by turns; want %d", got, plain+len(rows))
	}
}
