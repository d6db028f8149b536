package persist

import (
	"errors"
	"math"
	"time"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
	"leadline.example/engine/decide"
)

// Field numbers of the messages below; never given another meaning. Numbers
// that are zero and texts that are empty are left out.
const (
	quantityID          protowire.Number = 1
	quantityNumber      protowire.Number = 2
	quantityDeclaration protowire.Number = 3
	quantityRevision    protowire.Number = 4
	quantityCreateTime  protowire.Number = 5
	quantityUpdateTime  protowire.Number = 6
	quantityRetired     protowire.Number = 7
	quantityRetireTime  protowire.Number = 8
	quantityRenewal     protowire.Number = 9 // repeated

	declarationUnit          protowire.Number = 1
	declarationDescription   protowire.Number = 2
	declarationPrior         protowire.Number = 3
	declarationRepeatability protowire.Number = 4
	declarationDynamics      protowire.Number = 5
	declarationTolerance     protowire.Number = 6
	declarationRule          protowire.Number = 7
	declarationHorizon       protowire.Number = 8
	declarationOutliers      protowire.Number = 9
	declarationScale         protowire.Number = 10
	declarationModelCheck    protowire.Number = 11
	declarationStepDetection protowire.Number = 12

	priorForm        protowire.Number = 1
	priorMean        protowire.Number = 2
	priorSD          protowire.Number = 3
	priorLow         protowire.Number = 4
	priorHigh        protowire.Number = 5
	priorProbability protowire.Number = 6
	priorHasTime     protowire.Number = 7
	priorTime        protowire.Number = 8

	toleranceHasLower protowire.Number = 1
	toleranceHasUpper protowire.Number = 2
	toleranceLower    protowire.Number = 3
	toleranceUpper    protowire.Number = 4

	ruleConform protowire.Number = 1
	ruleBreach  protowire.Number = 2
)

var errDeclaration = errors.New("the declaration can't be decoded")

func appendQuantity(b []byte, q *engine.Quantity) []byte {
	b = appendText(b, quantityID, string(q.ID))
	b = appendUint(b, quantityNumber, uint64(q.Number))
	b = appendMessage(b, quantityDeclaration, func(b []byte) []byte { return appendDeclaration(b, &q.Declaration) })
	b = appendUint(b, quantityRevision, uint64(q.Revision))
	b = appendFixed(b, quantityCreateTime, uint64(q.CreateTime))
	b = appendFixed(b, quantityUpdateTime, uint64(q.UpdateTime))
	b = appendFlag(b, quantityRetired, q.Retired)
	b = appendFixed(b, quantityRetireTime, uint64(q.RetireTime))
	for i := range q.Renewals {
		b = appendTag(b, quantityRenewal, protowire.BytesType)
		b = protowire.AppendBytes(b, appendRenewal(nil, &q.Renewals[i]))
	}
	return b
}

func decodeQuantity(body []byte, q *engine.Quantity) error {
	*q = engine.Quantity{}
	m := message{rest: body}
	for m.next() {
		switch m.tag {
		case text(quantityID):
			q.ID = engine.QuantityID(m.bytes)
		case varint(quantityNumber):
			q.Number = engine.QuantityNumber(m.number)
			m.bad = m.bad || m.number > math.MaxUint32
		case text(quantityDeclaration):
			m.bad = decodeDeclaration(m.bytes, &q.Declaration) != nil || m.bad
		case varint(quantityRevision):
			q.Revision = uint32(m.number)
			m.bad = m.bad || m.number > math.MaxUint32
		case fixed(quantityCreateTime):
			q.CreateTime = engine.Instant(m.number)
		case fixed(quantityUpdateTime):
			q.UpdateTime = engine.Instant(m.number)
		case varint(quantityRetired):
			q.Retired = m.number != 0
		case fixed(quantityRetireTime):
			q.RetireTime = engine.Instant(m.number)
		case text(quantityRenewal):
			var r engine.Renewal
			m.bad = !decodeRenewal(m.bytes, &r) || m.bad
			q.Renewals = append(q.Renewals, r)
		}
	}
	if m.bad {
		return errors.New("the quantity can't be decoded")
	}
	return nil
}

func appendDeclaration(b []byte, d *engine.Declaration) []byte {
	b = appendText(b, declarationUnit, d.Unit)
	b = appendText(b, declarationDescription, d.Description)
	b = appendMessage(b, declarationPrior, func(b []byte) []byte { return appendPrior(b, &d.Prior) })
	b = appendMessage(b, declarationRepeatability, func(b []byte) []byte { return appendRepeatability(b, &d.Repeatability) })
	b = appendMessage(b, declarationDynamics, func(b []byte) []byte { return appendDynamics(b, &d.Dynamics) })
	b = appendMessage(b, declarationTolerance, func(b []byte) []byte {
		b = appendFlag(b, toleranceHasLower, d.Tolerance.HasLower)
		b = appendFlag(b, toleranceHasUpper, d.Tolerance.HasUpper)
		b = appendDouble(b, toleranceLower, d.Tolerance.Lower)
		return appendDouble(b, toleranceUpper, d.Tolerance.Upper)
	})
	b = appendMessage(b, declarationRule, func(b []byte) []byte {
		b = appendDouble(b, ruleConform, d.Rule.ConformProbability)
		return appendDouble(b, ruleBreach, d.Rule.BreachProbability)
	})
	b = appendFixed(b, declarationHorizon, uint64(d.BreachHorizon))
	return appendModel(b, d)
}

func appendPrior(b []byte, p *engine.Prior) []byte {
	b = appendUint(b, priorForm, uint64(p.Form))
	b = appendDouble(b, priorMean, p.Mean)
	b = appendDouble(b, priorSD, p.StandardDeviation)
	b = appendDouble(b, priorLow, p.Low)
	b = appendDouble(b, priorHigh, p.High)
	b = appendDouble(b, priorProbability, p.Probability)
	b = appendFlag(b, priorHasTime, p.HasTime)
	return appendFixed(b, priorTime, uint64(p.Time))
}

func decodeDeclaration(body []byte, d *engine.Declaration) error {
	*d = engine.Declaration{}
	m := message{rest: body}
	sound := true
	for m.next() {
		switch m.tag {
		case text(declarationUnit):
			d.Unit = string(m.bytes)
		case text(declarationDescription):
			d.Description = string(m.bytes)
		case text(declarationPrior):
			sound = decodePrior(m.bytes, &d.Prior) && sound
		case text(declarationRepeatability):
			sound = decodeRepeatability(m.bytes, &d.Repeatability) && sound
		case text(declarationDynamics):
			sound = decodeDynamics(m.bytes, &d.Dynamics) && sound
		case text(declarationTolerance):
			sound = decodeTolerance(m.bytes, &d.Tolerance) && sound
		case text(declarationRule):
			sound = decodeRule(m.bytes, &d.Rule) && sound
		case fixed(declarationHorizon):
			d.BreachHorizon = time.Duration(m.number)
		default:
			sound = decodeModel(&m, d) && sound
		}
	}
	if m.bad || !sound {
		return errDeclaration
	}
	return nil
}

// The decoders below return false on input that is no message, or of a form
// that this version doesn't know.

func decodePrior(body []byte, p *engine.Prior) bool {
	m := message{rest: body}
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case varint(priorForm):
			p.Form = engine.PriorForm(m.number)
			m.bad = m.bad || m.number > uint64(engine.PriorInterval)
		case fixed(priorMean):
			p.Mean = v
		case fixed(priorSD):
			p.StandardDeviation = v
		case fixed(priorLow):
			p.Low = v
		case fixed(priorHigh):
			p.High = v
		case fixed(priorProbability):
			p.Probability = v
		case varint(priorHasTime):
			p.HasTime = m.number != 0
		case fixed(priorTime):
			p.Time = engine.Instant(m.number)
		}
	}
	return !m.bad
}

func decodeTolerance(body []byte, t *engine.Tolerance) bool {
	m := message{rest: body}
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case varint(toleranceHasLower):
			t.HasLower = m.number != 0
		case varint(toleranceHasUpper):
			t.HasUpper = m.number != 0
		case fixed(toleranceLower):
			t.Lower = v
		case fixed(toleranceUpper):
			t.Upper = v
		}
	}
	return !m.bad
}

func decodeRule(body []byte, r *decide.Rule) bool {
	m := message{rest: body}
	for m.next() {
		switch v := math.Float64frombits(m.number); m.tag {
		case fixed(ruleConform):
			r.ConformProbability = v
		case fixed(ruleBreach):
			r.BreachProbability = v
		}
	}
	return !m.bad
}
