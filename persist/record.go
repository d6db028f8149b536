package persist

import (
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"math"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// Field numbers of a record's body. They are never given another meaning.
const (
	fieldKind         protowire.Number = 1
	fieldNumber       protowire.Number = 2
	fieldValue        protowire.Number = 3
	fieldTime         protowire.Number = 4
	fieldTimeAssigned protowire.Number = 5
	fieldReadingID    protowire.Number = 6
	fieldReceiveTime  protowire.Number = 7
	fieldPrincipal    protowire.Number = 8
	fieldRequestID    protowire.Number = 9
	fieldRevision     protowire.Number = 10
	fieldUncertainty  protowire.Number = 11
	fieldInstrument   protowire.Number = 12
	fieldUnit         protowire.Number = 13
	fieldReason       protowire.Number = 14
	fieldDetail       protowire.Number = 15
	fieldPutThrough   protowire.Number = 16
	fieldUnknownID    protowire.Number = 17
	fieldReasonWord   protowire.Number = 18
	fieldQuantity     protowire.Number = 19
	fieldDeclaration  protowire.Number = 20
	fieldOccasion     protowire.Number = 21
	fieldDevice       protowire.Number = 22
	fieldRenewal      protowire.Number = 23
	fieldExtent       protowire.Number = 24
	fieldUpper        protowire.Number = 25
	fieldSamples      protowire.Number = 26
	fieldStep         protowire.Number = 27
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

var errRecord = errors.New("the record can't be decoded")

// before is what the record before said, within one chunk: a field that says
// the same again is left out.
type before struct {
	time, receive engine.Instant
	number        engine.QuantityNumber
	revision      uint32
	principal     string
	requestID     string
	instrument    engine.InstrumentID
	unit          string
	occasion      string
}

// start returns what stands before the first record of a chunk.
func start(commit engine.Instant) before {
	return before{time: commit, receive: commit, revision: 1}
}

// appendRecord appends r framed by length and checksum to b.
func (c *before) appendRecord(b []byte, r *engine.Record) []byte {
	const room = 5 // one byte of length, four of checksum
	at := len(b)
	b = append(b, 0, 0, 0, 0, 0)
	b = c.appendBody(b, r)
	n := len(b) - at - room
	if more := protowire.SizeVarint(uint64(n)) - 1; more > 0 {
		b = append(b, make([]byte, more)...)
		copy(b[at+room+more:], b[at+room:at+room+n])
	}
	body := b[len(b)-n:]
	head := protowire.AppendVarint(b[:at], uint64(n))
	binary.LittleEndian.AppendUint32(head, crc32.Checksum(body, castagnoli))
	return b
}

func (c *before) appendBody(b []byte, r *engine.Record) []byte {
	b = appendUint(b, fieldKind, uint64(r.Kind)-1)
	if r.Number != c.number {
		c.number = r.Number
		b = alwaysUint(b, fieldNumber, uint64(r.Number))
	}
	if r.ReceiveTime != c.receive {
		b = alwaysUint(b, fieldReceiveTime, protowire.EncodeZigZag(int64(r.ReceiveTime-c.receive)))
		c.receive = r.ReceiveTime
	}
	b = appendChange(b, fieldPrincipal, r.Principal, &c.principal)
	b = appendChange(b, fieldRequestID, r.RequestID, &c.requestID)
	if r.Revision != c.revision {
		c.revision = r.Revision
		b = alwaysUint(b, fieldRevision, uint64(r.Revision))
	}
	switch r.Kind {
	case engine.KindReading, engine.KindRefusal:
		return c.appendReading(b, r)
	case engine.KindDeclaration:
		b = appendText(b, fieldQuantity, string(r.Quantity))
		if r.Declaration == nil {
			return b
		}
		b = appendTag(b, fieldDeclaration, protowire.BytesType)
		return protowire.AppendBytes(b, appendDeclaration(nil, r.Declaration))
	case engine.KindInstrument:
		b = appendTag(b, fieldDevice, protowire.BytesType)
		return protowire.AppendBytes(b, appendInstrument(nil, r.Instrument))
	case engine.KindRenewal:
		b = appendTag(b, fieldRenewal, protowire.BytesType)
		return protowire.AppendBytes(b, appendRenewal(nil, r.Renewal))
	case engine.KindStep:
		b = appendTag(b, fieldStep, protowire.BytesType)
		return protowire.AppendBytes(b, appendStep(nil, r.Step))
	}
	return appendText(b, fieldQuantity, string(r.Quantity))
}

// takeFrame splits the first framed record off b and checks its checksum.
func takeFrame(b []byte) (body, rest []byte, err error) {
	n, used := protowire.ConsumeVarint(b)
	if used < 0 || uint64(len(b)-used) < 4 || n > uint64(len(b)-used-4) {
		return nil, nil, errors.New("the record is longer than its chunk")
	}
	sum := binary.LittleEndian.Uint32(b[used:])
	body, rest = b[used+4:used+4+int(n)], b[used+4+int(n):]
	if crc32.Checksum(body, castagnoli) != sum {
		return nil, nil, errors.New("the record's checksum doesn't match")
	}
	return body, rest, nil
}

// decodeBody fills r, except for position and commit time.
func (c *before) decodeBody(body []byte, r *engine.Record) error {
	*r = engine.Record{Kind: engine.KindReading}
	m := message{rest: body}
	known := true
	for m.next() {
		known = c.decodeField(&m, r) && known
	}
	if m.bad || !known {
		return errRecord
	}
	return c.finish(r)
}

// finish takes what the record leaves out from the one before, and drops what
// its kind doesn't use.
func (c *before) finish(r *engine.Record) error {
	all := *r
	*r = engine.Record{
		Kind: all.Kind, Number: c.number, Revision: c.revision,
		ReceiveTime: c.receive, Principal: c.principal, RequestID: c.requestID,
	}
	switch r.Kind {
	case engine.KindReading, engine.KindRefusal:
		r.Reading, r.PutThrough, r.Reason, r.Detail = all.Reading, all.PutThrough, all.Reason, all.Detail
		r.Reading.Time, r.Reading.Instrument, r.Reading.Unit, r.Reading.Occasion = c.time, c.instrument, c.unit, c.occasion
		r.Reading.HasTime = !r.Reading.HasTime // held time_assigned so far
	case engine.KindDeclaration:
		r.Quantity, r.Declaration = all.Quantity, all.Declaration
	case engine.KindRetirement:
		r.Quantity = all.Quantity
	case engine.KindInstrument:
		r.Instrument = all.Instrument
		return whole(r.Instrument != nil && r.Instrument.Number != 0)
	case engine.KindRenewal:
		r.Renewal = all.Renewal
		return whole(r.Renewal != nil)
	case engine.KindStep:
		r.Step = all.Step
		return whole(r.Step != nil)
	default:
		return fmt.Errorf("%w: its kind %d is unknown to this version", errRecord, r.Kind)
	}
	return nil
}

// whole returns an error of a record without the message that its kind is about.
func whole(has bool) error {
	if !has {
		return fmt.Errorf("%w: it lacks what its kind is about", errRecord)
	}
	return nil
}

// decodeField returns false if the field has a value this version can't hold.
func (c *before) decodeField(m *message, r *engine.Record) bool {
	switch m.tag {
	case varint(fieldKind):
		if m.number >= math.MaxUint8 {
			return false
		}
		r.Kind = engine.Kind(m.number + 1)
	case varint(fieldNumber):
		c.number = engine.QuantityNumber(m.number)
		return m.number <= math.MaxUint32
	case varint(fieldReceiveTime):
		c.receive += engine.Instant(protowire.DecodeZigZag(m.number))
	case text(fieldPrincipal):
		c.principal = string(m.bytes)
	case text(fieldRequestID):
		c.requestID = string(m.bytes)
	case varint(fieldRevision):
		c.revision = uint32(m.number)
		return m.number <= math.MaxUint32
	case text(fieldQuantity):
		r.Quantity = engine.QuantityID(m.bytes)
	case text(fieldDeclaration):
		r.Declaration = new(engine.Declaration)
		return decodeDeclaration(m.bytes, r.Declaration) == nil
	case text(fieldDevice):
		r.Instrument = new(engine.Instrument)
		return decodeInstrument(m.bytes, r.Instrument)
	case text(fieldRenewal):
		r.Renewal = new(engine.Renewal)
		return decodeRenewal(m.bytes, r.Renewal)
	case text(fieldStep):
		r.Step = new(engine.StepEvent)
		return decodeStep(m.bytes, r.Step)
	default:
		return c.decodeReadingField(m, r)
	}
	return true
}
