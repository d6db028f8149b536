package persist

import (
	"math"
	"time"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// Field numbers, as in quantity.go.
const (
	dynamicsForm     protowire.Number = 1
	dynamicsSD       protowire.Number = 2
	dynamicsPer      protowire.Number = 3
	dynamicsSlope    protowire.Number = 4
	dynamicsWander   protowire.Number = 5
	dynamicsMean     protowire.Number = 6
	dynamicsHalfLife protowire.Number = 7

	slopeMean protowire.Number = 1
	slopeSD   protowire.Number = 2
	slopePer  protowire.Number = 3

	wanderSD  protowire.Number = 1
	wanderPer protowire.Number = 2
)

func appendDynamics(b []byte, d *engine.Dynamics) []byte {
	b = appendUint(b, dynamicsForm, uint64(d.Form))
	b = appendDouble(b, dynamicsSD, d.StandardDeviation)
	b = appendFixed(b, dynamicsPer, uint64(d.Per))
	b = appendMessage(b, dynamicsSlope, func(b []byte) []byte { return appendSlope(b, &d.Slope) })
	b = appendMessage(b, dynamicsWander, func(b []byte) []byte {
		b = appendDouble(b, wanderSD, d.Wander.StandardDeviation)
		return appendFixed(b, wanderPer, uint64(d.Wander.Per))
	})
	b = appendDouble(b, dynamicsMean, d.Mean)
	return appendFixed(b, dynamicsHalfLife, uint64(d.HalfLife))
}

func appendSlope(b []byte, s *engine.Slope) []byte {
	b = appendDouble(b, slopeMean, s.Mean)
	b = appendDouble(b, slopeSD, s.StandardDeviation)
	return appendFixed(b, slopePer, uint64(s.Per))
}

func decodeDynamics(body []byte, d *engine.Dynamics) bool {
	m := message{rest: body}
	sound := true
	for m.next() {
		switch m.tag {
		case varint(dynamicsForm):
			d.Form = engine.DynamicsForm(m.number)
			sound = m.number <= uint64(engine.DynamicsMeanReverting) && sound
		case fixed(dynamicsSD):
			d.StandardDeviation = math.Float64frombits(m.number)
		case fixed(dynamicsPer):
			d.Per = time.Duration(m.number)
		case text(dynamicsSlope):
			sound = decodeSlope(m.bytes, &d.Slope) && sound
		case text(dynamicsWander):
			sound = decodeWander(m.bytes, &d.Wander) && sound
		case fixed(dynamicsMean):
			d.Mean = math.Float64frombits(m.number)
		case fixed(dynamicsHalfLife):
			d.HalfLife = time.Duration(m.number)
		}
	}
	return sound && !m.bad
}

func decodeSlope(body []byte, s *engine.Slope) bool {
	m := message{rest: body}
	for m.next() {
		switch m.tag {
		case fixed(slopeMean):
			s.Mean = math.Float64frombits(m.number)
		case fixed(slopeSD):
			s.StandardDeviation = math.Float64frombits(m.number)
		case fixed(slopePer):
			s.Per = time.Duration(m.number)
		}
	}
	return !m.bad
}

func decodeWander(body []byte, w *engine.Wander) bool {
	m := message{rest: body}
	for m.next() {
		switch m.tag {
		case fixed(wanderSD):
			w.StandardDeviation = math.Float64frombits(m.number)
		case fixed(wanderPer):
			w.Per = time.Duration(m.number)
		}
	}
	return !m.bad
}
