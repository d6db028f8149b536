package engine

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"slices"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// appendState encodes what a checkpoint keeps of a track. A track that is
// being rebuilt is kept without a fold.
func (t *Track) appendState(b []byte) []byte {
	b = append(b, stateVersion, flag(t.job != nil))
	for _, n := range [...]int{t.tally.count, t.tally.bare, t.tally.direct, t.tally.censored, t.tally.averaged} {
		b = binary.AppendUvarint(b, uint64(n))
	}
	b = appendFloats(b, t.tally.largest, t.tally.least, t.tally.most, t.tally.finest)
	b = binary.AppendVarint(b, int64(t.tally.first))
	b = binary.AppendVarint(b, int64(t.tally.last))
	b = appendSteps(t.appendUses(b), t.steps)
	var pending []RecordedStep
	for _, e := range slices.Concat(t.unrecorded, t.fold.detected) {
		pending = append(pending, RecordedStep{StepEvent: e})
	}
	b = appendSteps(b, pending)
	if t.job != nil {
		return b
	}
	return t.fold.append(appendEntry(b, &t.last), t.basis.form)
}

// append encodes what is held in a form.
func (f *fold) append(b []byte, held form) []byte {
	b = append(b, byte(held), flag(f.linearised), flag(f.scored), flag(f.lost))
	for _, n := range [...]int{f.count, f.since, f.renewed, int(f.last)} {
		b = binary.AppendUvarint(b, uint64(n))
	}
	b = binary.AppendVarint(b, int64(f.first))
	b = binary.AppendVarint(b, int64(f.lastTime))
	for _, n := range f.flagged {
		b = binary.AppendUvarint(b, uint64(n))
	}
	b = binary.BigEndian.AppendUint64(b, math.Float64bits(f.outlier))
	b = appendBlock(b, f.check.AppendBinary(nil))
	switch held {
	case sumForm:
		return appendBlock(b, f.constant.AppendBinary(nil))
	case walkForm:
		return appendBlock(b, f.walk.AppendBinary(nil))
	case jointForm:
		return f.joint.append(b)
	case countsForm:
		return f.counts.append(b)
	}
	return f.bank.append(b)
}

// fold decodes what fold.append encoded.
func (r *stateReader) fold() (f fold, held form) {
	held = form(r.byte())
	f.linearised, f.scored, f.lost = r.byte() == 1, r.byte() == 1, r.byte() == 1
	f.count, f.since, f.renewed = int(r.uvarint()), int(r.uvarint()), int(r.uvarint())
	f.last = InstrumentNumber(r.uvarint())
	f.first, f.lastTime = Instant(r.varint()), Instant(r.varint())
	for i := range f.flagged {
		f.flagged[i] = int(r.uvarint())
	}
	f.outlier = r.float()
	f.check = decodeBlock(r, modelcheck.DecodeTally)
	switch held {
	case sumForm:
		f.constant = decodeBlock(r, posterior.DecodeConstant)
	case walkForm:
		f.walk = decodeBlock(r, posterior.DecodeWalk)
	case jointForm:
		f.joint = r.joint()
	case countsForm:
		f.counts = r.tallied()
	case bankForm, gridForm:
		f.bank = r.bank()
	default:
		r.err = fmt.Errorf("a belief of the unknown form %d", held)
	}
	return f, held
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
	further := e.Extent != ExtentValue || e.Samples > 0
	if further {
		flags |= 8
	}
	b = append(b, flags)
	b = binary.AppendUvarint(b, uint64(e.Position))
	if e.Instrument != 0 {
		b = binary.AppendUvarint(b, uint64(e.Instrument))
		b = binary.BigEndian.AppendUint64(b, e.Occasion)
	}
	if further {
		b = append(b, byte(e.Extent))
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(e.Upper))
		b = binary.AppendUvarint(b, uint64(e.Samples))
	}
	return appendBlock(b, []byte(e.ID))
}

func appendBlock(b, block []byte) []byte {
	return append(binary.AppendUvarint(b, uint64(len(block))), block...)
}

// decodeState fills t with an encoded state. rebuild tells that there is no
// fold in it, or one of an earlier version, or that it rests on instruments as they are
// no longer declared.
func (t *Track) decodeState(b []byte, known []*instrumentTrack) (rebuild bool, err error) {
	r := stateReader{rest: b}
	version := r.byte()
	if version == 0 || version > stateVersion {
		return true, fmt.Errorf("state of quantity %q has version %d, not up to %d", t.id, version, stateVersion)
	}
	hollow, stale := r.byte() == 1, false
	t.tally = tally{count: int(r.uvarint()), bare: int(r.uvarint())}
	if version == stateVersion {
		t.tally.direct, t.tally.censored, t.tally.averaged = int(r.uvarint()), int(r.uvarint()), int(r.uvarint())
	}
	t.tally.largest = r.float()
	if version == stateVersion {
		t.tally.least, t.tally.most, t.tally.finest = r.float(), r.float(), r.float()
	}
	t.tally.first, t.tally.last = Instant(r.varint()), Instant(r.varint())
	if version > 1 {
		t.used, stale = r.uses(version, known)
	}
	if version == stateVersion {
		t.steps = r.steps()
		for _, s := range r.steps() {
			t.unrecorded = append(t.unrecorded, s.StepEvent)
		}
	}
	if version < stateVersion { // which say nothing of how readings agreed with the model
		t.recount = true
		return true, r.err
	}
	if !hollow {
		t.last = r.entry()
		t.fold, t.held = r.fold()
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
	if flags&8 != 0 {
		e.Extent, e.Upper, e.Samples = Extent(r.byte()), r.float(), uint32(r.uvarint())
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
