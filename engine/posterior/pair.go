package posterior

import "math"

// pair is an unevaluated sum hi + lo with |lo| at most half a unit in the last
// place of hi: about 32 significant digits. Sources: Dekker (1971), Numerische
// Mathematik 18, 224-242; Knuth, The Art of Computer Programming vol. 2,
// 4.2.2 theorem B (two-sum); products by a fused multiply-add.
type pair struct{ hi, lo float64 }

// twoSum returns a + b exactly.
func twoSum(a, b float64) pair {
	s := a + b
	bb := s - a
	return pair{s, (a - (s - bb)) + (b - bb)}
}

// twoDiff returns a - b exactly.
func twoDiff(a, b float64) pair { return twoSum(a, -b) }

// quickSum returns a + b exactly if |a| >= |b| or a is 0.
func quickSum(a, b float64) pair {
	s := a + b
	return pair{s, b - (s - a)}
}

// twoProd returns a b exactly, as long as nothing underflows.
func twoProd(a, b float64) pair {
	p := a * b
	return pair{p, math.FMA(a, b, -p)}
}

// plus adds with an absolute error below 2^-104 (|p| + |q|).
func (p pair) plus(q pair) pair {
	s := twoSum(p.hi, q.hi)
	return quickSum(s.hi, s.lo+(p.lo+q.lo))
}

// minus subtracts, with the error of plus.
func (p pair) minus(q pair) pair { return p.plus(pair{-q.hi, -q.lo}) }

// times multiplies by a plain number, relative error about 2^-104.
func (p pair) times(x float64) pair {
	t := twoProd(p.hi, x)
	return quickSum(t.hi, math.FMA(p.lo, x, t.lo))
}

// squared returns p p, relative error about 2^-103.
func (p pair) squared() pair {
	t := twoProd(p.hi, p.hi)
	return quickSum(t.hi, math.FMA(2*p.hi, p.lo, t.lo))
}

// over divides by a plain number, relative error about 2^-103.
func (p pair) over(x float64) pair {
	q := p.hi / x
	r := p.minus(twoProd(q, x))
	return quickSum(q, r.hi/x)
}

// ratio returns p / q, relative error about 2^-102.
func (p pair) ratio(q pair) pair {
	a := p.hi / q.hi
	r := p.minus(q.times(a))
	return quickSum(a, r.hi/q.hi)
}

// value rounds to a plain number.
func (p pair) value() float64 { return p.hi + p.lo }
