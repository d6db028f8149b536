package posterior

import (
	"fmt"
	"math"
)

// gridVersion is that of the encoding: version; motion's form and five numbers; bias;
// flags; origin, step, first point, number of points; log densities; with a bias means
// and variances.
const (
	gridVersion   = 1
	gridHeadBytes = 1 + 1 + 5*8 + 2*8 + 1 + 5*8
)

// Flags of the encoding.
const (
	openBelow = 1 << iota
	openAbove
	withBias
)

// AppendBinary appends the encoding of g to b: 99 bytes and 8 for each point, 24 with a
// bias.
func (g *Grid) AppendBinary(b []byte) []byte {
	l, m := &g.field, &g.motion
	flags := byte(0)
	if l.open[0] {
		flags |= openBelow
	}
	if l.open[1] {
		flags |= openAbove
	}
	if l.mean != nil {
		flags |= withBias
	}
	b = append(b, gridVersion, byte(m.Form))
	b = appendFloats(b, m.Walk, m.Wander, m.Mean, m.Variance, m.Rate, g.bias.Mean, g.bias.SD)
	b = append(b, flags)
	b = appendFloats(b, l.origin.Hi, l.origin.Lo, l.step)
	b = appendUint(b, uint64(l.first))
	b = appendUint(b, uint64(len(l.logs)))
	b = appendFloats(b, l.logs...)
	b = appendFloats(b, l.mean...)
	return appendFloats(b, l.variance...)
}

// DecodeGrid reads what AppendBinary wrote; all of b.
func DecodeGrid(b []byte) (Grid, error) {
	if len(b) < gridHeadBytes || b[0] != gridVersion || b[1] > byte(MotionReverting) {
		return Grid{}, fmt.Errorf("decode grid of %d bytes: %w", len(b), errState)
	}
	d := decoder{rest: b[2:]}
	g := Grid{motion: Motion{MotionForm(b[1]), d.float(), d.float(), d.float(), d.float(), d.float()}}
	g.bias = Bias{d.float(), d.float()}
	flags := d.rest[0]
	d.rest = d.rest[1:]
	l := &g.field
	l.origin, l.step = levelOf(d.pair()), d.float()
	l.first = int(int64(d.uint()))
	n := d.uint()
	l.open = [2]bool{flags&openBelow != 0, flags&openAbove != 0}
	columns := uint64(1)
	if flags&withBias != 0 {
		columns = 3
	}
	if flags >= 2*withBias || n > 1<<24 || uint64(len(d.rest)) != 8*n*columns {
		return Grid{}, fmt.Errorf("decode grid of %d bytes: %w", len(b), errState)
	}
	l.logs = d.floats(int(n))
	if columns == 3 {
		l.mean, l.variance = d.floats(int(n)), d.floats(int(n))
	}
	if d.bad || !g.valid() {
		return Grid{}, fmt.Errorf("decode grid: %w", errState)
	}
	return g, nil
}

// floats reads n numbers.
func (d *decoder) floats(n int) []float64 {
	if n == 0 {
		return nil
	}
	all := make([]float64, n)
	for i := range all {
		all[i] = d.float()
	}
	return all
}

// valid tells whether g can be one that was written.
func (g *Grid) valid() bool {
	l := &g.field
	if !(l.step > 0) || !(g.bias.SD >= 0) || l.flat() && (!l.open[0] || !l.open[1]) {
		return false
	}
	if !l.flat() && (len(l.logs) < 9 || (l.mean != nil) != (g.bias.SD > 0)) {
		return false
	}
	for _, v := range l.variance {
		if !(v >= 0) || math.IsInf(v, 0) {
			return false
		}
	}
	return true
}
