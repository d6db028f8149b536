package persist

import (
	"encoding/binary"
	"errors"
	"math"
	"math/bits"
	"slices"

	"google.golang.org/protobuf/encoding/protowire"

	"leadline.example/engine"
)

const (
	rowsHeader = 1 + 1 + 8 + 8 // rows, scale, earliest and latest time

	rowHasID          = 1 << 0
	rowHasUncertainty = 1 << 1
	squeezeReversed   = 1 << 2 // bytes are written last first
	rowHasOrigin      = 1 << 3 // instrument or occasion aren't those of the row before
	squeezeWidth      = 4      // shift of the number of bytes
)

// scales are the units in which a chunk's times may be written, coarsest
// first, in nanoseconds; the last fits any.
var scales = [...]int64{1e9, 1e6, 1e3, 1}

// appendRows encodes the rows of one chunk, at least one.
func appendRows(b []byte, rows []engine.Row) []byte {
	earliest, latest := rows[0].Time, rows[0].Time
	for _, r := range rows {
		earliest, latest = min(earliest, r.Time), max(latest, r.Time)
	}
	scale := scaleOf(rows, earliest)
	b = append(b, byte(len(rows)), byte(scale))
	b = binary.LittleEndian.AppendUint64(b, uint64(earliest))
	b = binary.LittleEndian.AppendUint64(b, uint64(latest))
	before := engine.Row{Time: earliest}
	for _, r := range rows {
		b = appendRow(b, r, before, scales[scale])
		before = follow(r, before)
	}
	return b
}

// follow returns what stands before the row after r: r itself, with the last
// uncertainty there was.
func follow(r, before engine.Row) engine.Row {
	if !r.HasUncertainty {
		r.Uncertainty = before.Uncertainty
	}
	return r
}

// scaleOf returns the coarsest scale that divides all differences. One that
// overflows is harmless: it is undone by the addition when read.
func scaleOf(rows []engine.Row, earliest engine.Instant) int {
	return slices.IndexFunc(scales[:], func(unit int64) bool {
		at := earliest
		for _, r := range rows {
			if int64(r.Time-at)%unit != 0 {
				return false
			}
			at = r.Time
		}
		return true
	})
}

func appendRow(b []byte, r, before engine.Row, unit int64) []byte {
	if !sameExtent(&r, &before) {
		b = appendExtent(b, &r, &before)
	}
	change, control := squeeze(r.Value, before.Value)
	if r.HasID {
		control |= rowHasID
	}
	if r.HasUncertainty {
		control |= rowHasUncertainty
	}
	if r.Instrument != before.Instrument || r.Occasion != before.Occasion {
		control |= rowHasOrigin
	}
	b = append(b, control)
	b = protowire.AppendVarint(b, protowire.EncodeZigZag(int64(r.Time-before.Time)/unit))
	b = protowire.AppendVarint(b, protowire.EncodeZigZag(int64(r.Position-before.Position)))
	if control&rowHasOrigin != 0 {
		b = appendOrigin(b, r, before)
	}
	b = appendLow(b, change, control)
	if r.HasUncertainty {
		change, control := squeeze(r.Uncertainty, before.Uncertainty)
		b = appendLow(append(b, control), change, control)
	}
	return b
}

// appendOrigin appends which instrument and occasion a row is of. A hash has no
// bytes to save, so an occasion that changes is written whole.
func appendOrigin(b []byte, r, before engine.Row) []byte {
	if r.Occasion == before.Occasion {
		return protowire.AppendVarint(b, uint64(r.Instrument)<<1)
	}
	b = protowire.AppendVarint(b, uint64(r.Instrument)<<1|1)
	return binary.LittleEndian.AppendUint64(b, r.Occasion)
}

// squeeze returns the bits in which v differs from before, with their number
// of bytes in the control byte: noisy decimals share their high bytes with
// their neighbours, coarse ones have low bytes of zeros, and then the bytes
// are reversed.
func squeeze(v, before float64) (change uint64, control byte) {
	change = math.Float64bits(v) ^ math.Float64bits(before)
	if reversed := bits.ReverseBytes64(change); bits.Len64(reversed) < bits.Len64(change) {
		change, control = reversed, squeezeReversed
	}
	return change, control | byte((bits.Len64(change)+7)/8)<<squeezeWidth
}

func appendLow(b []byte, change uint64, control byte) []byte {
	for range control >> squeezeWidth {
		b = append(b, byte(change))
		change >>= 8
	}
	return b
}

// rowChunk is the header of encoded rows.
type rowChunk struct {
	count            int
	unit             int64
	earliest, latest engine.Instant
	body             []byte
}

// parseRows checks the checksum and the header.
func parseRows(key, value []byte) (c rowChunk, err error) {
	body, err := unseal(key, value)
	if err != nil {
		return c, err
	}
	return parseRowsBody(body)
}

func parseRowsBody(b []byte) (c rowChunk, err error) {
	if len(b) < rowsHeader || b[0] == 0 || int(b[1]) >= len(scales) {
		return c, errors.New("the header is malformed")
	}
	c.count, c.unit = int(b[0]), scales[b[1]]
	c.earliest = engine.Instant(binary.LittleEndian.Uint64(b[2:]))
	c.latest = engine.Instant(binary.LittleEndian.Uint64(b[10:]))
	c.body = b[rowsHeader:]
	return c, nil
}

// appendTo decodes the rows.
func (c rowChunk) appendTo(rows []engine.Row) ([]engine.Row, error) {
	b, before := c.body, engine.Row{Time: c.earliest}
	for range c.count {
		r, n := takeRow(b, before, c.unit)
		if n < 0 {
			return rows, errors.New("a row is cut short or malformed")
		}
		b, before = b[n:], follow(r, before)
		rows = append(rows, r)
	}
	if len(b) != 0 {
		return rows, errors.New("bytes follow the last row")
	}
	return rows, nil
}

// takeRow decodes one row and returns its length, or -1.
func takeRow(b []byte, before engine.Row, unit int64) (r engine.Row, n int) {
	r.Extent, r.Upper, r.Samples = before.Extent, before.Upper, before.Samples
	if len(b) > 0 && b[0]&escapeMask == extentEscape {
		if n = takeExtent(b, &r); n < 0 {
			return r, -1
		}
	}
	if len(b) == n {
		return r, -1
	}
	control := b[n]
	n++
	time, used := protowire.ConsumeVarint(b[n:])
	if used < 0 {
		return r, -1
	}
	n += used
	position, used := protowire.ConsumeVarint(b[n:])
	if used < 0 {
		return r, -1
	}
	n += used
	r.Time = before.Time + engine.Instant(protowire.DecodeZigZag(time)*unit)
	r.Position = before.Position + engine.Position(protowire.DecodeZigZag(position))
	r.HasID = control&rowHasID != 0
	r.HasUncertainty = control&rowHasUncertainty != 0
	r.Instrument, r.Occasion = before.Instrument, before.Occasion
	if control&rowHasOrigin != 0 {
		if used = takeOrigin(b[n:], &r); used < 0 {
			return r, -1
		}
		n += used
	}
	if r.Value, used = takeLow(b[n:], control, before.Value); used < 0 {
		return r, -1
	}
	n += used
	if !r.HasUncertainty {
		return r, n
	}
	if r.Uncertainty, used = takeNumber(b[n:], before.Uncertainty); used < 0 {
		return r, -1
	}
	return r, n + used
}

// takeOrigin reads what appendOrigin wrote and returns its length, or -1.
func takeOrigin(b []byte, r *engine.Row) int {
	v, n := protowire.ConsumeVarint(b)
	if n < 0 || v>>1 > math.MaxUint32 {
		return -1
	}
	r.Instrument = engine.InstrumentNumber(v >> 1)
	if v&1 == 0 {
		return n
	}
	if len(b) < n+8 {
		return -1
	}
	r.Occasion = binary.LittleEndian.Uint64(b[n:])
	return n + 8
}

// takeNumber reads a control byte and the bytes that it announces.
func takeNumber(b []byte, before float64) (v float64, n int) {
	if len(b) == 0 {
		return 0, -1
	}
	if v, n = takeLow(b[1:], b[0], before); n < 0 {
		return 0, -1
	}
	return v, 1 + n
}

func takeLow(b []byte, control byte, before float64) (v float64, n int) {
	n = int(control >> squeezeWidth)
	if n > 8 || n > len(b) {
		return 0, -1
	}
	var change uint64
	for i := n - 1; i >= 0; i-- {
		change = change<<8 | uint64(b[i])
	}
	if control&squeezeReversed != 0 {
		change = bits.ReverseBytes64(change)
	}
	return math.Float64frombits(math.Float64bits(before) ^ change), n
}
