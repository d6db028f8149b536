package engine

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"

	"leadline.example/engine/posterior"
)

// appendState encodes what a checkpoint keeps of a track. A track that is
// being rebuilt is kept without a fold. Version 2 has what instruments and a joint
// belief add; a track without either is written as version 1.
func (t *Track) appendState(b []byte) []byte {
	version := byte(1)
	if len(t.used) > 0 || t.fold.joint != nil {
		version = stateVersion
	}
	b = append(b, version, flag(t.job != nil))
	b = binary.AppendUvarint(b, uint64(t.tally.count))
	b = binary.AppendUvarint(b, uint64(t.tally.bare))
	b = binary.BigEndian.AppendUint64(b, math.Float64bits(t.tally.largest))
	b = binary.AppendVarint(b, int64(t.tally.first))
	b = binary.AppendVarint(b, int64(t.tally.last))
	if version > 1 {
		b = t.appendUses(b)
	}
	if t.job != nil {
		return b
	}
	f := &t.fold
	b = binary.AppendUvarint(b, uint64(f.count))
	b = binary.AppendVarint(b, int64(f.lastTime))
	b = appendEntry(b, &t.last)
	b = appendBlock(b, f.constant.AppendBinary(nil))
	b = appendBlock(b, f.walk.AppendBinary(nil))
	if version > 1 {
		b = f.joint.append(b)
	}
	return b
}

func appendEntry(b []byte, e *entry) []byte {
	b = binary.AppendVarint(b, int64(e.Time))
	b = binary.BigEndian.AppendUint64(b, math.Float64bits(e.Value))
	b = binary.BigEndian.AppendUint64(b, math.Float64bits(e.Uncertainty))
	flags := byte(0)
	if e.HasUncertainty {
		flags |= 1
	}
	if e.HasID {
		flags |= 2
	}
	if e.Instrument != 0 {
		flags |= 4
	}
	b = append(b, flags)
	b = binary.AppendUvarint(b, uint64(e.Position))
	if e.Instrument != 0 {
		b = binary.AppendUvarint(b, uint64(e.Instrument))
		b = binary.BigEndian.AppendUint64(b, e.Occasion)
	}
	return appendBlock(b, []byte(e.ID))
}

func appendBlock(b, block []byte) []byte {
	return append(binary.AppendUvarint(b, uint64(len(block))), block...)
}

// decodeState fills t with an encoded state. rebuild tells that there is no
// fold in it, or that it rests on instruments as they are no longer declared.
func (t *Track) decodeState(b []byte, known []*instrumentTrack) (rebuild bool, err error) {
	r := stateReader{rest: b}
	version := r.byte()
	if version == 0 || version > stateVersion {
		return true, fmt.Errorf("state of quantity %q has version %d, not up to %d", t.id, version, stateVersion)
	}
	hollow, stale := r.byte() == 1, false
	t.tally = tally{
		count: int(r.uvarint()), bare: int(r.uvarint()), largest: r.float(),
		first: Instant(r.varint()), last: Instant(r.varint()),
	}
	if version > 1 {
		t.used, stale = r.uses(known)
	}
	if !hollow {
		f := &t.fold
		f.count = int(r.uvarint())
		f.lastTime = Instant(r.varint())
		t.last = r.entry()
		f.constant = decodeBlock(&r, posterior.DecodeConstant)
		f.walk = decodeBlock(&r, posterior.DecodeWalk)
		if version > 1 {
			f.joint = r.joint()
		}
	}
	if r.err == nil && len(r.rest) > 0 {
		r.err = errors.New("trailing bytes")
	}
	if r.err != nil {
		return true, fmt.Errorf("state of quantity %q: %w", t.id, r.err)
	}
	if stale {
		t.reset()
	}
	return hollow || stale, nil
}

// stateReader decodes until the first error, which it keeps.
type stateReader struct {
	rest []byte
	err  error
}

var errShort = errors.New("too short")

func (r *stateReader) take(n uint64) []byte {
	if r.err == nil && uint64(len(r.rest)) < n {
		r.err = errShort
	}
	if r.err != nil {
		return make([]byte, min(n, 8))
	}
	head := r.rest[:n]
	r.rest = r.rest[n:]
	return head
}

func (r *stateReader) byte() byte { return r.take(1)[0] }

func (r *stateReader) float() float64 {
	return math.Float64frombits(binary.BigEndian.Uint64(r.take(8)))
}

func (r *stateReader) uvarint() uint64 {
	v, n := binary.Uvarint(r.rest)
	if n <= 0 {
		r.err = errShort
		return 0
	}
	r.take(uint64(n))
	return v
}

func (r *stateReader) varint() int64 {
	v, n := binary.Varint(r.rest)
	if n <= 0 {
		r.err = errShort
		return 0
	}
	r.take(uint64(n))
	return v
}

func (r *stateReader) block() []byte { return r.take(r.uvarint()) }

func (r *stateReader) entry() entry {
	var e entry
	e.Time = Instant(r.varint())
	e.Value, e.Uncertainty = r.float(), r.float()
	flags := r.byte()
	e.HasUncertainty, e.HasID = flags&1 != 0, flags&2 != 0
	e.Position = Position(r.uvarint())
	if flags&4 != 0 {
		e.Instrument = InstrumentNumber(r.uvarint())
		e.Occasion = binary.BigEndian.Uint64(r.take(8))
	}
	e.ID = ReadingID(r.block())
	return e
}

func decodeBlock[T any](r *stateReader, decode func([]byte) (T, error)) T {
	v, err := decode(r.block())
	if r.err == nil {
		r.err = err
	}
	return v
}
