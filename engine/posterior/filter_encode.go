package posterior

import (
	"encoding/binary"
	"errors"
	"math"
)

// filterVersion is the first byte of an encoded Filter.
const filterVersion = 1

// AppendBinary encodes f, but for an account, with all bits.
func (f *Filter) AppendBinary(b []byte) []byte {
	vague := byte(0)
	if f.vague {
		vague = 1
	}
	b = append(b, filterVersion, byte(f.n), byte(f.motion.Form), vague)
	m := &f.motion
	b = appendNumbers(b, m.Walk, m.Wander, m.Mean, m.Variance, m.Rate)
	for i := range f.n {
		p := &f.moves[i]
		b = appendNumbers(b, f.mean[i].Hi, f.mean[i].Lo, f.d[i], p.Variance, p.Diffusion, p.Rate)
	}
	return appendNumbers(b, f.u...)
}

func appendNumbers(b []byte, numbers ...float64) []byte {
	for _, x := range numbers {
		b = binary.BigEndian.AppendUint64(b, math.Float64bits(x))
	}
	return b
}

var errFilter = errors.New("the filter's state is malformed")

// DecodeFilter decodes what AppendBinary encoded.
func DecodeFilter(b []byte) (Filter, error) {
	const head, ofMotion, ofState = 4, 5, 6
	if len(b) < head || b[0] != filterVersion || MotionForm(b[2]) > MotionReverting || b[3] > 1 {
		return Filter{}, errFilter
	}
	f := Filter{motion: Motion{Form: MotionForm(b[2])}, vague: b[3] == 1}
	n := int(b[1])
	b = b[head:]
	if n < f.first() || n > MaxStates || len(b) != 8*(ofMotion+ofState*n+n*(n-1)/2) {
		return Filter{}, errFilter
	}
	next := func() float64 {
		x := math.Float64frombits(binary.BigEndian.Uint64(b))
		b = b[8:]
		return x
	}
	m := &f.motion
	m.Walk, m.Wander, m.Mean, m.Variance, m.Rate = next(), next(), next(), next(), next()
	for i := range n {
		f.push()
		f.mean[i], f.d[i] = Level{next(), next()}, next()
		f.moves[i] = Process{next(), next(), next()}
	}
	for i := range f.u {
		f.u[i] = next()
	}
	return f, nil
}
