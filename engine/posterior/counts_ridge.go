package posterior

import "math"

// A ridge is a posterior in which eta, given r, is known far better than without r: many
// readings show one value, few its neighbour, which ties the distance of eta from the
// edge between them to r. Then the layers of a rule that resolves the weight of r stand
// farApart like the teeth of a comb, and a tail of eta, as a function of r, is a step. So the
// tail is interpolated between the layers, not as it is but as the z of the standard
// normal with the same tail: if location and scale of a layer change with ln r in
// proportion, z is as smooth in it as they are. Derived for this package.
type ridge struct {
	gaps   []gap
	layers []int // of the nodes: the index in layers.all
	whole  float64
}

const (
	farApart  = 3   // how far a flank may move between layers, in units of its own scale
	flank     = 4   // where h has fallen by this much
	relevant  = 32  // weights of e^-32 of the top and below don't matter
	mostSteps = 256 // parts of a gap
	perRule   = 4   // how much z may change in one application of the Gauss rule
)

// newRidge returns the ridge, or nil where the layers are dense enough to be summed.
func newRidge(nodes []ruled, index []int, all []layer, gain float64) *ridge {
	g := &ridge{gaps: cellsOf(nodes), layers: index}
	needed := false
	for i := range g.gaps {
		c := &g.gaps[i]
		if a, b := index[c.first+1], index[c.first+2]; a >= 0 && b >= 0 && math.Max(c.f[1], c.f[2]) > -relevant {
			needed = needed || all[a].moves(&all[b], gain)
		}
		g.whole += c.within(1)
	}
	if !needed {
		return nil
	}
	return g
}

// moves tells whether a flank moves between the layers by much more than its own scale.
func (k *layer) moves(next *layer, gain float64) bool {
	for _, s := range [2]side{lower, upper} {
		x, scale := k.flank(s)
		y, other := next.flank(s)
		noise := k.noise / gain / flank
		if math.Abs(y-x) > farApart*math.Hypot(math.Min(scale, other), noise) {
			return true
		}
	}
	return false
}

// flank returns where the density has fallen by e^-flank on a side, and in what distance
// it falls by 1/e there.
func (k *layer) flank(s side) (x, scale float64) {
	if k.hill == nil {
		z := math.Sqrt(2 * flank)
		return k.mean + float64(s)*z*k.sd, k.sd / z
	}
	x = k.hill.fallen(s, flank)
	return x, math.Abs(k.hill.fallen(s, flank+2)-x) / 2
}

// fallen returns where h has fallen by drop on a side, nearly.
func (g *hill) fallen(s side, drop float64) float64 {
	near, far := g.at, g.stretches[len(g.stretches)-1].hi
	if s == lower {
		far = g.stretches[0].lo
	}
	for range 40 {
		m := near + (far-near)/2
		if m == near || m == far {
			break
		}
		if g.log(m) > -drop {
			near = m
		} else {
			far = m
		}
	}
	return far
}

// tail returns the tail of the mixture.
func (g *ridge) tail(all []layer, d, gain float64, s side) float64 {
	z := make([]float64, len(all))
	for i := range all {
		z[i] = all[i].z(d, gain, s)
	}
	sum := 0.0
	for i := range g.gaps {
		c := &g.gaps[i]
		if math.Max(c.f[1], c.f[2]) < -relevant-12 {
			continue
		}
		sum += c.mean(g.around(c, z))
	}
	return sum / g.whole
}

// around returns the z of the four layers about a gap; of layers that weigh nothing
// that of the next.
func (g *ridge) around(c *gap, z []float64) (out [4]float64) {
	for k := range out {
		if i := g.layers[c.first+k]; i >= 0 {
			out[k] = z[i]
		} else {
			out[k] = math.NaN()
		}
	}
	for k := 1; k >= 0; k-- {
		if math.IsNaN(out[k]) {
			out[k] = out[k+1]
		}
	}
	for k := 2; k < 4; k++ {
		if math.IsNaN(out[k]) {
			out[k] = out[k-1]
		}
	}
	return out
}

// mean integrates the weight times the normal tail beyond z over the gap.
func (c *gap) mean(z [4]float64) float64 {
	if math.IsNaN(z[1]) || math.Min(z[1], z[2]) > 39 {
		return 0
	}
	steps := 1 + int(math.Min(mostSteps-1, math.Abs(z[1]-z[2])/perRule))
	width := 1 / float64(steps)
	sum := 0.0
	for i := range steps {
		for k, x := range legendreNodes {
			t := (float64(i) + x) * width
			sum += legendreWeights[k] * math.Exp(c.log(t)) * math.Erfc(cubic(&z, t)*sqrtHalf.hi)
		}
	}
	return sum * width * c.width / 2
}

// z returns the z of the standard normal whose upper tail is the layer's on side s.
func (k *layer) z(d, gain float64, s side) float64 {
	l := k.logTail(d, gain, s)
	if l < -math.Ln2 {
		return zOf(l)
	}
	return -zOf(math.Min(-math.Ln2, k.logTail(d, gain, -s)))
}

// zOf returns the z whose upper tail is exp(l), l <= -ln 2: by quantile, or where the tail is
// out of range by its first asymptotic term (DLMF 7.12.1) turned round.
func zOf(l float64) float64 {
	if l > -600 {
		return -normalQuantile(math.Exp(l))
	}
	z := math.Sqrt(-2 * l)
	for range 3 {
		z = math.Sqrt(-2 * (l + math.Log(z) + logRootTwoPi))
	}
	return z
}
