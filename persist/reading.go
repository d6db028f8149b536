package persist

import (
	"math"
	"slices"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

func (c *before) appendReading(b []byte, r *engine.Record) []byte {
	y := &r.Reading
	b = appendDouble(b, fieldValue, y.Value)
	if y.Time != c.time {
		b = alwaysUint(b, fieldTime, protowire.EncodeZigZag(int64(y.Time-c.time)))
		c.time = y.Time
	}
	b = appendFlag(b, fieldTimeAssigned, !y.HasTime)
	b = appendText(b, fieldReadingID, string(y.ID))
	if y.HasUncertainty {
		b = appendTag(b, fieldUncertainty, protowire.Fixed64Type)
		b = protowire.AppendFixed64(b, math.Float64bits(y.RandomStandardUncertainty))
	}
	b = appendChange(b, fieldInstrument, y.Instrument, &c.instrument)
	b = appendChange(b, fieldUnit, y.Unit, &c.unit)
	b = appendChange(b, fieldOccasion, y.Occasion, &c.occasion)
	b = appendUint(b, fieldExtent, uint64(y.Extent))
	b = appendDouble(b, fieldUpper, y.Upper)
	b = appendUint(b, fieldSamples, uint64(y.Samples))
	b = appendReason(b, r.Reason)
	b = appendText(b, fieldDetail, r.Detail)
	b = appendUint(b, fieldPutThrough, uint64(r.PutThrough))
	return appendText(b, fieldUnknownID, string(y.Quantity))
}

// appendReason writes a reason as its number in the engine's list, from 1, and
// as a word if it isn't one of readings.
func appendReason(b []byte, reason engine.Reason) []byte {
	if reason == "" {
		return b
	}
	if i := slices.Index(engine.ReadingReasons[:], reason); i >= 0 {
		return appendUint(b, fieldReason, uint64(i+1))
	}
	return appendText(b, fieldReasonWord, string(reason))
}

func (c *before) decodeReadingField(m *message, r *engine.Record) bool {
	y := &r.Reading
	switch m.tag {
	case fixed(fieldValue):
		y.Value = math.Float64frombits(m.number)
	case varint(fieldTime):
		c.time += engine.Instant(protowire.DecodeZigZag(m.number))
	case varint(fieldTimeAssigned):
		y.HasTime = m.number != 0
	case text(fieldReadingID):
		y.ID = engine.ReadingID(m.bytes)
	case fixed(fieldUncertainty):
		y.HasUncertainty, y.RandomStandardUncertainty = true, math.Float64frombits(m.number)
	case text(fieldInstrument):
		c.instrument = engine.InstrumentID(m.bytes)
	case text(fieldUnit):
		c.unit = string(m.bytes)
	case text(fieldOccasion):
		c.occasion = string(m.bytes)
	case varint(fieldExtent):
		y.Extent = engine.Extent(m.number)
		return m.number <= uint64(engine.ExtentBetween)
	case fixed(fieldUpper):
		y.Upper = math.Float64frombits(m.number)
	case varint(fieldSamples):
		y.Samples = uint32(m.number)
		return m.number <= math.MaxUint32
	case varint(fieldReason):
		if m.number == 0 || m.number > uint64(len(engine.ReadingReasons)) {
			return false
		}
		r.Reason = engine.ReadingReasons[m.number-1]
	case text(fieldReasonWord):
		r.Reason = engine.Reason(m.bytes)
	case text(fieldDetail):
		r.Detail = string(m.bytes)
	case varint(fieldPutThrough):
		r.PutThrough = engine.Position(m.number)
	case text(fieldUnknownID):
		y.Quantity = engine.QuantityID(m.bytes)
	}
	return true
}
