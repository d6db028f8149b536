package posterior

import (
	"math"

	"gonum.org/v1/gonum/floats"
)

// source is what a lattice is summed over: masses at every stride-th point, with what
// lies beyond its ends.
type source struct {
	first, stride int // of its points, counted from the lattice's first
	top           float64
	mass          []float64 // times exp(-top)
	moment        []float64 // mass times the mean of the bias from middle: nil without
	square        []float64 // mass times its mean square
	middle        float64
	reach         int // how far away masses count, in points of the lattice
}

// stride returns how many points apart those may be that a sum with a normal density
// of standard deviation sd, at least a step, is taken over: both together need resolve
// their product only.
func (l *lattice) stride(sd, top float64) int {
	stride := 1
	for 2*stride <= 64 && float64(2*stride)*l.step <= 0.8*sd && l.resolves(2*stride, top) {
		stride *= 2
	}
	return stride
}

// source returns l as what is spread by a variance q, with as much of what lies beyond
// its ends as is within reach and counts; nothing if whole, when all mass is in the points.
func (l *lattice) source(q float64, reach int, whole bool) source {
	top, sd := l.highest(), math.Sqrt(q)
	s := source{top: top, stride: l.stride(sd, top)}
	low, high, n := l.end(lower), l.end(upper), len(l.logs)
	floor := top - depthKept - depthServed
	below, above := 0, 0
	for !whole && below < reach && low.at(l.x(-below-1)) > floor {
		below++
	}
	for !whole && above < reach && high.at(l.x(n+above)) > floor {
		above++
	}
	if l.open[0] {
		below = 2 * reach // what comes out is asked for that far away, too
	}
	if l.open[1] {
		above = 2 * reach
	}
	s.first = -below
	s.mass = make([]float64, (below+n+above+s.stride-1)/s.stride)
	if l.mean != nil {
		s.moment, s.square = make([]float64, len(s.mass)), make([]float64, len(s.mass))
		s.middle = l.mean[n/2]
	}
	scale := float64(s.stride) * l.step / math.Sqrt(2*math.Pi*q)
	steepest, before := 0.0, math.NaN()
	for t := range s.mass {
		i := s.first + t*s.stride
		log := 0.0
		switch {
		case i < 0:
			log = low.at(l.x(i))
		case i >= n:
			log = high.at(l.x(i))
		default:
			log = l.logs[i]
		}
		if change := math.Abs(log - before); change > steepest && log > top-depthKept {
			steepest = change
		}
		before = log
		s.mass[t] = math.Exp(log-top) * scale
		if s.moment != nil {
			mean, variance := l.biasNear(i)
			mean -= s.middle
			s.moment[t], s.square[t] = s.mass[t]*mean, s.mass[t]*(variance+mean*mean)
		}
	}
	// What comes out at x is made of what lies about x + q d ln p / dx.
	tilt := q / (l.step * l.step) * steepest / float64(s.stride)
	s.reach = int(min(tilt+7.5*sd/l.step+1, float64(below+n+above+reach)))
	return s
}

// biasNear is biasAt for a point, or one as far beyond the ends.
func (l *lattice) biasNear(i int) (mean, variance float64) {
	if i >= 0 && i < len(l.logs) {
		return l.mean[i], l.variance[i]
	}
	return l.biasAt(l.x(i))
}

// convolve adds a normal step of variance q, at least the square of the lattice's
// step: the sum over points of their masses times the normal density. All terms
// are positive, so tails keep their relative accuracy. What comes out is tabulated as
// coarsely as its own width allows.
func (l *lattice) convolve(q float64, whole bool) {
	sd := math.Sqrt(q)
	reach := int(math.Ceil(10*sd/l.step)) + 8
	s := l.source(q, reach, whole)
	out := l.output(sd, reach)
	rows := newNormalRows(l.step/sd, s.reach, s.stride)
	offset := out.first*out.stride - l.first - s.first
	s.fill(&out, rows, offset)
	*l = out.lattice
}

// normalRows is the normal density at the distances that sums over every stride-th point
// meet: one row for each place of the point that is summed for between two others.
type normalRows struct {
	stride, half int
	rows         [][]float64 // row[u + half] is exp(-(stride u - place)^2 h^2 / 2)
}

// newNormalRows returns exp(-(i h)^2 / 2) for |i| <= reach by the recurrence of its ratios:
// relative error i^2 units in the last place.
func newNormalRows(h float64, reach, stride int) normalRows {
	half := reach/stride + 1
	width := 2*half + 1
	k := normalRows{stride: stride, half: half, rows: make([][]float64, stride)}
	all := make([]float64, stride*width)
	for place := range k.rows {
		k.rows[place] = all[place*width : (place+1)*width]
	}
	value, ratio, change := 1.0, math.Exp(-h*h/2), math.Exp(-h*h)
	for i := 0; i <= half*stride; i++ {
		// i = stride u - place, and -i
		u := (i + stride - 1) / stride
		k.rows[u*stride-i][u+half] = value
		u = -(i / stride)
		k.rows[i+u*stride][u+half] = value
		value *= ratio
		ratio *= change
	}
	return k
}

// output is where a convolution is tabulated: the inner points, which cover the
// lattice before it, and more on either side while what comes out isn't too deep.
type output struct {
	lattice
	stride, inner int
}

// output lays a lattice of a step that is a power of two times l's, reaching as many of
// l's points beyond either side.
func (l *lattice) output(sd float64, reach int) output {
	o := output{stride: 1}
	width := math.Hypot(float64(len(l.logs))*l.step, 19*sd)
	for float64(4*o.stride)*l.step <= sd && width > float64(o.stride*(fewestPoints+64))*l.step {
		o.stride *= 2
	}
	low := floorDiv(l.first-reach, o.stride)
	high := floorDiv(l.first+len(l.logs)-1+reach, o.stride) + 1
	o.lattice = l.bare(low, high-low)
	o.step *= float64(o.stride)
	o.inner = reach / o.stride
	return o
}

// floorDiv divides by n > 0, rounding down.
func floorDiv(a, n int) int {
	q := a / n
	if a%n < 0 {
		q--
	}
	return q
}

// fill tabulates the convolution in out, point i of which is offset + i stride points
// after s's first. The inner points come first; then outwards from them until it is too
// deep.
func (s *source) fill(out *output, k normalRows, offset int) {
	top := math.Inf(-1)
	at := func(i int) {
		s.value(&out.lattice, i, offset+i*out.stride, &k)
		top = max(top, out.logs[i])
	}
	low, high := out.inner, len(out.logs)-out.inner
	for i := low; i < high; i++ {
		at(i)
	}
	for low > 0 && (out.open[0] || out.logs[low] > top-depthKept) {
		low--
		at(low)
	}
	for high < len(out.logs) && (out.open[1] || out.logs[high-1] > top-depthKept) {
		at(high)
		high++
	}
	out.cut(low, high)
}

// nothing stands for a sum that is too small for a double.
const nothing = 1e-300

// value tabulates the convolution at point i of out, which is p points after s's first.
//
// The bias given a point is a mixture of what it was given those that the level may
// have come from, and is held as the normal of the same mean and variance. It is one if
// no reading but exact ones was met.
func (s *source) value(out *lattice, i, p int, k *normalRows) {
	whole := floorDiv(p, k.stride)
	row := k.rows[p-whole*k.stride]
	lo, hi := max(0, whole-k.half), min(len(s.mass), whole+k.half+1)
	var weights []float64
	sum := 0.0
	if lo < hi {
		weights = row[lo-whole+k.half : hi-whole+k.half]
		sum = floats.Dot(s.mass[lo:hi], weights)
	}
	out.logs[i] = s.top + math.Log(max(sum, nothing))
	switch {
	case out.mean == nil:
	case sum < nothing:
		near := min(max(whole, 0), len(s.mass)-1)
		m := moments{max(s.mass[near], nothing), s.moment[near], s.square[near]}
		out.mean[i], out.variance[i] = m.about(s.middle)
	default:
		m := moments{sum, floats.Dot(s.moment[lo:hi], weights), floats.Dot(s.square[lo:hi], weights)}
		out.mean[i], out.variance[i] = m.about(s.middle)
	}
}
