package ledgertest

import (
	"fmt"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
)

// FurtherRecords returns n records of what came with instruments: instruments,
// renewals, readings of occasions, and declarations of moving quantities, with
// every field used; numbered from seed as those of Records are.
func FurtherRecords(seed, n int) []engine.Record {
	records := make([]engine.Record, n)
	for i := range records {
		records[i] = further(seed + i)
	}
	return records
}

func further(i int) engine.Record {
	r := engine.Record{
		ReceiveTime: noon + engine.Instant(i/7)*1e9, Principal: "ice-plant-gateway", RequestID: fmt.Sprintf("request-%d", i/7),
		Number: engine.QuantityNumber(i%3 + 1), Revision: uint32(i%2 + 1),
	}
	switch i % 6 {
	case 0:
		r.Kind, r.Number, r.Instrument = engine.KindInstrument, 0, instrument(i, engine.InstrumentNumber(i/6%4+1))
	case 1:
		r.Kind, r.Renewal = engine.KindRenewal, renewal(i)
	case 2:
		r.Kind, r.Quantity, r.Declaration = engine.KindDeclaration, "slipway_winch.bearing_play", moving(i)
	default:
		r.Kind = engine.KindReading
		r.Reading = engine.Reading{
			Value: 0.2 + float64(i)*0.001, HasTime: true, Time: noon + engine.Instant(i)*60e9, ID: engine.ReadingID(fmt.Sprintf("winch/%06d", i)),
			Instrument: engine.InstrumentID(fmt.Sprintf("dial_gauge_%d", i%2)), Occasion: []string{"", "visit-7", "visit-8"}[i/4%3],
		}
	}
	return r
}

func instrument(i int, n engine.InstrumentNumber) *engine.Instrument {
	d := engine.InstrumentDeclaration{
		Unit: "mm", Description: fmt.Sprintf("dial gauge of the slipway winch, text %d", i),
		Repeatability: engine.InstrumentRepeatability{
			StandardDeviation: 0.01, Relative: 0.002, BetweenOccasions: 0.004,
			Correlated: engine.Correlated{StandardDeviation: 0.006, Time: 90 * time.Second},
		},
		Resolution:        0.01,
		MeasuringInterval: engine.MeasuringInterval{HasLower: true, HasUpper: true, Lower: -1, Upper: 10},
		Calibrations: []engine.Calibration{
			{ValidFrom: noon - 365*86400e9, Bias: -0.003, BiasStandardUncertainty: 0.005},
			{
				ValidFrom: noon + engine.Instant(i), Bias: 0.002, ExpandedUncertainty: 0.008, CoverageFactor: 2,
				RelativeBiasStandardUncertainty: 0.001, DriftStandardDeviation: 0.002, DriftPer: 8760 * time.Hour,
				Reference: "gauge_blocks_3", CommonStandardUncertainty: 0.001, Certificate: "C-118",
				HasDue: true, Due: noon + 365*86400e9,
			},
		},
	}
	return &engine.Instrument{
		ID: engine.InstrumentID(fmt.Sprintf("dial_gauge_%d", n)), Number: n, Declaration: d, Revision: uint32(i + 1),
		CreateTime: noon, UpdateTime: noon + engine.Instant(i), Retired: i%4 == 0, RetireTime: engine.Instant(i%4) * noon,
	}
}

func renewal(i int) *engine.Renewal {
	r := &engine.Renewal{
		RequestID: fmt.Sprintf("renewal-%d", i/12), Time: noon + engine.Instant(i)*1e9, Reason: "new bearing fitted",
		Prior:    engine.Prior{Form: engine.PriorNormal, Mean: 0.05, StandardDeviation: 0.01},
		HasSlope: true, Slope: engine.Slope{Mean: 0.001, StandardDeviation: 0.0005, Per: 24 * time.Hour}, CreateTime: noon,
	}
	if i%12 > 6 {
		r.Position, r.Withdrawn, r.WithdrawTime = engine.Position(i), true, noon+1
	}
	return r
}

// moving returns declarations of a wearing bearing and of a store room by turns.
func moving(i int) *engine.Declaration {
	d := declaration(i)
	d.BreachHorizon = 30 * 24 * time.Hour
	d.Dynamics = engine.Dynamics{
		Form: engine.DynamicsLinearTrend, StandardDeviation: 0.001, Per: 24 * time.Hour,
		Slope:  engine.Slope{Mean: 0.001, StandardDeviation: 0.0005, Per: 24 * time.Hour},
		Wander: engine.Wander{StandardDeviation: 0.0001, Per: 720 * time.Hour},
	}
	if i%12 > 6 {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsMeanReverting, Mean: -18, StandardDeviation: 0.4, HalfLife: 6 * time.Hour}
	}
	return d
}

// OriginRows returns n rows as Rows does, of instruments and occasions.
func OriginRows(from engine.Position, n int) []engine.Row {
	rows := Rows(from, n)
	for i := range rows {
		p := uint64(rows[i].Position)
		rows[i].Instrument = engine.InstrumentNumber(p / 3 % 4)
		if p%10 > 3 {
			rows[i].Occasion = 0x9D1C_03B5_77E4_2A60 + p/5
		}
	}
	return rows
}

// Instruments reads the latest record of each instrument.
func Instruments(t *testing.T, l engine.Ledger) (records []engine.Record) {
	t.Helper()
	if err := l.Instruments(func(r *engine.Record) error {
		records = append(records, *r)
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return records
}

// LatestOf returns, by number, the latest record of each instrument among
// records. It is found by looking from the end, for each number in turn.
func LatestOf(records []engine.Record) (latest []engine.Record) {
	for n := engine.InstrumentNumber(1); ; n++ {
		found := false
		for _, r := range slices.Backward(records) {
			if found = r.Instrument != nil && r.Instrument.Number == n; found {
				latest = append(latest, r)
				break
			}
		}
		if !found {
			return latest
		}
	}
}

// testInstruments declares instruments in one group, in several, and twice in
// one, and others long after.
func testInstruments(t *testing.T, open Store) {
	l := open(t)
	var written []engine.Record
	for i, g := range []*engine.Group{
		{Records: Records(0, 20)},
		{Records: FurtherRecords(0, 7)}, // instruments 1 and 2
		{Records: Records(20, 500)},
		{Records: FurtherRecords(7, 60)}, // 3, 4, and all again
		{},
		{Records: FurtherRecords(66, 1)}, // one again
		{Records: Records(520, 3)},
	} {
		written = append(written, appendAll(t, l, g)...)
		for range 2 {
			want(t, fmt.Sprintf("instruments after group %d", i+1), LatestOf(written), Instruments(t, l))
			l.Close()
			l = open(t)
		}
	}
	want(t, "records", written, Replayed(t, l, 1))
	if n := len(LatestOf(written)); n != 4 {
		t.Fatalf("%d instruments were written; want 4", n)
	}
}

// testUnfit: what a kind is about must be there; else nothing is written.
func testUnfit(t *testing.T, open Store) {
	for _, r := range []engine.Record{
		{Kind: engine.KindInstrument},
		{Kind: engine.KindInstrument, Instrument: &engine.Instrument{ID: "dial_gauge_1"}},
		{Kind: engine.KindRenewal, Number: 1},
		{Kind: engine.KindStep, Number: 1},
		{Kind: engine.KindStep + 1},
		{Kind: engine.KindReading, Number: 1, Reading: engine.Reading{Extent: engine.ExtentBetween + 1}},
		{},
	} {
		l := open(t)
		if err := l.Append(&engine.Group{Records: []engine.Record{FurtherRecords(0, 1)[0], r}}); err == nil {
			t.Fatalf("%+v was written", r)
		}
		l.Close()
		l = open(t)
		want(t, "records", nil, Replayed(t, l, 1))
		want(t, "instruments", nil, Instruments(t, l))
		l.Close()
	}
}
