// Package decide turns probabilities into verdicts: pure functions of numbers.
package decide

// Verdict is the outcome of a Rule.
type Verdict uint8

const (
	Inconclusive Verdict = iota + 1
	Conforms
	Breaches
)

// Verdicts lists them all in the order in which they are published.
var Verdicts = [...]Verdict{Conforms, Breaches, Inconclusive}

// String returns the word of the interface.
func (v Verdict) String() string {
	switch v {
	case Conforms:
		return "CONFORMS"
	case Breaches:
		return "BREACHES"
	case Inconclusive:
		return "INCONCLUSIVE"
	}
	return "UNSPECIFIED"
}

// Rule is a decision rule on probabilities, each above 0.5 and at most 1, so
// that no belief can satisfy both.
type Rule struct {
	ConformProbability float64
	BreachProbability  float64
}

// DefaultRule asks 95 % of either side (JCGM 106:2012, 7.3.3: a conformance
// probability of 95 % is the usual requirement).
var DefaultRule = Rule{ConformProbability: 0.95, BreachProbability: 0.95}

// Verdict applies the rule: CONFORMS if the conformance probability reaches
// ConformProbability, BREACHES if the breach probability reaches
// BreachProbability, else INCONCLUSIVE. NaN reaches nothing.
func (r Rule) Verdict(conformance, breach float64) Verdict {
	switch {
	case conformance >= r.ConformProbability:
		return Conforms
	case breach >= r.BreachProbability:
		return Breaches
	}
	return Inconclusive
}
