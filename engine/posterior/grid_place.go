package posterior

import (
	"math"
	"slices"
)

// times returns l times the likelihood, on l's own points if these serve, else on
// others, laid where the product is.
func (l *lattice) times(k *likelihood) lattice {
	open := [2]bool{l.open[0] && !k.exact && math.IsInf(k.lower, -1), l.open[1] && !k.exact && math.IsInf(k.upper, 1)}
	if l.flat() {
		open = [2]bool{!k.exact && math.IsInf(k.lower, -1), !k.exact && math.IsInf(k.upper, 1)}
		return l.place(k, open, nil)
	}
	product := *l
	product.logs, product.open = k.multiply(l), open
	if !product.serves(l, k) {
		return l.place(k, open, product.logs)
	}
	product.trim()
	return product
}

// serves tells whether the product of l and the likelihood on l's points is all there
// is of it, and resolved.
func (product *lattice) serves(l *lattice, k *likelihood) bool {
	top := product.highest()
	if product.goesOn(lower, top) || product.goesOn(upper, top) || l.open != product.open {
		return false
	}
	for _, x := range k.beyond(l) {
		if l.at(x)+k.log(x) > top-depthServed && !product.openAt(x) {
			return false
		}
	}
	hidden := k.hidden(product, func(x float64) float64 { return l.at(x) + k.log(x) }, top)
	if math.IsInf(hidden, -1) && product.resolves(1, top) {
		return true
	}
	// More points would be cut down again.
	i, j := product.served(max(top, hidden), depthServed)
	return j-i > mostPoints/2
}

// goesOn tells whether there may be more beyond the last point on a side that isn't open:
// the density there isn't deep yet, or rises outwards to what may be another maximum.
func (l *lattice) goesOn(s side, top float64) bool {
	v := l.logs
	last, inner, open := len(v)-1, max(0, len(v)-3), l.open[1]
	if s == lower {
		last, inner, open = 0, min(2, len(v)-1), l.open[0]
	}
	return !open && (v[last] > top-depthServed || v[last] > top-depthKept && v[last] > v[inner])
}

// openAt tells whether x lies beyond the points on a side that is open.
func (l *lattice) openAt(x float64) bool {
	return l.open[0] && x < l.x(0) || l.open[1] && x > l.x(len(l.logs)-1)
}

// placed is a product that a lattice is to be laid for.
type placed struct {
	f    func(x float64) float64
	open [2]bool
}

// place lays points for l times the likelihood, known at l's own points. It searches
// for the highest and brackets what isn't too deep below, first among l's points and the
// likelihood's marks, then among ever finer points of its own: so a reading that
// is much sharper than the belief or far from it is found. Steps are l's times
// powers of two, so that its points need no interpolation.
func (l *lattice) place(k *likelihood, open [2]bool, known []float64) lattice {
	p := placed{func(x float64) float64 { return l.at(x) + k.log(x) }, open}
	lo, hi := p.bracket(l, k, known)
	b := l.bare(0, 0)
	b.open = open
	if l.flat() {
		b.step = powerOfTwo(k.parts[0].sd)
	}
	for range 60 {
		b.lay(lo, hi, &p)
		top := b.highest()
		i, j := p.within(&b, top)
		if j-i >= fewestPoints && !b.wider(top, &lo, &hi) {
			break
		}
		if j-i < fewestPoints {
			lo, hi = max(lo, b.x(i-1)), min(hi, b.x(j))
		}
	}
	for len(b.logs) <= mostPoints {
		if top := b.highest(); b.resolves(1, top) && math.IsInf(k.hidden(&b, p.f, top), -1) {
			break
		}
		b.halve(&p)
	}
	if l.mean != nil {
		b.mean, b.variance = make([]float64, len(b.logs)), make([]float64, len(b.logs))
		for i := range b.logs {
			b.mean[i], b.variance[i] = l.biasAt(b.x(i))
		}
	}
	b.trim()
	return b
}

// bracket returns where what isn't too deep below the highest lies, as far as it can be
// told from l's points and the marks.
func (p *placed) bracket(l *lattice, k *likelihood, known []float64) (lo, hi float64) {
	type point struct{ x, log float64 }
	all := make([]point, 0, len(known)+64)
	for i, v := range known {
		all = append(all, point{l.x(i), v})
	}
	for _, x := range k.marks(l, nil) {
		all = append(all, point{x, p.f(x)})
	}
	slices.SortFunc(all, func(a, b point) int {
		if a.x < b.x {
			return -1
		}
		return 1
	})
	top := lowest
	for _, a := range all {
		top = max(top, a.log)
	}
	i, j := 0, len(all)-1
	for !p.open[0] && all[i].log < top-depthKept {
		i++
	}
	for !p.open[1] && all[j].log < top-depthKept {
		j--
	}
	return all[max(0, i-1)].x, all[min(len(all)-1, j+1)].x
}

// lay tabulates the product from lo to hi by a step that gives at least the fewest
// points and fewer than twice as many.
func (b *lattice) lay(lo, hi float64, p *placed) {
	for (hi-lo)/b.step >= 2*(fewestPoints+64) {
		b.step *= 2
	}
	for b.step > math.SmallestNonzeroFloat64 && (hi-lo)/b.step < fewestPoints+64 && hi-lo > 0 {
		b.step /= 2
	}
	b.first = int(math.Floor(lo / b.step))
	b.logs = make([]float64, int(math.Ceil(hi/b.step))-b.first+1)
	for i := range b.logs {
		b.logs[i] = p.f(b.x(i))
	}
}

// within returns the first point and the one after the last that aren't too deep.
func (p *placed) within(b *lattice, top float64) (i, j int) {
	i, j = 0, len(b.logs)
	for !p.open[0] && b.logs[i] < top-depthKept {
		i++
	}
	for !p.open[1] && b.logs[j-1] < top-depthKept {
		j--
	}
	return i, j
}

// wider moves lo and hi outwards where b goes on.
func (b *lattice) wider(top float64, lo, hi *float64) bool {
	width, moved := *hi-*lo, false
	if b.goesOn(lower, top) {
		*lo, moved = *lo-width/2, true
	}
	if b.goesOn(upper, top) {
		*hi, moved = *hi+width/2, true
	}
	return moved
}

// halve halves the step.
func (b *lattice) halve(p *placed) {
	fine := make([]float64, 2*len(b.logs)-1)
	b.step, b.first = b.step/2, 2*b.first
	for i := range fine {
		if i%2 == 0 {
			fine[i] = b.logs[i/2]
		} else {
			fine[i] = p.f(b.x(i))
		}
	}
	b.logs = fine
}
