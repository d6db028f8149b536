package posterior

import "fmt"

// An encoded Filter begins with its version, its number of states, the form of
// its motion and whether the level is vague, a byte each; see encode.go.
const (
	filterVersion = 1
	filterHead    = 4
	motionFloats  = 5
	stateFloats   = 6
)

// AppendBinary appends the encoding of f, but for an account, to b.
func (f *Filter) AppendBinary(b []byte) []byte {
	vague := byte(0)
	if f.vague {
		vague = 1
	}
	b = append(b, filterVersion, byte(f.n), byte(f.motion.Form), vague)
	m := &f.motion
	b = appendFloats(b, m.Walk, m.Wander, m.Mean, m.Variance, m.Rate)
	for i := range f.n {
		p := &f.moves[i]
		b = appendFloats(b, f.mean[i].Hi, f.mean[i].Lo, f.d[i], p.Variance, p.Diffusion, p.Rate)
	}
	return appendFloats(b, f.u...)
}

// DecodeFilter reads what AppendBinary wrote; all of b.
func DecodeFilter(b []byte) (Filter, error) {
	if len(b) < filterHead || b[0] != filterVersion || MotionForm(b[2]) > MotionReverting || b[3] > 1 {
		return Filter{}, fmt.Errorf("decode filter of %d bytes: %w", len(b), errState)
	}
	f := Filter{motion: Motion{Form: MotionForm(b[2])}, vague: b[3] == 1}
	n := int(b[1])
	if n < f.first() || n > MaxStates || len(b) != filterHead+8*(motionFloats+stateFloats*n+n*(n-1)/2) {
		return Filter{}, fmt.Errorf("decode filter of %d states in %d bytes: %w", n, len(b), errState)
	}
	d := decoder{rest: b[filterHead:]}
	m := &f.motion
	m.Walk, m.Wander, m.Mean, m.Variance, m.Rate = d.least(), d.least(), d.float(), d.least(), d.least()
	f.resize(n)
	for i := range n {
		f.mean[i], f.d[i] = levelOf(d.pair()), d.least()
		f.moves[i] = Process{d.least(), d.least(), d.least()}
	}
	for i := range f.u {
		f.u[i] = d.float()
	}
	if d.bad {
		return Filter{}, fmt.Errorf("decode filter: %w", errState)
	}
	return f, nil
}

// least reads a number that is at least 0.
func (d *decoder) least() float64 {
	x := d.float()
	d.bad = d.bad || x < 0
	return x
}
