package decide_test

import (
	"math"
	"testing"

	"leadline.example/engine/decide"
)

func TestRuleVerdict(t *testing.T) {
	rule := decide.Rule{ConformProbability: 0.95, BreachProbability: 0.9}
	tests := []struct {
		name                string
		conformance, breach float64
		want                decide.Verdict
		source              string
	}{
		{"reaches conformance", 0.95, 0.05, decide.Conforms, "design: reached by >="},
		{"just below", math.Nextafter(0.95, 0), 0.05, decide.Inconclusive, "design: reached by >="},
		{"reaches breach", 0.1, 0.9, decide.Breaches, "design: reached by >="},
		{"between", 0.5, 0.5, decide.Inconclusive, "design"},
		{"zener diode", 0.919243340766, 0.080756659234, decide.Inconclusive, "JCGM 106:2012, 7.3 example 1, against 95 %"},
		{"nothing known", math.NaN(), math.NaN(), decide.Inconclusive, "NaN reaches nothing"},
	}
	for _, test := range tests {
		if got := rule.Verdict(test.conformance, test.breach); got != test.want {
			t.Errorf("%s: %v, want %v (%s)", test.name, got, test.want, test.source)
		}
	}
}

func TestVerdictsHaveWords(t *testing.T) {
	seen := map[string]bool{}
	for _, v := range decide.Verdicts {
		if w := v.String(); w == "UNSPECIFIED" || seen[w] {
			t.Errorf("verdict %d is called %s", v, w)
		} else {
			seen[w] = true
		}
	}
}
