package posterior

import (
	"errors"
	"fmt"
	"math"
)

// The encodings begin with one byte: the version. Numbers follow in little-endian order, counts
// as 64-bit integers, floating-point numbers as their bits, so that a state read
// back is the state written, bit for bit.
const (
	constantVersion = 1
	walkVersion     = 1
	constantBytes   = 1 + 2*8 + 10*8
	walkBytes       = 1 + 1 + 3*8
)

var errState = errors.New("not a state this version wrote")

// AppendBinary appends the encoding of c to b.
func (c *Constant) AppendBinary(b []byte) []byte {
	b = append(b, constantVersion)
	b = appendUint(b, uint64(c.known.count))
	b = appendFloats(b, c.known.origin, c.known.weight.hi, c.known.weight.lo, c.known.moment.hi, c.known.moment.lo)
	b = appendUint(b, uint64(c.learned.count))
	return appendFloats(b, c.learned.origin, c.learned.sum.hi, c.learned.sum.lo, c.learned.square.hi, c.learned.square.lo)
}

// DecodeConstant reads what AppendBinary wrote; all of b.
func DecodeConstant(b []byte) (Constant, error) {
	if len(b) != constantBytes || b[0] != constantVersion {
		return Constant{}, fmt.Errorf("decode constant of %d bytes: %w", len(b), errState)
	}
	d := decoder{rest: b[1:]}
	c := Constant{
		known:   weighted{d.count(), d.float(), d.pair(), d.pair()},
		learned: squares{d.count(), d.float(), d.pair(), d.pair()},
	}
	if d.bad || !c.known.valid() || !c.learned.valid() {
		return Constant{}, fmt.Errorf("decode constant: %w", errState)
	}
	return c, nil
}

func (k *weighted) valid() bool {
	return (k.count > 0) == (k.weight.hi > 0) && k.weight.hi >= 0
}

func (s *squares) valid() bool {
	return s.square.hi >= 0 && (s.count > 1 || s.square.hi == 0)
}

// AppendBinary appends the encoding of w to b.
func (w *Walk) AppendBinary(b []byte) []byte {
	proper := byte(0)
	if w.proper {
		proper = 1
	}
	b = append(b, walkVersion, proper)
	return appendFloats(b, w.mean.Hi, w.mean.Lo, w.variance)
}

// DecodeWalk reads what AppendBinary wrote; all of b.
func DecodeWalk(b []byte) (Walk, error) {
	if len(b) != walkBytes || b[0] != walkVersion || b[1] > 1 {
		return Walk{}, fmt.Errorf("decode walk of %d bytes: %w", len(b), errState)
	}
	d := decoder{rest: b[2:]}
	mean := d.pair()
	w := Walk{proper: b[1] == 1, mean: levelOf(mean), variance: d.float()}
	if d.bad || !(w.variance >= 0) || (!w.proper && w != Walk{}) {
		return Walk{}, fmt.Errorf("decode walk: %w", errState)
	}
	return w, nil
}

func appendUint(b []byte, v uint64) []byte {
	for range 8 {
		b = append(b, byte(v))
		v >>= 8
	}
	return b
}

func appendFloats(b []byte, all ...float64) []byte {
	for _, v := range all {
		b = appendUint(b, math.Float64bits(v))
	}
	return b
}

// decoder takes numbers off the front of a slice known to be long enough, and
// remembers whether one was out of the question.
type decoder struct {
	rest []byte
	bad  bool
}

func (d *decoder) uint() uint64 {
	v := uint64(0)
	for i := range 8 {
		v |= uint64(d.rest[i]) << (8 * i)
	}
	d.rest = d.rest[8:]
	return v
}

func (d *decoder) count() int64 {
	v := int64(d.uint())
	d.bad = d.bad || v < 0
	return v
}

func (d *decoder) float() float64 {
	v := math.Float64frombits(d.uint())
	d.bad = d.bad || math.IsNaN(v) || math.IsInf(v, 0)
	return v
}

func (d *decoder) pair() pair {
	hi := d.float()
	return pair{hi, d.float()}
}
