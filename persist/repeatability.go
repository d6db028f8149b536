package persist

import (
	"math"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// Field numbers, as in quantity.go.
const (
	repeatabilityForm  protowire.Number = 1
	repeatabilitySD    protowire.Number = 2
	repeatabilityGuess protowire.Number = 3
	repeatabilityWorth protowire.Number = 4
	repeatabilityFloor protowire.Number = 5
)

func appendRepeatability(b []byte, r *engine.Repeatability) []byte {
	b = appendUint(b, repeatabilityForm, uint64(r.Form))
	b = appendDouble(b, repeatabilitySD, r.StandardDeviation)
	b = appendDouble(b, repeatabilityGuess, r.Guess)
	b = appendDouble(b, repeatabilityWorth, r.Worth)
	return appendDouble(b, repeatabilityFloor, r.Floor)
}

func decodeRepeatability(body []byte, r *engine.Repeatability) bool {
	m := message{rest: body}
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case varint(repeatabilityForm):
			r.Form = engine.RepeatabilityForm(m.number)
			m.bad = m.bad || m.number > uint64(engine.RepeatabilityLearnedReference)
		case fixed(repeatabilitySD):
			r.StandardDeviation = v
		case fixed(repeatabilityGuess):
			r.Guess = v
		case fixed(repeatabilityWorth):
			r.Worth = v
		case fixed(repeatabilityFloor):
			r.Floor = v
		}
	}
	return !m.bad
}
