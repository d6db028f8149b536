package modelcheck

import "math"

// axis is a number of a process that is to be fitted, by its logarithm x.
type axis struct {
	lo, hi float64
	set    func(p *process, x float64)
}

// maxAxes is how many numbers are fitted at most: a variance, a time and r.
const maxAxes = 3

// vertex is a process of given logarithms and its log-likelihood.
type vertex struct {
	x     [maxAxes]float64
	value float64
}

// fit returns the process with the greatest log-likelihood in a box, the numbers without an
// axis being those of p.
//
// A likelihood may have several maxima, as of a level that follows each reading and of one
// that drifts under noise. So simplices climb from all that a grid shows
// along the first axis, of step 1/2 for up to two numbers, else 1; the best then once more
// from where it came to lie flat.
func (h *history) fit(p process, axes ...axis) (process, float64) {
	c := climb{h: h, p: p, axes: axes, step: 0.5}
	if len(axes) == maxAxes {
		c.step = 1
	}
	top := vertex{value: math.Inf(-1)}
	for _, v := range c.starts() {
		if v = c.rise(v); v.value > top.value {
			top = v
		}
	}
	top = c.rise(top)
	c.at(top.x)
	return c.p, top.value
}

// climb looks for the maximum of one likelihood.
type climb struct {
	h    *history
	p    process // as last looked at
	axes []axis
	step float64 // of the grid
}

// at returns the vertex at x, brought back into the box.
func (c *climb) at(x [maxAxes]float64) vertex {
	for i := range c.axes {
		a := &c.axes[i]
		x[i] = math.Max(a.lo, math.Min(a.hi, x[i]))
		a.set(&c.p, x[i])
	}
	return vertex{x, c.h.logLikelihood(&c.p)}
}

// starts returns the best of each slice of the grid across the first axis that is not below its
// neighbours.
func (c *climb) starts() []vertex {
	if len(c.axes) == 0 {
		return []vertex{c.at([maxAxes]float64{})}
	}
	var slices, starts []vertex
	for _, x := range c.axes[0].grid(c.step) {
		slices = append(slices, c.best(1, [maxAxes]float64{x}))
	}
	for i, v := range slices {
		if v.value >= slices[max(0, i-1)].value && v.value >= slices[min(len(slices)-1, i+1)].value {
			starts = append(starts, v)
		}
	}
	return starts
}

// best returns the best of the grid across the axes from n on, the others being at x.
func (c *climb) best(n int, x [maxAxes]float64) vertex {
	if n == len(c.axes) {
		return c.at(x)
	}
	top := vertex{value: math.Inf(-1)}
	for _, x[n] = range c.axes[n].grid(c.step) {
		if v := c.best(n+1, x); v.value > top.value {
			top = v
		}
	}
	return top
}

// grid returns points from end to end, at most a step apart.
func (a *axis) grid(step float64) []float64 {
	parts := math.Ceil((a.hi - a.lo) / step)
	points := make([]float64, int(parts)+1)
	for i := range points {
		points[i] = a.lo + (a.hi-a.lo)*float64(i)/parts
	}
	return points
}

// rise climbs from a vertex by a simplex, until it is smaller than 1e-4 and lies flat to 1e-6, or
// has taken 400 turns (Nelder & Mead 1965, Computer Journal 7, 308-313, from memory).
func (c *climb) rise(from vertex) vertex {
	n := len(c.axes)
	var room [maxAxes + 1]vertex
	s := room[:n+1] // the best first
	s[0] = from
	for i := range n {
		x := from.x
		if x[i] += c.step / 2; x[i] > c.axes[i].hi {
			x[i] -= c.step
		}
		s[i+1] = c.at(x)
	}
	for range 400 {
		order(s)
		if spread(s) < 1e-4 && s[0].value-s[n].value < 1e-6 {
			break
		}
		c.turn(s)
	}
	order(s)
	return s[0]
}

// turn replaces the worst vertex of an ordered simplex, or draws all towards the best.
func (c *climb) turn(s []vertex) {
	n := len(s) - 1
	worst := &s[n]
	var centre [maxAxes]float64
	for _, v := range s[:n] {
		for i := range n {
			centre[i] += v.x[i] / float64(n)
		}
	}
	beyond := func(times float64) vertex {
		x := centre
		for i := range n {
			x[i] += times * (centre[i] - worst.x[i])
		}
		return c.at(x)
	}
	reflected := beyond(1)
	switch {
	case reflected.value > s[0].value:
		if further := beyond(2); further.value > reflected.value {
			reflected = further
		}
	case reflected.value > s[n-1].value:
	case reflected.value > worst.value:
		reflected = beyond(0.5)
	default:
		reflected = beyond(-0.5)
	}
	if reflected.value > worst.value {
		*worst = reflected
		return
	}
	for k := 1; k <= n; k++ {
		x := s[k].x
		for i := range n {
			x[i] = (x[i] + s[0].x[i]) / 2
		}
		s[k] = c.at(x)
	}
}

// order brings the best vertex first.
func order(s []vertex) {
	for i := 1; i < len(s); i++ {
		for k := i; k > 0 && s[k].value > s[k-1].value; k-- {
			s[k], s[k-1] = s[k-1], s[k]
		}
	}
}

// spread is how far a simplex reaches from its best vertex along an axis.
func spread(s []vertex) float64 {
	far := 0.0
	for _, v := range s[1:] {
		for i := range v.x {
			far = math.Max(far, math.Abs(v.x[i]-s[0].x[i]))
		}
	}
	return far
}
