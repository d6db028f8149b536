package modelcheck

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
)

// The encoding begins with one byte, the version. Numbers follow in little-endian
// order, floating-point numbers as their bits, so that a state read back is the state
// written, bit for bit.
const tallyVersion = 1

var errState = errors.New("not a state this version wrote")

// AppendBinary appends the encoding of t to b.
func (t *Tally) AppendBinary(b []byte) []byte {
	b = append(b, tallyVersion)
	for _, v := range [...]float64{
		t.last.Lower, t.last.Upper, t.now.square, t.now.lag, t.full.square, t.full.lag, t.previous, t.level,
		t.square, t.within50, t.within95, t.up.sum, t.down.sum,
	} {
		b = binary.LittleEndian.AppendUint64(b, math.Float64bits(v))
	}
	for _, v := range [...]float32{t.now.within50, t.now.within95, t.full.within50, t.full.within95, t.priorScore} {
		b = binary.LittleEndian.AppendUint32(b, math.Float32bits(v))
	}
	for _, v := range [...]int64{t.began, t.scored, t.up.since, t.down.since, t.stepAt, t.stepSince} {
		b = binary.LittleEndian.AppendUint64(b, uint64(v))
	}
	for _, v := range [...]uint32{t.outlying, t.steps, t.raised} {
		b = binary.LittleEndian.AppendUint32(b, v)
	}
	b = binary.LittleEndian.AppendUint16(b, t.filled)
	return append(b, byte(t.direction), byte(t.priorStage), byte(t.objections), bit(t.started)|bit(t.looked)<<1)
}

func bit(b bool) byte {
	if b {
		return 1
	}
	return 0
}

// tallyBytes is the length of an encoding.
const tallyBytes = 1 + 13*8 + 5*4 + 6*8 + 3*4 + 2 + 4

// DecodeTally reads what AppendBinary wrote; all of b.
func DecodeTally(b []byte) (Tally, error) {
	if len(b) != tallyBytes || b[0] != tallyVersion {
		return Tally{}, fmt.Errorf("decode tally of %d bytes: %w", len(b), errState)
	}
	d := decoder{rest: b[1:]}
	var t Tally
	for _, v := range [...]*float64{
		&t.last.Lower, &t.last.Upper, &t.now.square, &t.now.lag, &t.full.square, &t.full.lag, &t.previous, &t.level,
		&t.square, &t.within50, &t.within95, &t.up.sum, &t.down.sum,
	} {
		*v = d.float()
	}
	for _, v := range [...]*float32{&t.now.within50, &t.now.within95, &t.full.within50, &t.full.within95, &t.priorScore} {
		*v = d.single()
	}
	for _, v := range [...]*int64{&t.began, &t.scored, &t.up.since, &t.down.since, &t.stepAt, &t.stepSince} {
		*v = int64(d.uint64())
	}
	for _, v := range [...]*uint32{&t.outlying, &t.steps, &t.raised} {
		*v = d.uint32()
	}
	t.filled = binary.LittleEndian.Uint16(d.rest)
	small := d.rest[2:]
	t.direction, t.priorStage, t.objections = Step(small[0]), priorStage(small[1]), resultSet(small[2])
	t.started, t.looked = small[3]&1 != 0, small[3]&2 != 0
	if d.bad || small[3] > 3 || !t.valid() {
		return Tally{}, fmt.Errorf("decode tally: %w", errState)
	}
	return t, nil
}

func (t *Tally) valid() bool {
	possible := resultSet(1<<IntervalsTooNarrow | 1<<IntervalsTooWide | 1<<Serial | 1<<PriorConflict)
	return t.last.Lower <= t.last.Upper && t.now.square >= 0 && t.full.square >= 0 && t.square >= 0 && t.level >= 0 &&
		t.up.sum >= 0 && t.down.sum >= 0 && t.scored >= int64(t.filled) && t.filled < MaxWindow &&
		t.direction <= StepDown && t.priorStage <= priorAtOnce && t.objections&^possible == 0
}

// decoder takes numbers off the front of a slice known to be long enough, and
// remembers whether one wasn't finite.
type decoder struct {
	rest []byte
	bad  bool
}

func (d *decoder) uint64() uint64 {
	v := binary.LittleEndian.Uint64(d.rest)
	d.rest = d.rest[8:]
	return v
}

func (d *decoder) uint32() uint32 {
	v := binary.LittleEndian.Uint32(d.rest)
	d.rest = d.rest[4:]
	return v
}

func (d *decoder) float() float64 {
	v := math.Float64frombits(d.uint64())
	d.bad = d.bad || math.IsNaN(v) || math.IsInf(v, 0)
	return v
}

func (d *decoder) single() float32 {
	v := math.Float32frombits(d.uint32())
	d.bad = d.bad || math.IsNaN(float64(v)) || math.IsInf(float64(v), 0)
	return v
}
