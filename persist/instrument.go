package persist

import (
	"math"
	"time"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// Field numbers, as in quantity.go.
const (
	instrumentID          protowire.Number = 1
	instrumentNumber      protowire.Number = 2
	instrumentDeclaration protowire.Number = 3
	instrumentRevision    protowire.Number = 4
	instrumentCreateTime  protowire.Number = 5
	instrumentUpdateTime  protowire.Number = 6
	instrumentRetired     protowire.Number = 7
	instrumentRetireTime  protowire.Number = 8

	deviceUnit             protowire.Number = 1
	deviceDescription      protowire.Number = 2
	deviceSD               protowire.Number = 3
	deviceRelative         protowire.Number = 4
	deviceCorrelatedSD     protowire.Number = 5
	deviceCorrelationTime  protowire.Number = 6
	deviceBetweenOccasions protowire.Number = 7
	deviceResolution       protowire.Number = 8
	deviceHasLower         protowire.Number = 9
	deviceHasUpper         protowire.Number = 10
	deviceLower            protowire.Number = 11
	deviceUpper            protowire.Number = 12
	deviceCalibration      protowire.Number = 13 // repeated
	deviceLearned          protowire.Number = 14

	calibrationValidFrom      protowire.Number = 1
	calibrationBias           protowire.Number = 2
	calibrationBiasSD         protowire.Number = 3
	calibrationExpanded       protowire.Number = 4
	calibrationCoverageFactor protowire.Number = 5
	calibrationRelativeBiasSD protowire.Number = 6
	calibrationDriftSD        protowire.Number = 7
	calibrationDriftPer       protowire.Number = 8
	calibrationReference      protowire.Number = 9
	calibrationCommonSD       protowire.Number = 10
	calibrationCertificate    protowire.Number = 11
	calibrationHasDue         protowire.Number = 12
	calibrationDue            protowire.Number = 13
)

func appendInstrument(b []byte, i *engine.Instrument) []byte {
	b = appendText(b, instrumentID, string(i.ID))
	b = appendUint(b, instrumentNumber, uint64(i.Number))
	b = appendMessage(b, instrumentDeclaration, func(b []byte) []byte { return appendDevice(b, &i.Declaration) })
	b = appendUint(b, instrumentRevision, uint64(i.Revision))
	b = appendFixed(b, instrumentCreateTime, uint64(i.CreateTime))
	b = appendFixed(b, instrumentUpdateTime, uint64(i.UpdateTime))
	b = appendFlag(b, instrumentRetired, i.Retired)
	return appendFixed(b, instrumentRetireTime, uint64(i.RetireTime))
}

func appendDevice(b []byte, d *engine.InstrumentDeclaration) []byte {
	b = appendText(b, deviceUnit, d.Unit)
	b = appendText(b, deviceDescription, d.Description)
	b = appendDouble(b, deviceSD, d.Repeatability.StandardDeviation)
	b = appendDouble(b, deviceRelative, d.Repeatability.Relative)
	b = appendDouble(b, deviceCorrelatedSD, d.Repeatability.Correlated.StandardDeviation)
	b = appendFixed(b, deviceCorrelationTime, uint64(d.Repeatability.Correlated.Time))
	b = appendDouble(b, deviceBetweenOccasions, d.Repeatability.BetweenOccasions)
	b = appendDouble(b, deviceResolution, d.Resolution)
	b = appendFlag(b, deviceHasLower, d.MeasuringInterval.HasLower)
	b = appendFlag(b, deviceHasUpper, d.MeasuringInterval.HasUpper)
	b = appendDouble(b, deviceLower, d.MeasuringInterval.Lower)
	b = appendDouble(b, deviceUpper, d.MeasuringInterval.Upper)
	for i := range d.Calibrations {
		b = appendTag(b, deviceCalibration, protowire.BytesType) // also if it is empty: their number counts
		b = protowire.AppendBytes(b, appendCalibration(nil, &d.Calibrations[i]))
	}
	return appendMessage(b, deviceLearned, func(b []byte) []byte { return appendRepeatability(b, &d.Repeatability.Learned) })
}

func appendCalibration(b []byte, c *engine.Calibration) []byte {
	b = appendFixed(b, calibrationValidFrom, uint64(c.ValidFrom))
	b = appendDouble(b, calibrationBias, c.Bias)
	b = appendDouble(b, calibrationBiasSD, c.BiasStandardUncertainty)
	b = appendDouble(b, calibrationExpanded, c.ExpandedUncertainty)
	b = appendDouble(b, calibrationCoverageFactor, c.CoverageFactor)
	b = appendDouble(b, calibrationRelativeBiasSD, c.RelativeBiasStandardUncertainty)
	b = appendDouble(b, calibrationDriftSD, c.DriftStandardDeviation)
	b = appendFixed(b, calibrationDriftPer, uint64(c.DriftPer))
	b = appendText(b, calibrationReference, c.Reference)
	b = appendDouble(b, calibrationCommonSD, c.CommonStandardUncertainty)
	b = appendText(b, calibrationCertificate, c.Certificate)
	b = appendFlag(b, calibrationHasDue, c.HasDue)
	return appendFixed(b, calibrationDue, uint64(c.Due))
}

// The decoders below return false on input that is no message.

func decodeInstrument(body []byte, i *engine.Instrument) bool {
	m := message{rest: body}
	sound := true
	for m.next() {
		switch m.tag {
		case text(instrumentID):
			i.ID = engine.InstrumentID(m.bytes)
		case varint(instrumentNumber):
			i.Number = engine.InstrumentNumber(m.number)
			sound = m.number <= math.MaxUint32 && sound
		case text(instrumentDeclaration):
			i.Declaration = engine.InstrumentDeclaration{}
			sound = decodeDevice(m.bytes, &i.Declaration) && sound
		case varint(instrumentRevision):
			i.Revision = uint32(m.number)
			sound = m.number <= math.MaxUint32 && sound
		case fixed(instrumentCreateTime):
			i.CreateTime = engine.Instant(m.number)
		case fixed(instrumentUpdateTime):
			i.UpdateTime = engine.Instant(m.number)
		case varint(instrumentRetired):
			i.Retired = m.number != 0
		case fixed(instrumentRetireTime):
			i.RetireTime = engine.Instant(m.number)
		}
	}
	return sound && !m.bad
}

func decodeDevice(body []byte, d *engine.InstrumentDeclaration) bool {
	m := message{rest: body}
	sound := true
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case text(deviceUnit):
			d.Unit = string(m.bytes)
		case text(deviceDescription):
			d.Description = string(m.bytes)
		case fixed(deviceSD):
			d.Repeatability.StandardDeviation = v
		case fixed(deviceRelative):
			d.Repeatability.Relative = v
		case fixed(deviceCorrelatedSD):
			d.Repeatability.Correlated.StandardDeviation = v
		case fixed(deviceCorrelationTime):
			d.Repeatability.Correlated.Time = time.Duration(m.number)
		case fixed(deviceBetweenOccasions):
			d.Repeatability.BetweenOccasions = v
		case fixed(deviceResolution):
			d.Resolution = v
		case varint(deviceHasLower):
			d.MeasuringInterval.HasLower = m.number != 0
		case varint(deviceHasUpper):
			d.MeasuringInterval.HasUpper = m.number != 0
		case fixed(deviceLower):
			d.MeasuringInterval.Lower = v
		case fixed(deviceUpper):
			d.MeasuringInterval.Upper = v
		case text(deviceCalibration):
			var c engine.Calibration
			sound = decodeCalibration(m.bytes, &c) && sound
			d.Calibrations = append(d.Calibrations, c)
		case text(deviceLearned):
			sound = decodeRepeatability(m.bytes, &d.Repeatability.Learned) && sound
		}
	}
	return sound && !m.bad
}

func decodeCalibration(body []byte, c *engine.Calibration) bool {
	m := message{rest: body}
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case fixed(calibrationValidFrom):
			c.ValidFrom = engine.Instant(m.number)
		case fixed(calibrationBias):
			c.Bias = v
		case fixed(calibrationBiasSD):
			c.BiasStandardUncertainty = v
		case fixed(calibrationExpanded):
			c.ExpandedUncertainty = v
		case fixed(calibrationCoverageFactor):
			c.CoverageFactor = v
		case fixed(calibrationRelativeBiasSD):
			c.RelativeBiasStandardUncertainty = v
		case fixed(calibrationDriftSD):
			c.DriftStandardDeviation = v
		case fixed(calibrationDriftPer):
			c.DriftPer = time.Duration(m.number)
		case text(calibrationReference):
			c.Reference = string(m.bytes)
		case fixed(calibrationCommonSD):
			c.CommonStandardUncertainty = v
		case text(calibrationCertificate):
			c.Certificate = string(m.bytes)
		case varint(calibrationHasDue):
			c.HasDue = m.number != 0
		case fixed(calibrationDue):
			c.Due = engine.Instant(m.number)
		}
	}
	return !m.bad
}
