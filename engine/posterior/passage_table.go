package posterior

import (
	"math"

	"gonum.org/v1/gonum/interp"
)

// passageTable holds crossings at rising times, the first of them 0.
// Between them it interpolates monotonely in sqrt(t), in which a level whose belief
// reaches over its limits begins to cross (Fritsch & Butland 1984, SIAM Journal on
// Scientific and Statistical Computing 5, 300-304).
type passageTable struct {
	last         float64
	below, above interp.FritschButland
}

// tabulate makes the table; times and crossings are not kept.
func tabulate(times []float64, crossings []Crossing) *passageTable {
	n := len(times)
	roots, below, above := make([]float64, n), make([]float64, n), make([]float64, n)
	for i, t := range times {
		roots[i] = math.Sqrt(t / times[n-1])
		below[i], above[i] = probability(crossings[i].Below), probability(crossings[i].Above)
		if i > 0 {
			below[i] = math.Max(below[i], below[i-1])
			above[i] = math.Max(above[i], above[i-1])
			// What would be more than certain isn't shifted but cut.
			below[i] = math.Max(below[i-1], math.Min(below[i], 1-above[i-1]))
			above[i] = math.Max(above[i-1], math.Min(above[i], 1-below[i]))
		}
	}
	p := &passageTable{last: times[n-1]}
	// Fit errs on lengths alone.
	if p.below.Fit(roots, below) != nil || p.above.Fit(roots, above) != nil {
		panic("posterior: passage table of unequal columns")
	}
	return p
}

// at returns the crossings within seconds > 0.
func (p *passageTable) at(seconds float64) Crossing {
	x := math.Min(1, math.Sqrt(seconds/p.last))
	return crossing(p.below.Predict(x), p.above.Predict(x))
}
