package posterior

import (
	"fmt"
	"math"
	"slices"
)

// Counts are encoded as a version, a Constant, the sums of exact readings of noise r
// and the outcomes in ascending order, each with its count; see encode.go. Counts
// that went through it answer with the same bits, since nothing depends on the order in
// which outcomes came.
const (
	countsVersion = 1
	averageBytes  = 8 * 8
	outcomeBytes  = 5 * 8
	countsBytes   = 1 + constantBytes + averageBytes
)

// AppendBinary appends the encoding of c to b.
func (c *Counts) AppendBinary(b []byte) []byte {
	b = append(b, countsVersion)
	b = c.own.AppendBinary(b)
	a := &c.shared
	b = appendUint(b, uint64(a.count))
	b = appendFloats(b, a.origin, a.weight.hi, a.weight.lo, a.moment.hi, a.moment.lo, a.square.hi, a.square.lo)
	for _, t := range c.sorted() {
		b = appendFloats(b, t.Lower, t.Upper, t.sd, t.samples)
		b = appendUint(b, uint64(t.count))
	}
	return b
}

// DecodeCounts reads what AppendBinary wrote; all of b.
func DecodeCounts(b []byte) (Counts, error) {
	if len(b) < countsBytes || b[0] != countsVersion || (len(b)-countsBytes)%outcomeBytes != 0 {
		return Counts{}, fmt.Errorf("decode counts of %d bytes: %w", len(b), errState)
	}
	own, err := DecodeConstant(b[1 : 1+constantBytes])
	if err != nil {
		return Counts{}, err
	}
	c := Counts{own: own}
	d := decoder{rest: b[1+constantBytes:]}
	c.shared = averages{d.count(), d.float(), d.pair(), d.pair(), d.pair()}
	bad := c.shared.square.hi < 0 || (c.shared.count > 0) != (c.shared.weight.hi > 0) || own.learned.count > 0
	for len(d.rest) > 0 {
		t := tally{outcome{Indication{d.limit(), d.limit()}, d.least(), d.least()}, d.count()}
		bad = bad || !t.valid() || len(c.seen) > 0 && compare(c.seen[len(c.seen)-1], t) >= 0
		c.seen = append(c.seen, t)
		c.others += t.count
		bad = bad || c.others < 0
	}
	if bad || d.bad {
		return Counts{}, fmt.Errorf("decode counts: %w", errState)
	}
	c.place()
	return c, nil
}

// valid tells whether a tally may have been counted.
func (t *tally) valid() bool {
	return t.count > 0 && t.Lower < t.Upper && !(math.IsInf(t.Lower, -1) && math.IsInf(t.Upper, 1)) &&
		(t.sd > 0) != (t.samples > 0) && !negativeZero(t.Lower) && !negativeZero(t.Upper)
}

func negativeZero(x float64) bool { return x == 0 && math.Signbit(x) }

// limit reads a number that may be infinite.
func (d *decoder) limit() float64 {
	x := math.Float64frombits(d.uint())
	d.bad = d.bad || math.IsNaN(x)
	return x
}

// sorted returns the tallies in ascending order, so that sums over them don't depend
// on the order in which they came.
func (c *Counts) sorted() []tally {
	out := slices.Clone(c.seen)
	slices.SortFunc(out, compare)
	return out
}

// compare orders outcomes.
func compare(a, b tally) int {
	x, y := [4]float64{a.Lower, a.Upper, a.sd, a.samples}, [4]float64{b.Lower, b.Upper, b.sd, b.samples}
	return slices.Compare(x[:], y[:])
}

// Points are encoded as a version, what is learned and spent, the origin, the number of
// rows, the rows and their weights.
const (
	pointsVersion = 1
	pointsHead    = 3 + 2*8
	rowBytes      = 4 * 8
	mostRows      = 1 << 16
)

// AppendBinary appends the encoding of p to b.
func (p *Points) AppendBinary(b []byte) []byte {
	b = append(b, pointsVersion, flag(p.learned), flag(p.spent))
	b = appendFloats(b, p.origin)
	b = appendUint(b, uint64(len(p.rows)))
	for i := range p.rows {
		at := &p.rows[i]
		b = appendFloats(b, at.r, at.first, at.step)
		b = appendUint(b, uint64(at.count))
	}
	return appendFloats(b, p.weights...)
}

// DecodePoints reads what AppendBinary wrote; all of b.
func DecodePoints(b []byte) (Points, error) {
	if len(b) < pointsHead || b[0] != pointsVersion || b[1] > 1 || b[2] > 1 {
		return Points{}, fmt.Errorf("decode points of %d bytes: %w", len(b), errState)
	}
	d := decoder{rest: b[3:]}
	p := Points{learned: b[1] == 1, spent: b[2] == 1, origin: d.float()}
	rows := d.count()
	if rows < 0 || rows > mostRows || int64(len(d.rest)) < rows*rowBytes {
		return Points{}, fmt.Errorf("decode %d rows in %d bytes: %w", rows, len(b), errState)
	}
	total := 0
	for range rows {
		at := row{r: d.least(), first: d.float(), step: d.least()}
		count := d.count()
		if count < 1 || count > mostInRow {
			return Points{}, fmt.Errorf("decode a row of %d points: %w", count, errState)
		}
		at.count = int(count)
		total += at.count
		p.rows = append(p.rows, at)
	}
	if len(d.rest) != 8*total {
		return Points{}, fmt.Errorf("decode %d points from %d bytes: %w", total, len(d.rest), errState)
	}
	for range total {
		p.weights = append(p.weights, d.least())
	}
	if d.bad {
		return Points{}, fmt.Errorf("decode points: %w", errState)
	}
	return p, nil
}

func flag(b bool) byte {
	if b {
		return 1
	}
	return 0
}
