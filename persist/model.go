package persist

import (
	"math"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// Field numbers, as in quantity.go.
const (
	outliersProbability protowire.Number = 1
	outliersInflation   protowire.Number = 2

	checkWindow     protowire.Number = 1
	checkObjections protowire.Number = 2

	detectionInterval protowire.Number = 1
	detectionWiden    protowire.Number = 2

	stepTime  protowire.Number = 1
	stepSince protowire.Number = 2
	stepUp    protowire.Number = 3
	stepWiden protowire.Number = 4
)

// appendModel appends the fields of a declaration that say more of the model than
// prior, repeatability and dynamics do.
func appendModel(b []byte, d *engine.Declaration) []byte {
	b = appendMessage(b, declarationOutliers, func(b []byte) []byte {
		b = appendDouble(b, outliersProbability, d.Outliers.Probability)
		return appendDouble(b, outliersInflation, d.Outliers.Inflation)
	})
	b = appendUint(b, declarationScale, uint64(d.Scale))
	b = appendMessage(b, declarationModelCheck, func(b []byte) []byte {
		b = appendUint(b, checkWindow, uint64(d.ModelCheck.Window))
		return appendDouble(b, checkObjections, d.ModelCheck.ObjectionsPerYear)
	})
	return appendMessage(b, declarationStepDetection, func(b []byte) []byte {
		b = appendDouble(b, detectionInterval, d.StepDetection.FalseAlarmInterval)
		return appendDouble(b, detectionWiden, d.StepDetection.Widen)
	})
}

// decodeModel takes a field that appendModel wrote, and returns false if it is one
// but holds what this version can't.
func decodeModel(m *message, d *engine.Declaration) bool {
	switch m.tag {
	case text(declarationOutliers):
		return decodeOutliers(m.bytes, &d.Outliers)
	case varint(declarationScale):
		d.Scale = engine.Scale(m.number)
		return m.number <= uint64(engine.ScaleLog)
	case text(declarationModelCheck):
		return decodeModelCheck(m.bytes, &d.ModelCheck)
	case text(declarationStepDetection):
		return decodeStepDetection(m.bytes, &d.StepDetection)
	}
	return true
}

func decodeOutliers(body []byte, o *engine.Outliers) bool {
	m := message{rest: body}
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case fixed(outliersProbability):
			o.Probability = v
		case fixed(outliersInflation):
			o.Inflation = v
		}
	}
	return !m.bad
}

func decodeModelCheck(body []byte, c *engine.ModelCheck) bool {
	m := message{rest: body}
	for m.next() {
		switch m.tag {
		case varint(checkWindow):
			m.bad = m.bad || m.number > math.MaxUint16
			c.Window = int(m.number)
		case fixed(checkObjections):
			c.ObjectionsPerYear = math.Float64frombits(m.number)
		}
	}
	return !m.bad
}

func decodeStepDetection(body []byte, s *engine.StepDetection) bool {
	m := message{rest: body}
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case fixed(detectionInterval):
			s.FalseAlarmInterval = v
		case fixed(detectionWiden):
			s.Widen = v
		}
	}
	return !m.bad
}

func appendStep(b []byte, s *engine.StepEvent) []byte {
	b = appendFixed(b, stepTime, uint64(s.Time))
	b = appendFixed(b, stepSince, uint64(s.Since))
	b = appendFlag(b, stepUp, s.Up)
	return appendDouble(b, stepWiden, s.Widen)
}

func decodeStep(body []byte, s *engine.StepEvent) bool {
	m := message{rest: body}
	for m.next() {
		switch m.tag {
		case fixed(stepTime):
			s.Time = engine.Instant(m.number)
		case fixed(stepSince):
			s.Since = engine.Instant(m.number)
		case varint(stepUp):
			s.Up = m.number != 0
		case fixed(stepWiden):
			s.Widen = math.Float64frombits(m.number)
		}
	}
	return !m.bad
}
