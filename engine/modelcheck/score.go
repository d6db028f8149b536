package modelcheck

import (
	"math"

	"gonum.org/v1/gonum/mathext"
)

// Score is where a reading fell in its one-step predictive: its probability integral
// transform u as the normal score z with P(Z < z) = u. A value has Lower == Upper, a
// displayed or censored reading the interval of the scores that it may have (the
// nonrandomised transform of Czado, Gneiting & Held 2009, Biometrics 65, 1254-1261, from
// memory). Both lie between -38 and 38, beyond which a double holds no tail.
type Score struct{ Lower, Upper float64 }

const (
	// farthest bounds a score: P(Z > 38) is 2.9e-316.
	farthest = 38
	// quartile and shoulder bound the central 50 and 95 % of a standard normal
	// (Wichura 1988, algorithm AS 241).
	quartile = 0.67448975019608174
	shoulder = 1.9599639845400542
	// OutlyingProbability is the two-sided tail probability below which a
	// reading counts as outlying (common practice, no source), and outlying the score
	// that has it.
	OutlyingProbability = 1e-4
	outlying            = 3.8905918864130940
)

// ScoreAt returns the score of a value z standard deviations above the mean of a normal predictive.
func ScoreAt(z float64) Score {
	z = bounded(z)
	return Score{z, z}
}

// ScoreOf returns the score of a value y: below = P(Y < y) and above = P(Y > y) under its
// predictive, which sum to 1. The smaller one counts, so that no digit of a tail is lost
// down to 1e-300; relative error 1e-14. What lies outside of [0, 1], by rounding, counts as the
// nearer end. If either is NaN the score isn't one, see Tally.Add.
func ScoreOf(below, above float64) Score {
	z := normalScore(below, above)
	return Score{z, z}
}

// ScoreBetween returns the score of a reading that tells an interval [a, b] only, one
// end of which may be infinite: below = P(Y < a), from = P(Y >= a), upTo = P(Y <= b) and
// above = P(Y > b) under its predictive Y. All four are asked for, since from isn't
// 1 - below where it is small. Precision as in ScoreOf.
func ScoreBetween(below, from, upTo, above float64) Score {
	a, b := normalScore(below, from), normalScore(upTo, above)
	if b < a {
		b = a // by rounding, where the interval has next to no probability
	}
	return Score{a, b}
}

// normalScore returns the z with P(Z < z) = below and P(Z > z) = above.
func normalScore(below, above float64) float64 {
	switch {
	case math.IsNaN(below) || math.IsNaN(above):
		return math.NaN()
	case below <= above:
		return bounded(mathext.NormalQuantile(max(0, min(below, 1))))
	}
	return bounded(-mathext.NormalQuantile(max(0, min(above, 1))))
}

// bounded returns z, or the end of the range of scores beyond which it lies; NaN for NaN.
func bounded(z float64) float64 { return max(-farthest, min(z, farthest)) }

// Exact tells whether the score is that of a value.
func (z Score) Exact() bool { return z.Lower == z.Upper }

// Tail returns the two-sided tail probability: twice the smaller one of the
// probabilities of an indication at least as high, and at least as low, as this; at most
// 1. Relative error 1e-13 down to 1e-300 (DLMF 7.2.2).
func (z Score) Tail() float64 {
	return math.Min(1, 2*upperTail(math.Max(z.Lower, -z.Upper)))
}

// outlying tells whether Tail is below OutlyingProbability.
func (z Score) outlying() bool { return z.Lower > outlying || z.Upper < -outlying }

// central is 1 if z lies between -q and q, else 0: by the sign of a difference, since a
// branch that goes either way costs more than all else of a reading.
func central(z, q float64) float64 {
	return float64(1 - math.Float64bits(q-math.Abs(z))>>63)
}

// within returns the conditional probability that the score of an interval lies between
// -q and q.
func (z Score) within(q float64) float64 {
	switch {
	case z.Lower >= -q && z.Upper <= q:
		return 1
	case z.Lower >= q || z.Upper <= -q:
		return 0
	}
	return normalBetween(math.Max(z.Lower, -q), math.Min(z.Upper, q)) / normalBetween(z.Lower, z.Upper)
}
