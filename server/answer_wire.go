package server

import (
	"time"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

// wireAnswer is a leadline.v1.StreamReadingsResponse to be encoded.
type wireAnswer struct {
	sequence uint64
	results  []engine.Result
}

// The tags of an answer; those of sequence, seconds and nanoseconds are the same.
const (
	tagResult     = 2<<3 | byte(protowire.BytesType)
	tagIndex      = 1<<3 | byte(protowire.VarintType)
	tagResultID   = 2<<3 | byte(protowire.BytesType)
	tagResultTime = 3<<3 | byte(protowire.BytesType)
	tagStatus     = 4<<3 | byte(protowire.VarintType)
	tagReason     = 5<<3 | byte(protowire.BytesType)
	tagDetail     = 6<<3 | byte(protowire.BytesType)
	tagApplied    = 3<<3 | byte(protowire.VarintType)
	tagDuplicate  = 4<<3 | byte(protowire.VarintType)
	tagRefused    = 5<<3 | byte(protowire.VarintType)
)

// mostBytes is what the encoded answer takes at most.
func (a *wireAnswer) mostBytes() int {
	const counts, result = 64, 64 // tags, lengths, numbers
	n := counts + result*len(a.results)
	for i := range a.results {
		r := &a.results[i]
		n += len(r.ReadingID) + len(r.Reason) + len(r.Detail)
	}
	return n
}

// append encodes the answer.
func (a *wireAnswer) append(b []byte) []byte {
	b = appendWireUint(b, tagSequence, a.sequence)
	for i := range a.results {
		b = appendWireResult(append(b, tagResult), i, &a.results[i])
	}
	n := countResults(a.results)
	b = appendWireUint(b, tagApplied, uint64(n.applied))
	b = appendWireUint(b, tagDuplicate, uint64(n.duplicate))
	return appendWireUint(b, tagRefused, uint64(n.refused))
}

// appendWireResult writes a result, its length first: in one byte, to be moved
// if it takes more, as it does for a refusal.
func appendWireResult(b []byte, index int, r *engine.Result) []byte {
	at := len(b) + 1
	b = appendWireUint(append(b, 0), tagIndex, uint64(index))
	b = appendWireText(b, tagResultID, string(r.ReadingID))
	if r.Time.Valid() {
		b = appendWireTime(append(b, tagResultTime), r.Time.Time())
	}
	b = appendWireUint(b, tagStatus, uint64(statusMessage(r.Status)))
	b = appendWireText(b, tagReason, string(r.Reason))
	b = appendWireText(b, tagDetail, r.Detail)
	if n := len(b) - at; n < 0x80 {
		b[at-1] = byte(n)
	} else {
		more := protowire.SizeVarint(uint64(n)) - 1
		b = append(b, make([]byte, more)...)
		copy(b[at+more:], b[at:at+n])
		protowire.AppendVarint(b[:at-1], uint64(n))
	}
	return b
}

func appendWireTime(b []byte, t time.Time) []byte {
	at := len(b) + 1
	b = appendWireUint(append(b, 0), tagSeconds, uint64(t.Unix()))
	b = appendWireUint(b, tagNanoseconds, uint64(t.Nanosecond()))
	b[at-1] = byte(len(b) - at) // two numbers take less than 128 bytes
	return b
}

// appendWireUint writes a number, unless it is 0.
func appendWireUint(b []byte, tag byte, v uint64) []byte {
	if v == 0 {
		return b
	}
	return protowire.AppendVarint(append(b, tag), v)
}

// appendWireText writes a text, unless it is empty.
func appendWireText(b []byte, tag byte, s string) []byte {
	if s == "" {
		return b
	}
	return protowire.AppendString(append(b, tag), s)
}
