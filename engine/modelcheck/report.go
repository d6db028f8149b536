package modelcheck

import (
	"math"
	"math/bits"
	"slices"

	"gonum.org/v1/gonum/mathext"
)

// Result is what the check of a model came to.
type Result uint8

const (
	TooFew             Result = iota + 1 // no window is full yet, and nothing objected to
	NoObjection                          // no test objects
	IntervalsTooNarrow                   // readings scatter more than was predicted
	IntervalsTooWide                     // and less
	Serial                               // neighbouring readings err alike, or opposite
	PriorConflict                        // the readings lie where the prior hardly allowed
)

// Results lists them all in the order in which they are published.
var Results = [...]Result{TooFew, NoObjection, IntervalsTooNarrow, IntervalsTooWide, Serial, PriorConflict}

// String returns the word of the interface.
func (r Result) String() string {
	switch r {
	case TooFew:
		return "TOO_FEW"
	case NoObjection:
		return "NO_OBJECTION"
	case IntervalsTooNarrow:
		return "INTERVALS_TOO_NARROW"
	case IntervalsTooWide:
		return "INTERVALS_TOO_WIDE"
	case Serial:
		return "SERIAL"
	case PriorConflict:
		return "PRIOR_CONFLICT"
	}
	return "UNSPECIFIED"
}

// resultSet has bit r set for each Result r in it.
type resultSet uint8

func (s resultSet) has(r Result) bool       { return s>>r&1 == 1 }
func (s resultSet) only(r Result) resultSet { return s & (1 << r) }
func (s resultSet) count() int              { return bits.OnesCount8(uint8(s)) }
func (s *resultSet) add(r Result)           { *s |= 1 << r }
func (s *resultSet) remove(r Result)        { *s &^= 1 << r }

// Test is one look of one test.
type Test struct {
	Objection   Result // that the test raises
	Name        string
	Statistic   float64
	Probability float64 // under a correct model of a statistic at least as far out
	Level       float64 // below which it objects
}

// Objects tells whether the test objects.
func (t Test) Objects() bool { return t.Probability < t.Level }

// Coverage is how readings fell in their predictives.
type Coverage struct {
	Readings   int64   // scored ones
	Within50   float64 // share within the central 50 % interval; NaN if there are none
	Within95   float64 // and within the 95 % interval
	MeanSquare float64 // of the normal scores, 1 expected
}

// LastStep is the latest detected step.
type LastStep struct {
	At, Since int64 // Unix nanoseconds: of the reading that detected it, and of the last one before the sum rose
	Direction Step  // NoStep: there was none
}

// Report is what can be told of the model.
type Report struct {
	Result     Result   // of several objections the one with the smallest probability relative to its level
	Objections []Result // all, Result first, the rest in the order of their words above
	Tests      []Test   // of the last full window, and the last look at the prior
	Raised     int      // objections since the start, one for each test and look

	Total, Window Coverage // of all scored readings, and of the last full window
	Lag1          float64  // serial correlation of the scores in that window; NaN if there is none
	Outlying      int      // readings with a tail below OutlyingProbability
	Last          Score    // of the latest scored reading

	CUSUMUp, CUSUMDown float64 // in normal scores, against Law.Threshold
	Steps              int
	LastStep           LastStep
}

// Total returns how all scored readings fell.
func (t *Tally) Total() Coverage { return coverage(t.scored, t.within50, t.within95, t.square) }

// Steps returns how many steps were detected.
func (t *Tally) Steps() int { return int(t.steps) }

// Outlying returns how many readings had a tail below OutlyingProbability.
func (t *Tally) Outlying() int { return int(t.outlying) }

// Report tells what the tally says under the law it was kept by: some 30 us with the default window,
// nearly all of it for the probability of the serial correlation. That takes 0.2 ms with a window of 16,
// and with one of 16 to 256 it takes 0.3 to 1.3 ms at correlations of 0.9 to 0.98, and 10 ms at 0.996. It
// isn't kept, as it would make every state longer.
func (t *Tally) Report(l *Law) Report {
	r := Report{
		Tests: t.tests(l), Raised: int(t.raised),
		Total:    coverage(t.scored, t.within50, t.within95, t.square),
		Window:   coverage(0, 0, 0, 0),
		Lag1:     math.NaN(),
		Outlying: int(t.outlying), Last: t.last,
		CUSUMUp: t.up.sum, CUSUMDown: t.down.sum, Steps: int(t.steps),
		LastStep: LastStep{t.stepAt, t.stepSince, t.direction},
	}
	if w := &t.full; t.looked {
		r.Window = coverage(int64(l.settings.Window), float64(w.within50), float64(w.within95), w.square)
		r.Lag1 = w.lag1()
	}
	for _, o := range Results {
		if t.objections.has(o) {
			r.Objections = append(r.Objections, o)
		}
	}
	r.Result = t.gravest(r.Tests)
	slices.SortStableFunc(r.Objections, func(a, b Result) int { // Result first
		switch {
		case a == r.Result && b != r.Result:
			return -1
		case b == r.Result && a != r.Result:
			return 1
		}
		return 0
	})
	return r
}

// Result tells what Report does, but costs next to nothing unless several tests object; then
// as much as Report.
func (t *Tally) Result(l *Law) Result {
	if t.objections.count() > 1 {
		return t.gravest(t.tests(l))
	}
	return t.gravest(nil)
}

// gravest picks the result among the objections by their tests.
func (t *Tally) gravest(tests []Test) Result {
	switch {
	case t.objections.count() == 1:
		return Result(bits.TrailingZeros8(uint8(t.objections)))
	case t.objections == 0 && t.looked:
		return NoObjection
	case t.objections == 0:
		return TooFew
	}
	worst, least := NoObjection, math.Inf(1)
	for _, test := range tests {
		if ratio := test.Probability / test.Level; t.objections.has(test.Objection) && ratio < least {
			worst, least = test.Objection, ratio
		}
	}
	return worst
}

func (t *Tally) tests(l *Law) []Test {
	var tests []Test
	if n, w := l.settings.Window, &t.full; t.looked {
		tests = append(tests,
			Test{IntervalsTooNarrow, "sum of squared normal scores, chi-squared, upper tail", w.square, narrowProbability(n, w.square), t.level},
			Test{IntervalsTooWide, "sum of squared normal scores, chi-squared, lower tail", w.square, wideProbability(n, w.square), t.level},
			Test{Serial, "lag-1 serial correlation of normal scores, two-sided", w.lag1(), serialProbability(n, w.lag1()), t.level},
		)
	}
	if t.priorStage != priorUnseen {
		z := float64(t.priorScore)
		tests = append(tests, Test{PriorConflict, "normal score of the mean under the prior, two-sided", z, priorProbability(z), t.priorStage.level(l)})
	}
	return tests
}

func coverage(n int64, in50, in95, square float64) Coverage {
	count := float64(n)
	return Coverage{n, in50 / count, in95 / count, square / count}
}

// narrowProbability is P(X > x) for chi-squared X with n degrees of freedom (DLMF 8.2.4).
func narrowProbability(n int, x float64) float64 {
	return mathext.GammaIncRegComp(float64(n)/2, x/2)
}

// wideProbability is P(X < x) for chi-squared X with n degrees of freedom (DLMF 8.2.4).
func wideProbability(n int, x float64) float64 { return mathext.GammaIncReg(float64(n)/2, x/2) }

// priorProbability is P(|Z| > |z|) for a standard normal Z.
func priorProbability(z float64) float64 { return math.Min(1, 2*upperTail(math.Abs(z))) }
