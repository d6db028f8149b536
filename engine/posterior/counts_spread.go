package posterior

import "math"

// The weight of r. With prior r^-worth exp(-worth guess^2 / 2 r^2) for ln r, cut off
// below a floor, and Z(r) the integral over eta of prior times likelihood, r is
// integrated over w in
//
//	r = floor + exp(w),   p(w) ~ r^-worth exp(-worth guess^2 / 2 r^2) Z(r) exp(w) / r,
//
// which vanishes exponentially at both ends whether there is a floor or not, so that
// the trapezoid rule on the line serves; see quadrature.go. Derived for this package.
type repeatabilities struct {
	e     *evidence
	noise Noise
	falls float64 // p(w) falls in the end as exp(-falls w)
	same  layer   // where readings don't depend on r, or at the floor
	small float64 // w below which r is the floor
	nodes []ruled
}

// ruled is a node of the rule over w.
type ruled struct {
	w, step   float64
	logWeight float64 // ln p(w), less a constant
	layer     layer
}

// nodesOf finds where p(w) matters and computes the layers there.
func (e *evidence) nodesOf(n Noise, falls float64) []ruled {
	s := &repeatabilities{e: e, noise: n, falls: falls, small: math.Inf(-1)}
	count := e.n
	for i := range e.tallies {
		count += float64(e.tallies[i].count)
	}
	switch {
	case !e.depends:
		s.same, s.small = e.layerAt(1, smooth), math.Inf(1)
	case n.Floor > 0:
		s.same, s.small = e.layerAt(n.Floor, smooth), math.Log(n.Floor)-math.Log(1e7*(count+n.Worth+1))
	}
	look := s.span(count)
	for _, part := range look.survey(s.logWeight).parts {
		s.resolve(part)
	}
	return s.nodes
}

// r returns r at w.
func (s *repeatabilities) r(w float64) float64 { return s.noise.Floor + math.Exp(w) }

// at returns the node at w, its layer as good as smooth says.
func (s *repeatabilities) at(w, smooth float64) ruled {
	r := s.r(w)
	l := s.same
	if w > s.small {
		l = s.e.layerAt(r, smooth)
	}
	l.r = r
	g := s.noise.Guess / r
	prior := -s.noise.Worth * (math.Log(r) + g*g/2)
	if s.noise.Floor > 0 {
		prior += w - math.Log(r)
	}
	return ruled{w: w, logWeight: prior + l.logMass, layer: l}
}

// logWeight returns ln p(w) to some 1e-2, which will do for finding where it matters.
func (s *repeatabilities) logWeight(w float64) float64 { return s.at(w, coarse).logWeight }

// coarse is how smooth polynomials must be in a search.
const coarse = 0.03

// span returns where p(w) may have its maxima. Below
//
//	r^2 = (worth guess^2 + S) / (worth + readings),
//
// p rises with r, as no reading's likelihood falls faster than 1 / r; and with a
// floor it rises until r - floor is the floor / (worth + readings). Derived for this
// package. The marks are the scales at which terms change their course.
func (s *repeatabilities) span(count float64) span {
	e, n := s.e, s.noise
	look := span{horizon: math.Inf(1), lo: math.Inf(1), hi: math.Inf(-1)}
	apart := math.Abs(e.average)
	for i := range e.tallies {
		t := &e.tallies[i]
		if width := t.Upper - t.Lower; !math.IsInf(width, 0) {
			look.add(s.mark(width))
		}
		for _, x := range [2]float64{t.Lower, t.Upper} {
			if !math.IsInf(x, 0) {
				apart = math.Max(apart, math.Abs(x))
			}
		}
	}
	if e.weight > 0 {
		sd := math.Sqrt((count + 1) / e.weight)
		apart = math.Max(apart, math.Abs(e.mean))
		look.add(s.mark(sd), s.mark(sd*math.Max(1, apart*math.Sqrt(e.weight))))
	}
	if apart > 0 {
		look.add(s.mark(apart))
	}
	least := n.Worth*n.Guess*n.Guess + e.squares
	if least > 0 {
		look.add(s.mark(math.Sqrt(least / (n.Worth + e.n))))
	}
	if n.Floor > 0 {
		look.add(s.mark(2 * n.Floor))
	}
	lowest := math.Log(n.Floor) - math.Log(n.Worth+count+2) - 1
	if r := math.Sqrt(least/(n.Worth+count+1)) - n.Floor; r > 0 {
		lowest = math.Max(lowest, math.Log(r)-1)
	}
	look.lo, look.fixed = lowest, true
	look.hi = math.Max(look.hi, lowest+1)
	return look
}

// mark returns w where r is at, or about the floor if that is above.
func (s *repeatabilities) mark(at float64) float64 {
	if at > s.noise.Floor {
		return math.Log(at - s.noise.Floor)
	}
	return math.Log(s.noise.Floor)
}

// mostRuled bounds the nodes of one part.
const mostRuled = 400

// resolve appends the nodes of a part: the step is halved until sums over even and
// odd ones agree to 1e-5, which makes the whole good to the square of that.
func (s *repeatabilities) resolve(r reach) {
	step := math.Max(1.3*r.step, (r.hi-r.lo)/mostRuled)
	if r.step > 0.15 { // a broad maximum, its width not asked for
		step = math.Max(step, 0.8)
	}
	first, last := math.Floor((r.lo-r.peak)/step), math.Ceil((r.hi-r.peak)/step)
	nodes := make([]ruled, 0, int(last-first)+1)
	for i := first; i <= last; i++ {
		nodes = append(nodes, s.at(r.peak+i*step, smooth))
	}
	for {
		odd := make([]ruled, 0, len(nodes))
		for i := range nodes[1:] {
			odd = append(odd, s.at(nodes[i].w+step/2, smooth))
		}
		a, b := total(nodes, r.height), total(odd, r.height)
		nodes = interleave(nodes, odd)
		step /= 2
		if math.Abs(a-b) < 1e-5*(a+b) || len(nodes) > mostRuled {
			break
		}
	}
	for i := range nodes {
		nodes[i].step = step
	}
	s.nodes = append(s.nodes, nodes...)
}

// total returns the sum of p(w) / exp(top).
func total(nodes []ruled, top float64) float64 {
	sum := 0.0
	for i := range nodes {
		sum += math.Exp(nodes[i].logWeight - top)
	}
	return sum
}

// interleave returns even and odd nodes in their order.
func interleave(even, odd []ruled) []ruled {
	out := make([]ruled, 0, len(even)+len(odd))
	for i := range even {
		out = append(out, even[i])
		if i < len(odd) {
			out = append(out, odd[i])
		}
	}
	return out
}

// layersOf returns the layers with weights that sum to 1, without those that weigh
// nothing, and for each node the index of its layer, or -1.
func layersOf(nodes []ruled) (out []layer, index []int) {
	top := math.Inf(-1)
	for i := range nodes {
		top = math.Max(top, nodes[i].logWeight)
	}
	sum := 0.0
	for i := range nodes {
		k := nodes[i].layer
		k.weight = nodes[i].step * math.Exp(nodes[i].logWeight-top)
		if k.weight < 1e-18 {
			index = append(index, -1)
			continue
		}
		sum += k.weight
		if n := len(out); n > 0 && k.hill != nil && k.hill == out[n-1].hill && k.r < out[n-1].r*(1+1e-6) {
			out[n-1].weight += k.weight
		} else {
			out = append(out, k)
		}
		index = append(index, len(out)-1)
	}
	for i := range out {
		out[i].weight /= sum
	}
	return out, index
}
