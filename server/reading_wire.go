package server

import (
	"encoding/binary"
	"math"
	"math/bits"
	"time"
	"unicode/utf8"

	"google.golang.org/grpc/encoding"
	"google.golang.org/grpc/mem"
	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// readingCodec is gRPC's codec for messages, but for those of a stream of
// readings: they are decoded straight into engine readings and encoded straight
// from engine results, without a message for each reading in between, which
// would take longer than the engine. A batch that is unusual or wrong goes the
// way of all messages, so that both give the same errors by construction.
type readingCodec struct{ encoding.CodecV2 }

// wireBatch is a leadline.v1.StreamReadingsRequest decoded.
type wireBatch struct {
	sequence uint64
	readings []engine.Reading
	err      error // why the service refuses it
}

// Unmarshal decodes a message.
func (c readingCodec) Unmarshal(data mem.BufferSlice, v any) error {
	if data.Len() > maxBodyBytes {
		markTooLarge(v)
		return nil
	}
	batch, ok := v.(*wireBatch)
	if !ok {
		return c.CodecV2.Unmarshal(data, v)
	}
	buffer := data.MaterializeToBuffer(mem.DefaultBufferPool())
	*batch, ok = scanBatch(buffer.ReadOnlyData())
	buffer.Free()
	if ok {
		return nil
	}
	message := new(leadlinev1.StreamReadingsRequest)
	if err := c.CodecV2.Unmarshal(data, message); err != nil {
		return err
	}
	*batch = wireBatch{sequence: message.GetSequence()}
	batch.readings, batch.err = readingsOf(message.GetReadings())
	return nil
}

// Marshal encodes a message.
func (c readingCodec) Marshal(v any) (mem.BufferSlice, error) {
	answer, ok := v.(*wireAnswer)
	if !ok {
		return c.CodecV2.Marshal(v)
	}
	pool := mem.DefaultBufferPool()
	buffer := pool.Get(answer.mostBytes())
	*buffer = answer.append((*buffer)[:0])
	return mem.BufferSlice{mem.NewBuffer(buffer, pool)}, nil
}

// The tags of a request: field number and wire type in one byte each.
const (
	tagSequence    = 1<<3 | byte(protowire.VarintType)
	tagReading     = 2<<3 | byte(protowire.BytesType)
	tagQuantity    = 1<<3 | byte(protowire.BytesType)
	tagValue       = 2<<3 | byte(protowire.Fixed64Type)
	tagTime        = 3<<3 | byte(protowire.BytesType)
	tagInstrument  = 4<<3 | byte(protowire.BytesType)
	tagUncertainty = 5<<3 | byte(protowire.Fixed64Type)
	tagUnit        = 6<<3 | byte(protowire.BytesType)
	tagID          = 7<<3 | byte(protowire.BytesType)
	tagOccasion    = 8<<3 | byte(protowire.BytesType)
	tagAbove       = 9<<3 | byte(protowire.Fixed64Type)
	tagBelow       = 10<<3 | byte(protowire.Fixed64Type)
	tagBetween     = 11<<3 | byte(protowire.BytesType)
	tagSamples     = 12<<3 | byte(protowire.VarintType)
	tagLower       = 1<<3 | byte(protowire.Fixed64Type)
	tagUpper       = 2<<3 | byte(protowire.Fixed64Type)
	tagSeconds     = 1<<3 | byte(protowire.VarintType)
	tagNanoseconds = 2<<3 | byte(protowire.VarintType)
)

// The fields of an indication, as bits by number: a reading has one of them.
const indicationFields = 1<<(tagValue>>3) | 1<<(tagAbove>>3) | 1<<(tagBelow>>3) | 1<<(tagBetween>>3)

// Bounds of a Timestamp: the years 1 to 9999.
const (
	minSeconds     = -62135596800
	maxSeconds     = 253402300799
	maxNanoseconds = 999_999_999
)

// scanBatch decodes a batch of the plain shape: the known fields, each once,
// nothing missing, nothing over a limit. Otherwise it gives up.
func scanBatch(b []byte) (batch wireBatch, ok bool) {
	w := wireScanner{rest: b}
	n := w.count()
	if n == 0 || n > engine.MaxBatchReadings {
		return batch, false
	}
	batch.readings = make([]engine.Reading, n)
	w.rest = b
	// One text holds the IDs of all quantities: the engine forgets them with
	// the batch. The reading IDs it keeps, so each has its own.
	text := string(b)
	for i, seen := 0, false; len(w.rest) > 0; {
		switch w.tag() {
		case tagSequence:
			if seen {
				return batch, false
			}
			batch.sequence, seen = w.varint(), true
		case tagReading:
			body := w.bytes()
			at := len(b) - len(w.rest) - len(body)
			if w.bad || !scanWireReading(body, text[at:at+len(body)], &batch.readings[i]) {
				return batch, false
			}
			i++
		default:
			return batch, false
		}
		if w.bad {
			return batch, false
		}
	}
	return batch, true
}

// count counts the readings of a batch; 0 if it is of another shape.
func (w *wireScanner) count() (n int) {
	for len(w.rest) > 0 && !w.bad {
		switch w.tag() {
		case tagSequence:
			w.varint()
		case tagReading:
			w.bytes()
			n++
		default:
			return 0
		}
	}
	if w.bad {
		return 0
	}
	return n
}

// scanWireReading decodes one reading; text is the same as b.
func scanWireReading(b []byte, text string, r *engine.Reading) bool {
	w := wireScanner{rest: b}
	seen := 0
	for len(w.rest) > 0 {
		tag := w.tag()
		bit := 1 << (tag >> 3)
		if seen&bit != 0 {
			return false
		}
		seen |= bit
		switch tag {
		case tagQuantity:
			n := len(w.text())
			at := len(b) - len(w.rest)
			r.Quantity = engine.QuantityID(text[at-n : at])
		case tagValue:
			r.Value = w.double()
		case tagTime:
			setTime(r, w.time())
		case tagInstrument:
			r.Instrument = engine.InstrumentID(w.text())
		case tagUncertainty:
			r.HasUncertainty, r.RandomStandardUncertainty = true, w.double()
		case tagUnit:
			r.Unit = string(w.text())
		case tagID:
			r.ID = engine.ReadingID(w.text())
		case tagOccasion:
			r.Occasion = string(w.text())
		default:
			w.indication(tag, r)
		}
		if w.bad {
			return false
		}
	}
	return takenAsIs(r) && r.Quantity != "" && bits.OnesCount(uint(seen&indicationFields)) == 1
}

// indication reads a field that says what was indicated, other than a value.
func (w *wireScanner) indication(tag byte, r *engine.Reading) {
	switch tag {
	case tagAbove:
		r.Extent, r.Value = engine.ExtentAbove, w.double()
	case tagBelow:
		r.Extent, r.Value = engine.ExtentBelow, w.double()
	case tagBetween:
		r.Extent = engine.ExtentBetween
		r.Value, r.Upper = w.between()
	case tagSamples:
		n := w.varint()
		r.Samples, w.bad = uint32(n), w.bad || n == 0 || n > math.MaxUint32
	default:
		w.bad = true
	}
}

// between reads the two limits of an indication, the lower one first.
func (w *wireScanner) between() (lower, upper float64) {
	m := wireScanner{rest: w.bytes()}
	const size = 1 + 8
	if len(m.rest) != 2*size || m.rest[0] != tagLower || m.rest[size] != tagUpper {
		w.bad = true
		return 0, 0
	}
	m.tag()
	lower = m.double()
	m.tag()
	return lower, m.double()
}

// wireScanner reads an encoded message; bad says that it could not.
type wireScanner struct {
	rest []byte
	bad  bool
}

// tag reads a tag; one of several bytes, which none of the known is, is 0.
func (w *wireScanner) tag() byte {
	tag := w.rest[0]
	w.rest = w.rest[1:]
	if tag >= 0x80 {
		return 0
	}
	return tag
}

func (w *wireScanner) varint() uint64 {
	if len(w.rest) > 0 && w.rest[0] < 0x80 {
		v := uint64(w.rest[0])
		w.rest = w.rest[1:]
		return v
	}
	v, n := protowire.ConsumeVarint(w.rest)
	if n < 0 {
		w.bad = true
		return 0
	}
	w.rest = w.rest[n:]
	return v
}

func (w *wireScanner) bytes() []byte {
	n := w.varint()
	if n > uint64(len(w.rest)) {
		w.bad = true
		return nil
	}
	b := w.rest[:n]
	w.rest = w.rest[n:]
	return b
}

func (w *wireScanner) text() []byte {
	b := w.bytes()
	w.bad = w.bad || !utf8.Valid(b)
	return b
}

func (w *wireScanner) double() float64 {
	if len(w.rest) < 8 {
		w.bad = true
		return 0
	}
	x := math.Float64frombits(binary.LittleEndian.Uint64(w.rest))
	w.rest = w.rest[8:]
	return x
}

// time reads a Timestamp that is valid.
func (w *wireScanner) time() time.Time {
	m := wireScanner{rest: w.bytes()}
	var seconds, nanoseconds int64
	for last := byte(0); len(m.rest) > 0 && !m.bad; {
		tag := m.tag()
		switch {
		case tag == tagSeconds && last == 0:
			seconds = int64(m.varint())
		case tag == tagNanoseconds && last < tagNanoseconds:
			nanoseconds = int64(int32(m.varint()))
		default:
			m.bad = true
		}
		last = tag
	}
	if m.bad || seconds < minSeconds || seconds > maxSeconds || nanoseconds < 0 || nanoseconds > maxNanoseconds {
		w.bad = true
		return time.Time{}
	}
	return time.Unix(seconds, nanoseconds)
}
