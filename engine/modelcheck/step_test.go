package modelcheck_test

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"

	"leadline.example/engine/modelcheck"
)

// Page's integral equation was solved for k = 0.5 by many; the figures are rounded as
// printed by Montgomery, Introduction to Statistical Quality Control, 9.1.3, from memory:
// two-sided 168 and 465, and one-sided, twice that, 335.4 and 930.9 (Hawkins & Olwell 1998).
func TestRunLengthsArePublished(t *testing.T) {
	for _, test := range []struct{ h, want, oneSided float64 }{{4, 168, 335.4}, {5, 465, 930.9}} {
		got := modelcheck.RunLength(test.h)
		within(t, "two-sided run length", got, test.want, 0.5)
		within(t, "one-sided run length", 2*got, test.oneSided, 0.05)
	}
}

// The threshold declared with the default, to three digits.
func TestThresholdOfDefault(t *testing.T) {
	within(t, "threshold", modelcheck.Threshold(modelcheck.DefaultFalseAlarmInterval), 12.7, 0.05)
}

func TestThresholdInvertsRunLength(t *testing.T) {
	for interval := float64(modelcheck.MinFalseAlarmInterval); interval <= modelcheck.MaxFalseAlarmInterval; interval *= 1.37 {
		near(t, "run length", modelcheck.RunLength(modelcheck.Threshold(interval)), interval, 3e-7)
	}
}

// The worked example of the NIST/SEMATECH e-Handbook, 6.3.2.3 (from memory, recomputed):
// target 325, k = 0.3175, h = 4.1959, which for k = 0.5 are scores in units of 0.635.
// The sum of the upper side is 3.0075 at group 13 and 4.94 at group 14, where it detects.
func TestWorkedExampleDetectsAtGroup14(t *testing.T) {
	groups := []float64{
		324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225, 324.600,
		324.625, 325.150, 328.325, 327.250, 327.825, 328.500, 326.675, 327.775, 326.875, 328.350,
	}
	const unit = 0.3175 / 0.5
	law := modelcheck.LawOf(modelcheck.Settings{FalseAlarmInterval: modelcheck.RunLength(4.1959 / unit)})
	var tally modelcheck.Tally
	for i, x := range groups[:14] {
		if i == 13 {
			within(t, "sum at group 13", tally.Report(&law).CUSUMUp*unit, 3.0075, 1e-9)
		}
		want := modelcheck.NoStep
		if i == 13 {
			want = modelcheck.StepUp
		}
		z := (x - 325) / unit
		if got := tally.Add(&law, modelcheck.Score{Lower: z, Upper: z}, int64(i+1)); got != want {
			t.Errorf("group %d: step %v, want %v", i+1, got, want)
		}
	}
	r := tally.Report(&law)
	if want := (modelcheck.LastStep{At: 14, Since: 12, Direction: modelcheck.StepUp}); r.LastStep != want || r.Steps != 1 {
		t.Errorf("%d steps, last %+v, want one, %+v", r.Steps, r.LastStep, want)
	}
	if r.CUSUMUp != 0 || r.CUSUMDown != 0 {
		t.Errorf("sums %v and %v after a detection", r.CUSUMUp, r.CUSUMDown)
	}
}

// Run lengths of simulated scores: their distribution is nearly geometric, so the mean of
// n has the relative standard deviation 1/sqrt(n); 3.3 of these are exceeded once in
// 1000 runs. Detections up and down are equally frequent.
func TestRunLengthsBySimulation(t *testing.T) {
	rng := source(t)
	for _, interval := range []float64{168, 2000} {
		law := modelcheck.LawOf(modelcheck.Settings{FalseAlarmInterval: interval, ObjectionsPerYear: 1e-9})
		var tally modelcheck.Tally
		const n = 2e6
		up := 0
		for i := range int64(n) {
			z := rng.NormFloat64()
			if tally.Add(&law, modelcheck.Score{Lower: z, Upper: z}, i) == modelcheck.StepUp {
				up++
			}
		}
		steps := float64(tally.Report(&law).Steps)
		near(t, "mean run length", n/steps, interval, 3.3/math.Sqrt(n/interval))
		within(t, "steps up", float64(up), steps/2, 3.3*math.Sqrt(steps)/2)
	}
}

// With the default, the sums of a lone reading don't reach the threshold, those of two do.
func TestLoneReadingIsNoStep(t *testing.T) {
	law := modelcheck.LawOf(modelcheck.Settings{})
	var tally modelcheck.Tally
	far := modelcheck.ScoreOf(0, 1)
	if got := tally.Add(&law, far, 1); got != modelcheck.NoStep {
		t.Errorf("one reading below all: %v", got)
	}
	if got := tally.Add(&law, far, 2); got != modelcheck.StepDown {
		t.Errorf("two readings below all: %v", got)
	}
	if tally.Report(&law).Outlying != 2 {
		t.Errorf("%d outlying readings, want 2", tally.Report(&law).Outlying)
	}
}

// The table of testdata/reference is made by modelcheck.py there, with mpmath.
func TestRunLengthsAgainstReference(t *testing.T) {
	for _, row := range table(t, "reference/runlength.csv") {
		near(t, "two-sided run length", modelcheck.RunLength(row[0]), row[1], 1e-7)
	}
}

// chainRunLength is the run length of one side from a Markov chain whose states are cells of the
// sum, each at its middle, the first one 0 alone (Brook & Evans 1972, Biometrika 59, 539-549, from
// memory). Its error falls with the square of the number of states.
func chainRunLength(t *testing.T, h float64, states int) float64 {
	t.Helper()
	cell := 2 * h / float64(2*states-1)
	below := func(x float64) float64 { return math.Erfc(-x/math.Sqrt2) / 2 }
	a, ones := mat.NewDense(states, states, nil), mat.NewVecDense(states, nil)
	for i := range states {
		for j := range states {
			to := float64(j-i)*cell + 0.5
			p := below(to+cell/2) - below(to-cell/2)
			if j == 0 {
				p = below(to + cell/2)
			}
			a.Set(i, j, -p)
		}
		a.Set(i, i, 1+a.At(i, i))
		ones.SetVec(i, 1)
	}
	var l mat.VecDense
	if err := l.SolveVec(a, ones); err != nil {
		t.Fatal(err)
	}
	return l.AtVec(0)
}

func TestRunLengthsAgainstMarkovChain(t *testing.T) {
	for _, h := range []float64{1.5, 3.5, 4, 8.1, 12.66} {
		coarse, fine := chainRunLength(t, h, 125), chainRunLength(t, h, 250)
		near(t, "two-sided run length", modelcheck.RunLength(h), (fine+(fine-coarse)/3)/2, 3e-5)
	}
}
