package posterior_test

import (
	"math"
	"slices"

	"leadline.example/engine/posterior"
)

// The oracle of counts: prior times likelihood, written down reading by reading, summed
// over a fine lattice of eta = level + bias (Simpson's rule in t, eta = centre + unit
// sinh t) and of ln r (composite Gauss-Legendre), found by scanning. It knows no
// concavity, no panels and no layers.

// said is a reading, count times.
type said struct {
	y           posterior.Indication
	sd, samples float64
	count       float64
}

// question is a declaration with readings.
type question struct {
	prior    posterior.Prior
	noise    posterior.Noise
	bias     posterior.Bias
	readings []said
}

// counts adds the readings to a Counts.
func (q *question) counts() *posterior.Counts {
	var c posterior.Counts
	for _, s := range q.readings {
		for range int(s.count) {
			c.Add(s.y, s.sd, s.samples)
		}
	}
	return &c
}

// logInterval is ln P(a < Z < b).
func logInterval(a, b float64) float64 {
	if a+b < 0 {
		a, b = -b, -a
	}
	if a < 0 {
		return math.Log1p(-math.Erfc(-a/math.Sqrt2)/2 - math.Erfc(b/math.Sqrt2)/2)
	}
	if math.Abs(b-a)*math.Max(1, b) < 1e-3 { // the density in the middle, with its second derivative
		m := (a + b) / 2
		return math.Log(b-a) - m*m/2 - math.Log(2*math.Pi)/2 + math.Log1p((b-a)*(b-a)*(m*m-1)/24)
	}
	top := logErfc(a / math.Sqrt2)
	if math.IsInf(b, 1) {
		return top - math.Ln2
	}
	return top - math.Ln2 + math.Log1p(-math.Exp(logErfc(b/math.Sqrt2)-top))
}

// log returns ln of prior times likelihood of eta and of ln r.
func (q *question) log(eta, r float64) float64 {
	sum := 0.0
	if !q.prior.Vague {
		z := (eta - q.prior.Mean - q.bias.Mean) / math.Hypot(q.prior.SD, q.bias.SD)
		sum -= z * z / 2
	}
	if n := q.noise; !n.Known && !n.Absent {
		sum -= n.Worth * (math.Log(r) + n.Guess*n.Guess/r/r/2)
	}
	for _, s := range q.readings {
		sigma := s.sd
		if sigma == 0 {
			sigma = r / math.Sqrt(s.samples)
		}
		if s.y.Exact() {
			z := (s.y.Lower - eta) / sigma
			sum -= s.count * (z*z/2 + math.Log(sigma))
			continue
		}
		sum += s.count * logInterval((s.y.Lower-eta)/sigma, (s.y.Upper-eta)/sigma)
	}
	return math.Max(sum, -1e200) // where the interval's ends round to the same number of sigmas
}

// lattice is where the oracle computes: eta at sinh t, weights of Simpson's rule, and r.
type lattice struct {
	centre, unit, first, step float64
	n                         int
	r, logR                   []float64 // and ln of the rule's weight
}

func (l *lattice) eta(i int) float64 {
	return l.centre + l.unit*math.Sinh(l.first+float64(i)*l.step)
}

// logJacobian is ln d eta / dt.
func (l *lattice) logJacobian(i int) float64 {
	return math.Log(l.unit * math.Cosh(l.first+float64(i)*l.step))
}

// gauss returns nodes and weights of the n-point Gauss-Legendre rule on [-1, 1], by
// Newton's method on the recurrence of the polynomials (DLMF 3.5(v), 18.9).
func gauss(n int) (x, w []float64) {
	for i := range n {
		t := -math.Cos(math.Pi * (float64(i) + 0.75) / (float64(n) + 0.5))
		var slope float64
		for range 50 {
			p, before := t, 1.0
			for k := 2; k <= n; k++ {
				p, before = (float64(2*k-1)*t*p-float64(k-1)*before)/float64(k), p
			}
			slope = float64(n) * (t*p - before) / (t*t - 1)
			t -= p / slope
		}
		x, w = append(x, t), append(w, 2/(1-t*t)/slope/slope)
	}
	return x, w
}

// rule sets composite Gauss nodes for ln r in [lo, hi].
func (l *lattice) rule(lo, hi float64, panels int) {
	x, w := gauss(6)
	l.r, l.logR = nil, nil
	for p := range panels {
		half := (hi - lo) / float64(panels) / 2
		middle := lo + half*float64(2*p+1)
		for i := range x {
			l.r = append(l.r, math.Exp(middle+half*x[i]))
			l.logR = append(l.logR, math.Log(half*w[i]))
		}
	}
}

// truth is the exact distribution of eta on a lattice.
type truth struct {
	q    *question
	l    lattice
	mass [][]float64 // by r and eta: shares, not yet with Simpson's weights
	eta  []float64
	all  []float64 // by eta alone, with Simpson's weights
	sum  float64
}

// fill computes the shares; it returns ln of the density of t by itself and of ln r.
func (t *truth) fill() (ofEta, ofR []float64) {
	l := &t.l
	logs := make([][]float64, len(l.r))
	jacobian := make([]float64, l.n)
	t.eta, t.all, t.sum = make([]float64, l.n), make([]float64, l.n), 0
	for i := range l.n {
		t.eta[i], jacobian[i] = l.eta(i), l.logJacobian(i)
	}
	ofEta, ofR = make([]float64, l.n), make([]float64, len(l.r))
	sums := make([]logSum, l.n)
	top := math.Inf(-1)
	for j, r := range l.r {
		var total logSum
		logs[j] = make([]float64, l.n)
		for i := range l.n {
			logs[j][i] = t.q.log(t.eta[i], r) + jacobian[i] + l.logR[j]
			total.add(logs[j][i])
			sums[i].add(logs[j][i])
			top = math.Max(top, logs[j][i])
		}
		ofR[j] = total.value() - l.logR[j]
	}
	t.mass = logs
	for j := range logs {
		for i := range logs[j] {
			logs[j][i] = math.Exp(logs[j][i] - top)
			t.all[i] += t.simpson(i) * logs[j][i]
			t.sum += t.simpson(i) * logs[j][i]
		}
	}
	for i := range sums {
		ofEta[i] = sums[i].value()
	}
	return ofEta, ofR
}

// simpson is the weight of point i; l.n is odd.
func (t *truth) simpson(i int) float64 {
	switch {
	case i == 0 || i == t.l.n-1:
		return t.l.step / 3
	case i%2 == 1:
		return t.l.step * 4 / 3
	}
	return t.l.step * 2 / 3
}

// matters returns where a density is within drop of its top.
func matters(f []float64, drop float64) (first, last int) {
	top := slices.Max(f)
	first, last = len(f), 0
	for i, v := range f {
		if v > top-drop {
			first, last = min(first, i), i
		}
	}
	return max(0, first-1), min(len(f)-1, last+1)
}

// solve finds the lattice in a few rounds of scanning, with so many points of eta and
// panels of ln r in the end, and one for each 1.5 of its range. What is left out is e^-34 (2e-15) of the density.
func (q *question) solve(points, panels int) *truth {
	t := &truth{q: q}
	lo, hi := q.scales()
	t.l = lattice{centre: q.centre(), unit: lo / 100, first: -60, step: 0.5, n: 241}
	floor := math.Inf(-1)
	if q.noise.Floor > 0 {
		floor = math.Log(q.noise.Floor)
	}
	learned := !q.noise.Known && !q.noise.Absent
	if learned {
		t.l.rule(math.Max(floor, math.Log(lo)-6), math.Log(hi)+40, 16)
	} else {
		t.l.r, t.l.logR = []float64{q.noise.SD}, []float64{0}
	}
	const rounds = 5
	for round := range rounds {
		ofEta, ofR := t.fill()
		n, count := 241, panels
		if round == rounds-1 {
			n, count = points, panels
		}
		next := t.closer(ofEta, n, round < rounds-1)
		next.r, next.logR = t.l.r, t.l.logR
		if learned {
			c, d := matters(ofR, 34)
			edge, end := math.Log(t.l.r[c]), math.Log(t.l.r[d])
			if c == 0 {
				edge = math.Max(floor, edge-2)
			}
			if d == len(t.l.r)-1 {
				end += 2
			}
			next.rule(edge, end, count+int((end-edge)/1.5))
		}
		t.l = next
	}
	t.fill()
	return t
}

// closer returns a lattice of eta about the core of the density, as wide as needed, or
// rather wider, since a coarse one may have missed something.
func (t *truth) closer(ofEta []float64, n int, wider bool) lattice {
	flat := make([]float64, len(ofEta))
	for i := range ofEta {
		flat[i] = ofEta[i] - t.l.logJacobian(i)
	}
	a, b := matters(ofEta, 34)
	from, to := t.l.eta(a), t.l.eta(b)
	if width := to - from; wider {
		from, to = from-width/3, to+width/3
	}
	c, d := matters(flat, 2)
	next := lattice{centre: t.l.eta((c + d) / 2), n: n}
	next.unit = math.Max((t.l.eta(d)-t.l.eta(c))/4, 1e-13*math.Abs(next.centre))
	next.first = -math.Asinh((next.centre - from) / next.unit)
	next.step = (math.Asinh((to-next.centre)/next.unit) - next.first) / float64(n-1)
	return next
}

// scales returns the least and the largest length among all that is stated.
func (q *question) scales() (lo, hi float64) {
	lo, hi = math.Inf(1), 0
	use := func(x float64) {
		if x > 0 && !math.IsInf(x, 0) {
			lo, hi = math.Min(lo, x), math.Max(hi, x)
		}
	}
	n := 0.0
	low, high := math.Inf(1), math.Inf(-1)
	for _, s := range q.readings {
		use(s.sd)
		use(s.y.Upper - s.y.Lower)
		n += s.count
		for _, x := range [2]float64{s.y.Lower, s.y.Upper} {
			if !math.IsInf(x, 0) {
				low, high = math.Min(low, x), math.Max(high, x)
			}
		}
	}
	use(q.noise.SD)
	use(q.noise.Guess)
	use(q.noise.Floor)
	if !q.prior.Vague {
		use(q.prior.SD)
		low, high = math.Min(low, q.prior.Mean), math.Max(high, q.prior.Mean)
	}
	use(high - low)
	return lo / math.Sqrt(n+1), hi
}

// centre is some finite value among all that is stated.
func (q *question) centre() float64 {
	if len(q.readings) == 0 {
		return q.prior.Mean + q.bias.Mean
	}
	if y := q.readings[0].y; math.IsInf(y.Lower, 0) {
		return y.Upper
	}
	return q.readings[0].y.Lower
}

// at returns how the level is distributed given eta.
func (t *truth) at(eta float64) (mean, sd float64) {
	p, b := t.q.prior, t.q.bias
	if p.Vague || b.SD == 0 {
		return eta - b.Mean, b.SD
	}
	v, w := p.SD*p.SD, b.SD*b.SD
	return (w*p.Mean + v*(eta-b.Mean)) / (v + w), p.SD * b.SD / math.Sqrt(v+w)
}

// moments returns mean and standard deviation of the level, and whether the lattice is
// wide enough for the latter: where it barely exists what matters to it goes on beyond.
func (t *truth) moments() (mean, sd float64, wide bool) {
	origin, _ := t.at(t.l.centre)
	var first, second float64
	for i, m := range t.all {
		at, sd := t.at(t.eta[i])
		d := at - origin
		first += m * d
		second += m * (d*d + sd*sd)
	}
	far := math.Max(t.all[0]*math.Pow(t.eta[0]-t.l.centre, 2), t.all[len(t.all)-1]*math.Pow(t.eta[len(t.eta)-1]-t.l.centre, 2))
	wide = far < 1e-6*second
	first, second = first/t.sum, second/t.sum
	return origin + first, math.Sqrt(second - first*first), wide
}

// tails returns P(level < x) and P(level > x) where x is the level at lattice
// point k, an even number: without a bias by Simpson's rule on either side of it.
func (t *truth) tails(k int) (x, below, above float64) {
	x, spread := t.at(t.eta[k])
	for i, m := range t.all {
		switch {
		case spread > 0:
			mean, sd := t.at(t.eta[i])
			z := (x - mean) / sd / math.Sqrt2
			below += m * math.Erfc(-z) / 2
			above += m * math.Erfc(z) / 2
		case i < k:
			below += m
		case i > k:
			above += m
		default: // Simpson's rule ends here on both sides
			below += m / 2
			above += m / 2
		}
	}
	return x, below / t.sum, above / t.sum
}

// next returns P(indication < x) and P(indication > x) for noise sd, or r if that
// is 0.
func (t *truth) next(x, sd float64) (below, above float64) {
	for j, r := range t.l.r {
		sigma := sd
		if sigma == 0 {
			sigma = r
		}
		for i, m := range t.mass[j] {
			z := (x - t.eta[i]) / sigma / math.Sqrt2
			below += t.simpson(i) * m * math.Erfc(-z) / 2
			above += t.simpson(i) * m * math.Erfc(z) / 2
		}
	}
	return below / t.sum, above / t.sum
}
