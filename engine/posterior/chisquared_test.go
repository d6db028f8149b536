package posterior_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/posterior"
)

// Without readings and under a flat level, r^2 is the scaled inverse
// chi-squared that was declared, so its quantiles are those of chi-squared.
func TestRepeatabilityAgainstChiSquared(t *testing.T) {
	for _, row := range table(t, "reference/chisquared.csv") {
		dof, p, x := number(t, row[0]), number(t, row[1]), number(t, row[2])
		var none posterior.Constant
		r := none.Repeatability(vaguePrior(), learnedNoise(1, dof), math.Abs(2*p-1))
		got := r.Lower // P(r < Lower) = P(chi^2 > dof / Lower^2)
		switch {
		case p == 0.5:
			got = r.Median
		case p > 0.5:
			got = r.Upper
		}
		near(t, fmt.Sprintf("dof %v, p %v", dof, p), got, math.Sqrt(dof/x), 1e-11)
	}
}
