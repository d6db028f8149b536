package posterior_test

import (
	"math"
	"math/big"

	"leadline.example/engine/posterior"
)

// The oracle of joint beliefs. It keeps no state: it writes down how every two
// readings of a history covary by what they have in common (the same life of the
// level, the same life of a further state), and conditions what is asked on all
// of them at once, in 96-digit arithmetic:
//
//	mean = m0 + k'K^-1 (y - m) + (x0 - X'K^-1 k)' b,  b = (X'K^-1 X)^-1 X'K^-1 (y - m)
//	variance = k00 - k'K^-1 k + (x0 - X'K^-1 k)' (X'K^-1 X)^-1 (x0 - X'K^-1 k)
//
// where X is how the readings rest on the levels of which nothing was known: the
// exact limit of an ever wider prior (universal kriging: Cressie 1993, Statistics
// for Spatial Data, 3.4.1, from memory).

const oracleBits = 320

func num(x float64) *big.Float       { return new(big.Float).SetPrec(oracleBits).SetFloat64(x) }
func none() *big.Float               { return num(0) }
func sub(a, b *big.Float) *big.Float { return none().Sub(a, b) }
func div(a, b *big.Float) *big.Float { return none().Quo(a, b) }

func add(all ...*big.Float) *big.Float {
	sum := none()
	for _, x := range all {
		sum.Add(sum, x)
	}
	return sum
}

func mul(all ...*big.Float) *big.Float {
	product := num(1)
	for _, x := range all {
		product.Mul(product, x)
	}
	return product
}

func earlier(a, b *big.Float) *big.Float {
	if a.Cmp(b) < 0 {
		return a
	}
	return b
}

// decay returns exp(-x), x at least 0: x is halved until the Taylor series is
// short, and the sum squared as often.
func decay(x *big.Float) *big.Float {
	halvings := max(0, x.MantExp(nil)+16)
	small := none().SetMantExp(x, -halvings)
	sum, term := num(1), num(1)
	for n := 1; n < 22; n++ {
		term = div(mul(term, small), num(-float64(n)))
		sum = add(sum, term)
	}
	for range halvings {
		sum = mul(sum, sum)
	}
	return sum
}

// levelLife is the level from the start or a renewal on.
type levelLife struct {
	from  *big.Float
	prior posterior.Prior
	slope posterior.SlopePrior
}

// stateLife is a further state from when it is added or redrawn.
type stateLife struct {
	from    *big.Float
	process posterior.Process
}

// sight is a reading, or what is asked: a combination of level and states at a time.
type sight struct {
	at       *big.Float
	life     int // of the level
	level    float64
	states   map[int]float64 // coefficients by state life
	variance float64
	y        float64 // less offset is done in exact numbers
	offset   float64
}

// history is all that has happened.
type history struct {
	motion posterior.Motion
	levels []levelLife
	states []stateLife
	seen   []sight
}

// left is the part of a level's start that is left at an age.
func (h *history) left(age *big.Float) *big.Float {
	if h.motion.Form == posterior.MotionReverting {
		return decay(mul(num(h.motion.Rate), age))
	}
	return num(1)
}

// mean is what was expected of a sight before any reading.
func (h *history) mean(s *sight) *big.Float {
	l := &h.levels[s.life]
	age := sub(s.at, l.from)
	start := num(l.prior.Mean)
	if l.prior.Vague {
		start = none()
	}
	level := start
	switch h.motion.Form {
	case posterior.MotionTrend:
		level = add(start, mul(num(l.slope.Mean), age))
	case posterior.MotionReverting:
		about := num(h.motion.Mean)
		level = add(about, mul(sub(start, about), h.left(age)))
	}
	return add(num(s.offset), mul(num(s.level), level))
}

// covariance is how two sights covary, but for white noise and levels of which
// nothing was known.
func (h *history) covariance(s, t *sight) *big.Float {
	sum := none()
	if s.life == t.life {
		sum = mul(num(s.level), num(t.level), h.levelCovariance(s, t))
	}
	for life, c := range s.states {
		d, shared := t.states[life]
		if !shared {
			continue
		}
		l := &h.states[life]
		v := num(l.process.Variance)
		if l.process.Rate > 0 {
			apart := sub(s.at, t.at)
			v = mul(v, decay(mul(num(l.process.Rate), apart.Abs(apart))))
		} else {
			v = add(v, mul(num(l.process.Diffusion), sub(earlier(s.at, t.at), l.from)))
		}
		sum = add(sum, mul(num(c), num(d), v))
	}
	return sum
}

func (h *history) levelCovariance(s, t *sight) *big.Float {
	l, m := &h.levels[s.life], &h.motion
	a := sub(earlier(s.at, t.at), l.from)
	b := sub(add(s.at, t.at), add(a, l.from, l.from)) // the later age
	start := mul(num(l.prior.SD), num(l.prior.SD))
	if l.prior.Vague {
		start = none()
	}
	switch m.Form {
	case posterior.MotionWalk:
		return add(start, mul(num(m.Walk), a))
	case posterior.MotionTrend:
		// The integral over both times of the slope's covariance w min(u, v): a^2 (3b - a) / 6.
		wander := div(mul(num(m.Wander), a, a, sub(mul(num(3), b), a)), num(6))
		return add(start, mul(num(l.slope.SD), num(l.slope.SD), a, b), mul(num(m.Walk), a), wander)
	case posterior.MotionReverting:
		both := mul(h.left(a), h.left(b))
		return add(mul(start, both), mul(num(m.Variance), sub(h.left(sub(b, a)), both)))
	}
	return start
}

// flats lists the lives of the level that started from nothing and were read.
func (h *history) flats() []int {
	var all []int
	for life := range h.levels {
		if !h.levels[life].prior.Vague {
			continue
		}
		for i := range h.seen {
			if h.seen[i].life == life {
				all = append(all, life)
				break
			}
		}
	}
	return all
}

// rests returns how a sight rests on a level of which nothing was known.
func (h *history) rests(s *sight, life int) *big.Float {
	if s.life != life {
		return none()
	}
	return mul(num(s.level), h.left(sub(s.at, h.levels[life].from)))
}

// ask returns mean and variance of a sight given all readings.
func (h *history) ask(s *sight) (mean, variance *big.Float) {
	n, flats := len(h.seen), h.flats()
	k := make([][]*big.Float, n)
	columns := make([][]*big.Float, 2+len(flats)) // k, y - m, X
	for i := range h.seen {
		r := &h.seen[i]
		k[i] = make([]*big.Float, n)
		for j := range i + 1 {
			k[i][j] = h.covariance(r, &h.seen[j])
		}
		k[i][i] = add(k[i][i], num(r.variance))
		columns[0] = append(columns[0], h.covariance(r, s))
		columns[1] = append(columns[1], sub(num(r.y), h.mean(r)))
		for j, life := range flats {
			columns[2+j] = append(columns[2+j], h.rests(r, life))
		}
	}
	root(k)
	for _, c := range columns {
		forward(k, c)
	}
	mean = add(h.mean(s), dot(columns[0], columns[1]))
	variance = sub(h.covariance(s, s), dot(columns[0], columns[0]))
	if len(flats) == 0 {
		return mean, variance
	}
	g := make([][]*big.Float, len(flats))
	var wanted, known []*big.Float
	for i, life := range flats {
		g[i] = make([]*big.Float, len(flats))
		for j := range i + 1 {
			g[i][j] = dot(columns[2+i], columns[2+j])
		}
		wanted = append(wanted, sub(h.rests(s, life), dot(columns[2+i], columns[0])))
		known = append(known, dot(columns[2+i], columns[1]))
	}
	root(g)
	forward(g, wanted)
	forward(g, known)
	return add(mean, dot(wanted, known)), add(variance, dot(wanted, wanted))
}

// root replaces the lower half of a symmetric matrix by its Cholesky factor.
func root(a [][]*big.Float) {
	for i := range a {
		for j := range i + 1 {
			rest := sub(a[i][j], dot(a[i][:j], a[j][:j]))
			if i == j {
				a[i][i] = none().Sqrt(rest)
			} else {
				a[i][j] = div(rest, a[j][j])
			}
		}
	}
}

// forward replaces c by the solution x of a x = c, a lower triangular.
func forward(a [][]*big.Float, c []*big.Float) {
	for i := range c {
		c[i] = div(sub(c[i], dot(a[i][:i], c[:i])), a[i][i])
	}
}

func dot(a, b []*big.Float) *big.Float {
	sum := none()
	for i := range a {
		sum.Add(sum, mul(a[i], b[i]))
	}
	return sum
}

// off returns how far x is from want, in the given unit.
func off(x float64, want *big.Float, unit float64) float64 {
	d, _ := sub(num(x), want).Float64()
	return math.Abs(d) / unit
}
