package engine

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"

	"leadline.example/engine/posterior"
)

// appendUses encodes what t's readings by instruments amount to, and on which
// revisions of the instruments the belief rests.
func (t *Track) appendUses(b []byte) []byte {
	b = binary.AppendUvarint(b, uint64(len(t.used)))
	for _, u := range t.used {
		revision := uint32(0)
		if i := t.basis.instrument(u.number); i != nil {
			revision = i.Revision
		}
		b = binary.AppendUvarint(b, uint64(u.number))
		b = binary.AppendUvarint(b, uint64(revision))
		b = binary.AppendUvarint(b, uint64(u.bare))
		b = binary.AppendUvarint(b, uint64(u.span.count))
		b = binary.AppendVarint(b, int64(u.span.first))
		b = binary.AppendVarint(b, int64(u.span.last))
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(u.lowest))
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(u.highest))
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(u.finest))
		b = binary.AppendUvarint(b, uint64(u.samples))
	}
	return b
}

// uses decodes what appendUses encoded; stale tells that an instrument has been
// declared anew since.
func (r *stateReader) uses(version byte, known []*instrumentTrack) (all []use, stale bool) {
	for n := r.uvarint(); n > 0 && r.err == nil; n-- {
		u := use{number: InstrumentNumber(r.uvarint())}
		revision := uint32(r.uvarint())
		u.bare = int(r.uvarint())
		u.span = span{count: int(r.uvarint()), first: Instant(r.varint()), last: Instant(r.varint())}
		if version == stateVersion {
			u.lowest, u.highest, u.finest, u.samples = r.float(), r.float(), r.float(), uint32(r.uvarint())
		}
		if r.err == nil && (u.number == 0 || int(u.number) > len(known)) {
			r.err = fmt.Errorf("instrument number %d, of which there are %d", u.number, len(known))
			return nil, true
		}
		stale = stale || r.err == nil && known[u.number-1].current.Revision != revision
		all = append(all, u)
	}
	return all, stale
}

// append encodes j, which may be nil.
func (j *joint) append(b []byte) []byte {
	if j == nil {
		return append(b, 0)
	}
	b = append(b, 1)
	b = binary.AppendVarint(b, int64(j.at))
	b = binary.AppendUvarint(b, uint64(j.renewed))
	b = binary.AppendUvarint(b, uint64(len(j.routes)))
	for i := range j.routes {
		b = j.routes[i].append(b)
	}
	b = binary.AppendUvarint(b, uint64(len(j.states)))
	for _, s := range j.states {
		b = append(b, byte(s.kind))
		b = binary.AppendUvarint(b, uint64(s.instrument))
		b = appendBlock(b, []byte(s.reference))
	}
	return appendBlock(b, j.filter.AppendBinary(nil))
}

func flag(v bool) byte {
	if v {
		return 1
	}
	return 0
}

func (r *route) append(b []byte) []byte {
	b = binary.AppendUvarint(b, uint64(r.instrument))
	b = binary.AppendVarint(b, int64(r.calibration))
	b = binary.AppendVarint(b, int64(r.until))
	for _, state := range r.indexes() {
		b = binary.AppendUvarint(b, uint64(*state))
	}
	for _, x := range [...]float64{r.scale, r.restated, r.drift} {
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(x))
	}
	b = binary.AppendVarint(b, int64(r.drifts))
	return binary.BigEndian.AppendUint64(b, r.occasion)
}

// indexes are the states of a route.
func (r *route) indexes() [5]*int {
	return [...]*int{&r.own, &r.reference, &r.gain, &r.correlated, &r.shared}
}

var errJoint = errors.New("the joint belief is malformed")

// joint decodes what joint.append encoded.
func (r *stateReader) joint() *joint {
	if r.byte() == 0 {
		return nil
	}
	j := &joint{at: Instant(r.varint()), renewed: int(r.uvarint())}
	for n := r.uvarint(); n > 0 && r.err == nil; n-- {
		j.routes = append(j.routes, r.route())
	}
	for n := r.uvarint(); n > 0 && r.err == nil; n-- {
		s := source{kind: BudgetSource(r.byte()), instrument: InstrumentNumber(r.uvarint())}
		s.reference = string(r.block())
		j.states = append(j.states, s)
	}
	j.filter = decodeBlock(r, posterior.DecodeFilter)
	if r.err == nil && !j.sound() {
		r.err = errJoint
	}
	return j
}

// sound tells whether what j names is there.
func (j *joint) sound() bool {
	if j.filter.States() != len(j.states) {
		return false
	}
	for i := range j.routes {
		for _, state := range j.routes[i].indexes() {
			if *state < 0 || *state >= len(j.states) {
				return false
			}
		}
	}
	return true
}

func (r *stateReader) route() route {
	e := route{instrument: InstrumentNumber(r.uvarint()), calibration: int(r.varint()), until: Instant(r.varint())}
	for _, state := range e.indexes() {
		*state = int(r.uvarint())
	}
	e.scale, e.restated, e.drift = r.float(), r.float(), r.float()
	e.drifts = Instant(r.varint())
	e.occasion = binary.BigEndian.Uint64(r.take(8))
	return e
}
