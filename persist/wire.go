package persist

import (
	"math"

	"google.golang.org/protobuf/encoding/protowire"
)

// appendTag appends a field's tag. Nearly all are one byte, and then this is
// twice as fast as protowire.AppendTag.
func appendTag(b []byte, field protowire.Number, wire protowire.Type) []byte {
	if field < 16 {
		return append(b, byte(field)<<3|byte(wire))
	}
	return protowire.AppendTag(b, field, wire)
}

// alwaysUint appends a varint field even if it is 0.
func alwaysUint(b []byte, field protowire.Number, v uint64) []byte {
	b = appendTag(b, field, protowire.VarintType)
	return protowire.AppendVarint(b, v)
}

func appendUint(b []byte, field protowire.Number, v uint64) []byte {
	if v == 0 {
		return b
	}
	return alwaysUint(b, field, v)
}

func appendFlag(b []byte, field protowire.Number, v bool) []byte {
	if !v {
		return b
	}
	return alwaysUint(b, field, 1)
}

// appendDouble appends a double by its bits, so that -0 is kept.
func appendDouble(b []byte, field protowire.Number, v float64) []byte {
	return appendFixed(b, field, math.Float64bits(v))
}

func appendFixed(b []byte, field protowire.Number, v uint64) []byte {
	if v == 0 {
		return b
	}
	b = appendTag(b, field, protowire.Fixed64Type)
	return protowire.AppendFixed64(b, v)
}

func alwaysText(b []byte, field protowire.Number, v string) []byte {
	b = appendTag(b, field, protowire.BytesType)
	return protowire.AppendString(b, v)
}

func appendText(b []byte, field protowire.Number, v string) []byte {
	if v == "" {
		return b
	}
	return alwaysText(b, field, v)
}

// appendChange appends v, also if it is empty, where it isn't what was said
// before.
func appendChange[S ~string](b []byte, field protowire.Number, v S, before *S) []byte {
	if v == *before {
		return b
	}
	*before = v
	return alwaysText(b, field, string(v))
}

// appendMessage appends what fn appends as one field; nothing if that is empty.
func appendMessage(b []byte, field protowire.Number, fn func([]byte) []byte) []byte {
	body := fn(nil)
	if len(body) == 0 {
		return b
	}
	b = appendTag(b, field, protowire.BytesType)
	return protowire.AppendBytes(b, body)
}

// message walks the fields of an encoded protobuf message.
type message struct {
	rest   []byte
	tag    uint64 // of the field at hand: number and wire type
	number uint64 // its value if it is a varint or fixed64
	bytes  []byte // its value if it is length-delimited; part of the input
	bad    bool   // the input is no message
}

func varint(field protowire.Number) uint64 { return protowire.EncodeTag(field, protowire.VarintType) }
func fixed(field protowire.Number) uint64  { return protowire.EncodeTag(field, protowire.Fixed64Type) }
func text(field protowire.Number) uint64   { return protowire.EncodeTag(field, protowire.BytesType) }

// next moves to the next field; false at the end and on bad input. A caller
// ignores tags it doesn't know: that is how fields can be added.
func (m *message) next() bool {
	if len(m.rest) == 0 || m.bad {
		return false
	}
	field, wire, n := protowire.ConsumeTag(m.rest)
	if n < 0 {
		m.bad = true
		return false
	}
	m.rest = m.rest[n:]
	switch wire {
	case protowire.VarintType:
		m.number, n = protowire.ConsumeVarint(m.rest)
	case protowire.Fixed64Type:
		m.number, n = protowire.ConsumeFixed64(m.rest)
	case protowire.BytesType:
		m.bytes, n = protowire.ConsumeBytes(m.rest)
	default:
		n = protowire.ConsumeFieldValue(field, wire, m.rest)
	}
	if n < 0 {
		m.bad = true
		return false
	}
	m.tag, m.rest = protowire.EncodeTag(field, wire), m.rest[n:]
	return true
}
