package ledgertest

import (
	"fmt"

	"leadline.example/engine"
)

// WiderRecords returns n records of what came with censored readings: readings of
// every extent and means of several, declarations of outliers, a scale and checks,
// instruments whose repeatability is learned, and steps, with every field used;
// numbered from seed as those of Records are.
func WiderRecords(seed, n int) []engine.Record {
	records := make([]engine.Record, n)
	for i := range records {
		records[i] = wider(seed + i)
	}
	return records
}

func wider(i int) engine.Record {
	r := engine.Record{
		ReceiveTime: noon + engine.Instant(i/7)*1e9, Principal: "ice-plant-gateway", RequestID: fmt.Sprintf("request-%d", i/7),
		Number: engine.QuantityNumber(i%2 + 1), Revision: uint32(i%3 + 1), Kind: engine.KindReading,
	}
	switch i % 6 {
	case 2:
		r.Kind, r.Quantity, r.Declaration = engine.KindDeclaration, "ammonia_compressor.leak_rate", leaking(i)
		return r
	case 3:
		r.Kind, r.Number, r.Instrument = engine.KindInstrument, 0, instrument(i, engine.InstrumentNumber(i/6%4+1))
		r.Instrument.Declaration.Repeatability = engine.InstrumentRepeatability{
			Learned: engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.02, Worth: 4, Floor: 0.003},
		}
		return r
	case 4:
		r.Kind, r.Step = engine.KindStep, step(i)
		return r
	case 5:
		r.Kind, r.Reason, r.Detail = engine.KindRefusal, engine.ReadingIDConflict, "another value has this ID"
	}
	r.Reading = engine.Reading{
		Value: 0.05 + float64(i)*0.001, Extent: engine.Extent(i % 4), Samples: []uint32{0, 60, 1}[i/6%3],
		HasTime: true, Time: noon + engine.Instant(i)*60e9, ID: engine.ReadingID(fmt.Sprintf("sniffer/%06d", i)),
	}
	if r.Reading.Extent == engine.ExtentBetween {
		r.Reading.Upper = r.Reading.Value + 0.05
	}
	return r
}

func leaking(i int) *engine.Declaration {
	d := declaration(i)
	d.Unit, d.Description = "mg/s", fmt.Sprintf("ammonia that the compressor's seal lets out, text %d", i)
	d.Repeatability.Floor = 0.001
	d.Outliers = engine.Outliers{Probability: 0.02, Inflation: 10}
	d.Scale = engine.ScaleLog
	d.ModelCheck = engine.ModelCheck{Window: 200 + i, ObjectionsPerYear: 0.01}
	d.StepDetection = engine.StepDetection{FalseAlarmInterval: 1e5, Widen: 0.3}
	return d
}

// step returns steps up and down by turns, the latter without a widening.
func step(i int) *engine.StepEvent {
	s := &engine.StepEvent{Time: noon + engine.Instant(i)*60e9, Since: noon + engine.Instant(i-4)*60e9}
	if i%12 > 6 {
		s.Up, s.Widen = true, 0.3
	}
	return s
}

// ExtentRows returns n rows as OriginRows does, some of them censored or means of
// several: runs below one limit, now and then one above or between, plain ones.
func ExtentRows(from engine.Position, n int) []engine.Row {
	rows := OriginRows(from, n)
	for i := range rows {
		r := &rows[i]
		p := uint64(r.Position)
		switch {
		case p%20 < 7:
			r.Extent, r.Value = engine.ExtentBelow, 8
		case p%20 == 11:
			r.Extent = engine.ExtentAbove
		case p%20 > 15:
			r.Extent, r.Upper = engine.ExtentBetween, 9+float64(p%3)*0.01
		}
		r.Samples = []uint32{0, 0, 60, 1}[p/10%4]
	}
	return rows
}
