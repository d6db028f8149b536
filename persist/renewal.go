package persist

import (
	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// Field numbers, as in quantity.go.
const (
	renewalRequestID    protowire.Number = 1
	renewalTime         protowire.Number = 2
	renewalReason       protowire.Number = 3
	renewalPrior        protowire.Number = 4
	renewalHasSlope     protowire.Number = 5
	renewalSlope        protowire.Number = 6
	renewalPosition     protowire.Number = 7
	renewalCreateTime   protowire.Number = 8
	renewalWithdrawn    protowire.Number = 9
	renewalWithdrawTime protowire.Number = 10
)

func appendRenewal(b []byte, r *engine.Renewal) []byte {
	b = appendText(b, renewalRequestID, r.RequestID)
	b = appendFixed(b, renewalTime, uint64(r.Time))
	b = appendText(b, renewalReason, r.Reason)
	b = appendMessage(b, renewalPrior, func(b []byte) []byte { return appendPrior(b, &r.Prior) })
	b = appendFlag(b, renewalHasSlope, r.HasSlope)
	b = appendMessage(b, renewalSlope, func(b []byte) []byte { return appendSlope(b, &r.Slope) })
	b = appendUint(b, renewalPosition, uint64(r.Position))
	b = appendFixed(b, renewalCreateTime, uint64(r.CreateTime))
	b = appendFlag(b, renewalWithdrawn, r.Withdrawn)
	return appendFixed(b, renewalWithdrawTime, uint64(r.WithdrawTime))
}

func decodeRenewal(body []byte, r *engine.Renewal) bool {
	m := message{rest: body}
	sound := true
	for m.next() {
		switch m.tag {
		case text(renewalRequestID):
			r.RequestID = string(m.bytes)
		case fixed(renewalTime):
			r.Time = engine.Instant(m.number)
		case text(renewalReason):
			r.Reason = string(m.bytes)
		case text(renewalPrior):
			sound = decodePrior(m.bytes, &r.Prior) && sound
		case varint(renewalHasSlope):
			r.HasSlope = m.number != 0
		case text(renewalSlope):
			sound = decodeSlope(m.bytes, &r.Slope) && sound
		case varint(renewalPosition):
			r.Position = engine.Position(m.number)
		case fixed(renewalCreateTime):
			r.CreateTime = engine.Instant(m.number)
		case varint(renewalWithdrawn):
			r.Withdrawn = m.number != 0
		case fixed(renewalWithdrawTime):
			r.WithdrawTime = engine.Instant(m.number)
		}
	}
	return sound && !m.bad
}
