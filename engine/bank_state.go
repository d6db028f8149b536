package engine

import (
	"encoding/binary"
	"errors"
	"math"

	"leadline.example/engine/posterior"
)

// append encodes b, which may be nil.
func (b *bank) append(to []byte) []byte {
	if b == nil {
		return append(to, 0)
	}
	to = append(to, 1, flag(b.part.vague), flag(b.part.pinned), flag(b.part.taught), flag(b.blank))
	for _, n := range [...]int{b.part.renewed, b.lost, b.placed, b.count, b.learned.count, len(b.widened)} {
		to = binary.AppendUvarint(to, uint64(n))
	}
	for _, n := range b.widened {
		to = binary.AppendUvarint(to, uint64(n))
	}
	to = appendFloats(to, b.step, b.wide, b.learned.least, b.learned.most)
	to = binary.AppendUvarint(to, uint64(len(b.nodes)))
	for i := range b.nodes {
		n := &b.nodes[i]
		to = n.held.append(appendFloats(to, n.v, n.prior, n.log, n.bias.Mean, n.bias.SD))
	}
	return to
}

func appendFloats(b []byte, all ...float64) []byte {
	for _, x := range all {
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(x))
	}
	return b
}

var errBank = errors.New("the belief over a learned repeatability is malformed")

// bank decodes what bank.append encoded.
func (r *stateReader) bank() *bank {
	if r.byte() == 0 {
		return nil
	}
	b := new(bank)
	b.part.vague, b.part.pinned, b.part.taught, b.blank = r.byte() == 1, r.byte() == 1, r.byte() == 1, r.byte() == 1
	b.part.renewed, b.lost, b.placed, b.count = int(r.uvarint()), int(r.uvarint()), int(r.uvarint()), int(r.uvarint())
	b.learned.count = int(r.uvarint())
	for n := r.uvarint(); n > 0 && r.err == nil; n-- {
		b.widened = append(b.widened, int(r.uvarint()))
	}
	b.step, b.wide, b.learned.least, b.learned.most = r.float(), r.float(), r.float(), r.float()
	count := r.uvarint()
	if count > 2*maxNodes {
		r.err = errBank
	}
	for ; count > 0 && r.err == nil; count-- {
		n := node{v: r.float(), prior: r.float(), log: r.float(), bias: posterior.Bias{Mean: r.float(), SD: r.float()}}
		n.held = r.holder()
		b.nodes = append(b.nodes, n)
	}
	return b
}

// What a holder is encoded as begins with one of these: a joint's own first byte, or this.
const cellsMark = 2

func (r *stateReader) holder() holder {
	if len(r.rest) > 0 && r.rest[0] == cellsMark {
		return r.cells()
	}
	if j := r.joint(); j != nil {
		return &lone{joint: j}
	}
	if r.err == nil {
		r.err = errBank
	}
	return &lone{joint: &joint{}}
}

func (c *cells) append(b []byte) []byte {
	b = append(b, cellsMark)
	b = binary.AppendVarint(b, int64(c.at))
	b = binary.AppendUvarint(b, uint64(c.renewed))
	b = binary.AppendUvarint(b, uint64(c.by))
	b = binary.AppendVarint(b, int64(c.calibration))
	b = binary.AppendVarint(b, int64(c.until))
	return appendBlock(b, c.grid.AppendBinary(nil))
}

func (r *stateReader) cells() *cells {
	r.byte()
	return &cells{
		at: Instant(r.varint()), renewed: int(r.uvarint()), by: InstrumentNumber(r.uvarint()),
		calibration: int(r.varint()), until: Instant(r.varint()), grid: decodeBlock(r, posterior.DecodeGrid),
	}
}

// append encodes t, which may be nil.
func (t *tallied) append(b []byte) []byte {
	if t == nil {
		return append(b, 0)
	}
	b = binary.AppendUvarint(append(b, 1), uint64(t.by))
	b = binary.AppendUvarint(b, uint64(t.laid))
	b = appendFloats(b, t.bias.Mean, t.bias.SD)
	b = appendBlock(b, t.counts.AppendBinary(nil))
	return appendBlock(b, t.points.AppendBinary(nil))
}

func (r *stateReader) tallied() *tallied {
	if r.byte() == 0 {
		return nil
	}
	return &tallied{
		by: InstrumentNumber(r.uvarint()), laid: int(r.uvarint()), bias: posterior.Bias{Mean: r.float(), SD: r.float()},
		counts: decodeBlock(r, posterior.DecodeCounts), points: decodeBlock(r, posterior.DecodePoints),
	}
}
