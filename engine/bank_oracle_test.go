package engine_test

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"leadline.example/engine"
)

// The oracle of beliefs under a learned repeatability: the covariance of the whole
// history, as the oracle of joint beliefs writes it down, and the plain integral over
// ln r. Like that it knows no states and filters nothing. With a flat level taken
// out by differences of readings, and each taught reading times the square root of
// its number of samples, the readings' covariance is M + r^2 I; in the eigenvectors
// of M each r costs one sum:
//
//	ln L(r) = -1/2 sum (ln(l_i + r^2) + e_i^2 / (l_i + r^2))
//	mean(r) = m + sum k_i e_i / (l_i + r^2)
//	variance(r) = v + r^2 w - sum k_i^2 / (l_i + r^2)
//
// Derived for this test: the normal conditioned on the differences, which is exact
// under a flat prior (Harville 1974, Biometrika 61, 383-385, from memory).
type learnedOracle struct {
	oracle
	learned engine.Repeatability // what is known of r beforehand
	own     engine.InstrumentID  // whose r it is; empty for the quantity's
}

// teaches tells whether a reading's white part is the r that is learned.
func (o *learnedOracle) teaches(r *engine.Reading) bool {
	switch d, ok := o.instruments[r.Instrument]; {
	case r.HasUncertainty:
		return false
	case o.own != "":
		return r.Instrument == o.own
	case ok:
		return d.Repeatability.StandardDeviation == 0
	}
	return true
}

// grounded returns what is declared, with r a vanishing number and levels of which
// nothing is known starting at exactly 0.
func (o *learnedOracle) grounded() *oracle {
	g := o.oracle
	ground := func(p engine.Prior) engine.Prior {
		if o.flat(p) {
			p.Form, p.Mean, p.StandardDeviation = engine.PriorNormal, 0, 0
		}
		return p
	}
	g.d.Prior = ground(g.d.Prior)
	g.renewals = slices.Clone(g.renewals)
	for i := range g.renewals {
		g.renewals[i].Prior = ground(g.renewals[i].Prior)
	}
	if o.own == "" {
		g.d.Repeatability = engine.Repeatability{}
		return &g
	}
	g.instruments = map[engine.InstrumentID]engine.InstrumentDeclaration{}
	for id, d := range o.instruments {
		if id == o.own {
			d.Repeatability.StandardDeviation = 1e-300
		}
		g.instruments[id] = d
	}
	return &g
}

// flat tells whether nothing is known of a level that starts from a prior.
func (o *learnedOracle) flat(p engine.Prior) bool {
	return p.Form == engine.PriorVague && o.d.Dynamics.Form != engine.DynamicsMeanReverting
}

// life returns the number of the level's life at an instant, and whether its start
// is flat.
func (o *learnedOracle) life(at, first engine.Instant) (number int, flat bool) {
	number = o.epoch(at, first).number
	prior := o.d.Prior
	if number > 0 {
		prior = o.renewals[number-1].Prior
	}
	return number, o.flat(prior)
}

// samples returns of how many indications a reading is the mean.
func samples(r *engine.Reading) float64 { return float64(max(1, r.Samples)) }

// history writes down the residuals of all readings, the level's mean, and the
// covariance of readings and level, the level last.
func (o *learnedOracle) history(at engine.Instant) (residual []float64, level float64, cov *mat.SymDense) {
	g := o.grounded()
	first := min(at, g.readings[0].Time)
	n := len(g.readings)
	occasions := g.occasions()
	cov = mat.NewSymDense(n+1, nil)
	for i := range n {
		r := &g.readings[i]
		for j := range i + 1 {
			c, _ := g.errorCovariance(i, j, occasions).Float64()
			c += g.quick(r.Time, g.readings[j].Time, first)
			if i == j && !r.HasUncertainty {
				white, _ := g.white(r).Float64()
				c += white * (1/samples(r) - 1)
			}
			cov.SetSym(i, j, c)
		}
		cov.SetSym(i, n, g.quick(r.Time, at, first))
		y, _ := minus(minus(num(r.Value), num(g.offset(r))), g.levelMean(r.Time, first)).Float64()
		residual = append(residual, y)
	}
	cov.SetSym(n, n, g.quick(at, at, first))
	level, _ = g.levelMean(at, first).Float64()
	return residual, level, cov
}

// quick is levelCovariance, without its exponentials of 120 digits.
func (o *oracle) quick(s, t, first engine.Instant) float64 {
	y := &o.d.Dynamics
	if y.Form != engine.DynamicsMeanReverting {
		c, _ := o.levelCovariance(s, t, first).Float64()
		return c
	}
	e, f := o.epoch(s, first), o.epoch(t, first)
	if e.number != f.number {
		return 0
	}
	decay := func(from, to engine.Instant) float64 { return math.Ln2 * float64(to-from) / float64(y.HalfLife) }
	a, b := decay(e.from, min(s, t)), decay(e.from, max(s, t))
	return e.sd*e.sd*math.Exp(-a-b) - y.StandardDeviation*y.StandardDeviation*math.Exp(a-b)*math.Expm1(-2*a)
}

// differences are combinations of readings and level in which no flat level is left.
type differences struct {
	known, taught []mat.Vector // without and with r: these with variance r^2
	level         *mat.VecDense
	anchors       []float64 // of readings: what is to be added to level
	share         float64   // of r^2 in the variance of level
	nothing       bool      // nothing is known of the level
}

func (o *learnedOracle) differences(at engine.Instant) *differences {
	n := len(o.readings)
	first := min(at, o.readings[0].Time)
	d := &differences{level: unit(n+1, n, 1), anchors: make([]float64, n)}
	groups := map[int][]int{} // readings by life
	for i := range o.readings {
		number, _ := o.life(o.readings[i].Time, first)
		groups[number] = append(groups[number], i)
	}
	asked, isFlat := o.life(at, first)
	d.nothing = isFlat && len(groups[asked]) == 0
	for number := range len(o.renewals) + 1 {
		members := groups[number]
		if len(members) == 0 {
			continue
		}
		_, flat := o.life(o.readings[members[0]].Time, first)
		d.group(o, members, flat, number == asked)
	}
	return d
}

// unit returns a vector with x at i.
func unit(n, i int, x float64) *mat.VecDense {
	v := mat.NewVecDense(n, nil)
	v.SetVec(i, x)
	return v
}

// group adds the differences of the readings of one life of the level. If it is flat
// they are taken from a reading that doesn't teach r, or else orthogonally to the
// common level, and so is the level if it is asked for.
func (d *differences) group(o *learnedOracle, members []int, flat, asked bool) {
	n := len(o.readings) + 1
	anchor := -1
	var taught []int
	for _, i := range members {
		if !o.teaches(&o.readings[i]) && anchor < 0 {
			anchor = i
		}
	}
	for _, i := range members {
		teaches := o.teaches(&o.readings[i])
		v := unit(n, i, 1)
		switch {
		case flat && anchor < 0:
			taught = append(taught, i)
			continue
		case flat && i == anchor:
			continue
		case flat:
			v.SetVec(anchor, -1)
		}
		if teaches {
			v.ScaleVec(math.Sqrt(samples(&o.readings[i])), v)
			d.taught = append(d.taught, v)
			continue
		}
		d.known = append(d.known, v)
	}
	switch {
	case flat && anchor < 0:
		d.orthogonal(o, taught, asked)
	case flat && asked:
		d.level.SetVec(anchor, -1)
		d.anchors[anchor] = 1
	}
}

// orthogonal adds the differences of readings of which each teaches r: the Householder
// reflection that brings their common level to the first axis has them as its other rows
// (Golub & Van Loan 2013, 5.1, from memory).
func (d *differences) orthogonal(o *learnedOracle, members []int, asked bool) {
	n := len(o.readings) + 1
	total := 0.0
	for _, i := range members {
		total += samples(&o.readings[i])
	}
	root := func(i int) float64 { return math.Sqrt(samples(&o.readings[i])) }
	axis := mat.NewVecDense(len(members), nil)
	for k, i := range members {
		axis.SetVec(k, root(i)/math.Sqrt(total))
	}
	axis.SetVec(0, axis.AtVec(0)+1)
	square := mat.Dot(axis, axis)
	for k := 1; k < len(members); k++ {
		v := mat.NewVecDense(n, nil)
		for l, i := range members {
			c := -2 * axis.AtVec(k) * axis.AtVec(l) / square
			if k == l {
				c++
			}
			v.SetVec(i, c*root(i))
		}
		d.taught = append(d.taught, v)
	}
	if !asked {
		return
	}
	d.share = 1 / total
	for _, i := range members {
		d.anchors[i] = samples(&o.readings[i]) / total
		d.level.SetVec(i, -d.anchors[i])
	}
}

// spectrum is the history in the eigenvectors of M.
type spectrum struct {
	values   []float64 // l
	errors   []float64 // e
	cross    []float64 // k
	mean     float64   // m
	variance float64   // v
	share    float64   // w
	nothing  bool
}

// spectrum conditions on the readings that don't teach r and decomposes what is left.
func (o *learnedOracle) spectrum(at engine.Instant) *spectrum {
	d := o.differences(at)
	residual, level, cov := o.history(at)
	rows := append(append(append([]mat.Vector{}, d.known...), d.taught...), d.level)
	y := append(slices.Clone(residual), 0)
	size, known := len(rows), len(d.known)
	c := mat.NewSymDense(size, nil)
	mean := make([]float64, size) // of what is still unknown; of readings, less what was read
	for i := range rows {
		for j := range i + 1 {
			c.SetSym(i, j, mat.Inner(rows[i], cov, rows[j]))
		}
		if i < size-1 {
			mean[i] = -mat.Dot(rows[i], mat.NewVecDense(len(y), y))
		}
	}
	for i := range known { // one after the other: the residual is -mean[i]
		pivot := c.At(i, i)
		for j := i + 1; j < size; j++ {
			gain := c.At(i, j) / pivot
			mean[j] -= gain * mean[i]
			for k := j; k < size; k++ {
				c.SetSym(j, k, c.At(j, k)-gain*c.At(i, k))
			}
		}
	}
	s := &spectrum{
		mean: level + floats.Dot(d.anchors, residual) + mean[size-1], variance: c.At(size-1, size-1), share: d.share, nothing: d.nothing,
	}
	s.decompose(c, mean, known, len(d.taught))
	return s
}

func (s *spectrum) decompose(c *mat.SymDense, mean []float64, known, taught int) {
	if taught == 0 {
		return
	}
	m := mat.NewSymDense(taught, nil)
	for i := range taught {
		for j := range i + 1 {
			m.SetSym(i, j, c.At(known+i, known+j))
		}
	}
	var e mat.EigenSym
	if !e.Factorize(m, true) {
		panic("no eigenvalues")
	}
	s.values = e.Values(nil)
	var q mat.Dense
	e.VectorsTo(&q)
	for i := range taught {
		s.values[i] = max(0, s.values[i])
		if s.values[i] < 1e-13*s.values[taught-1] {
			s.values[i] = 0
		}
		var error, cross float64
		for j := range taught {
			error -= q.At(j, i) * mean[known+j]
			cross += q.At(j, i) * c.At(known+j, known+taught)
		}
		s.errors, s.cross = append(s.errors, error), append(s.cross, cross)
	}
}
