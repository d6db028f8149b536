package modelcheck_test

import (
	"fmt"
	"math"
	"testing"

	"leadline.example/engine/modelcheck"
)

// The tables of testdata/reference are made by modelcheck.py there, with mpmath.

func TestSerialAgainstImhof(t *testing.T) {
	for _, row := range table(t, "reference/serial.csv") {
		n, r := int(row[0]), row[1]
		near(t, fmt.Sprintf("P(|R| > %v) of %d", r, n), modelcheck.SerialProbability(n, r), row[2], 1e-9)
		near(t, fmt.Sprintf("P(|R| > %v) of %d, negative", r, n), modelcheck.SerialProbability(n, -r), row[2], 1e-9)
	}
}

// The largest value that R can have is cos(pi / (n + 1)); all are beyond 0.
func TestSerialEnds(t *testing.T) {
	for _, n := range []int{modelcheck.MinWindow, 64, modelcheck.MaxWindow} {
		within(t, "P(|R| > 0)", modelcheck.SerialProbability(n, 0), 1, 1e-11)
		top := math.Cos(math.Pi / float64(n+1))
		if p := modelcheck.SerialProbability(n, top); p != 0 {
			t.Errorf("P(|R| > its largest value) of %d = %v", n, p)
		}
		if p := modelcheck.SerialProbability(n, top*(1-1e-9)); !(p >= 0 && p < 1e-60) {
			t.Errorf("P(|R| > nearly its largest value) of %d = %v", n, p)
		}
	}
}

func TestSumsOfSquaresAgainstReference(t *testing.T) {
	for _, row := range table(t, "reference/squares.csv") {
		n, x := int(row[0]), row[1]
		name := fmt.Sprintf("chi-squared of %d at %v: ", n, x)
		near(t, name+"below", modelcheck.WideProbability(n, x), row[2], 1e-9)
		near(t, name+"above", modelcheck.NarrowProbability(n, x), row[3], 1e-9)
	}
}

func TestTruncatedMomentsAgainstQuadrature(t *testing.T) {
	for _, row := range table(t, "reference/truncated.csv") {
		a, b := row[0], row[1]
		mean, square := modelcheck.TruncatedMoments(a, b)
		name := fmt.Sprintf("Z between %v and %v: ", a, b)
		within(t, name+"mean", mean, row[2], 1e-12*math.Max(math.Abs(row[2]), math.Min(b-a, 1)))
		near(t, name+"square", square, row[3], 1e-12)
		mean, square = modelcheck.TruncatedMoments(-b, -a)
		within(t, name+"mirrored mean", mean, -row[2], 1e-12*math.Max(math.Abs(row[2]), math.Min(b-a, 1)))
		near(t, name+"mirrored square", square, row[3], 1e-12)
	}
}

// The cube root of Wilson and Hilferty and the normal law only select what is worth an
// exact probability: none that is below the highest level may lie within their bounds.
func TestBoundsHideNoObjection(t *testing.T) {
	for n := modelcheck.MinWindow; n <= modelcheck.MaxWindow; n += 1 + n/9 {
		law := modelcheck.LawOf(modelcheck.Settings{Window: n, FalseAlarmInterval: 100})
		low, high, lag := law.Bounds()
		for name, p := range map[string]float64{
			"wide": modelcheck.WideProbability(n, low), "narrow": modelcheck.NarrowProbability(n, high), "serial": modelcheck.SerialProbability(n, lag),
		} {
			if p < modelcheck.MaxLevel/modelcheck.Shares || p > 4*modelcheck.MaxLevel/modelcheck.Shares {
				t.Errorf("window %d: the bound of %s has probability %v", n, name, p)
			}
		}
	}
}

func TestScoresAgainstReference(t *testing.T) {
	for _, row := range table(t, "reference/scores.csv") {
		z, below, above := row[0], row[1], row[2]
		got := modelcheck.ScoreOf(below, above)
		near(t, "score", got.Lower, z, 1e-13)
		if !got.Exact() {
			t.Errorf("the score of a value is %+v", got)
		}
		near(t, "tail", got.Tail(), 2*math.Min(below, above), 1e-11)
	}
}

// What was censored is as far out as the nearer end of what it may have been.
func TestTailsOfIntervals(t *testing.T) {
	for _, test := range []struct {
		name                     string
		below, from, upTo, above float64
		tail                     float64
	}{
		{"all", 0, 1, 1, 0, 1},
		{"above the median", 0.5, 0.5, 1, 0, 1},
		{"above a far value", 1, 1e-12, 1, 0, 2e-12},
		{"below a far value", 0, 1, 1e-12, 1, 2e-12},
		{"a far cell", 1, 1e-20, 1, 1e-21, 2e-20},
		{"about the median", 0.4, 0.6, 0.7, 0.3, 1},
		{"below the median", 0.1, 0.9, 0.2, 0.8, 0.4},
		{"no probability", 1, 1e-30, 1, 2e-30, 2e-30},
	} {
		z := modelcheck.ScoreBetween(test.below, test.from, test.upTo, test.above)
		near(t, test.name, z.Tail(), test.tail, 1e-11)
		if !(z.Lower <= z.Upper && z.Lower >= -38 && z.Upper <= 38) {
			t.Errorf("%s: %+v", test.name, z)
		}
	}
}

func TestScoresAreBounded(t *testing.T) {
	for _, z := range []modelcheck.Score{modelcheck.ScoreOf(1, 0), modelcheck.ScoreAt(1e9), modelcheck.ScoreAt(math.Inf(1))} {
		if z != (modelcheck.Score{Lower: 38, Upper: 38}) {
			t.Errorf("%+v", z)
		}
	}
}

// Probabilities that rounding put outside of [0, 1] count as its ends.
func TestRoundedProbabilitiesHaveScores(t *testing.T) {
	const over = 1.0000000000000002
	for _, test := range []struct{ below, above, want float64 }{
		{-1e-18, 1, -38},
		{1, -1e-18, 38},
		{-1e-18, over, -38},
		{over, -1e-18, 38},
		{over, 0, 38},
		{over, 0.5, 0},
		{over, 1.0000000001, 38}, // contradicts itself, and is a score all the same
		{math.Inf(-1), math.Inf(1), -38},
	} {
		if got := modelcheck.ScoreOf(test.below, test.above); got != (modelcheck.Score{Lower: test.want, Upper: test.want}) {
			t.Errorf("%v below and %v above: %+v, want %v", test.below, test.above, got, test.want)
		}
	}
	if got := modelcheck.ScoreBetween(-1e-18, over, over, -1e-18); got != (modelcheck.Score{Lower: -38, Upper: 38}) {
		t.Errorf("an interval that has all: %+v", got)
	}
}

// What isn't a number gives no score, on whichever side it is, and counts as no reading.
func TestNaNGivesNoScore(t *testing.T) {
	nan := math.NaN()
	law := modelcheck.LawOf(modelcheck.Settings{})
	for name, z := range map[string]modelcheck.Score{
		"below":            modelcheck.ScoreOf(nan, 0.3),
		"above":            modelcheck.ScoreOf(0.3, nan),
		"value":            modelcheck.ScoreAt(nan),
		"below the lower":  modelcheck.ScoreBetween(nan, 0.9, 0.2, 0.8),
		"from the lower":   modelcheck.ScoreBetween(0.1, nan, 0.2, 0.8),
		"up to the higher": modelcheck.ScoreBetween(0.1, 0.9, nan, 0.8),
		"above the higher": modelcheck.ScoreBetween(0.1, 0.9, 0.2, nan),
	} {
		var tally modelcheck.Tally
		tally.Add(&law, z, 1)
		if r := tally.Report(&law); z.Lower <= z.Upper || r.Total.Readings != 0 {
			t.Errorf("%s: score %+v, %d readings", name, z, r.Total.Readings)
		}
	}
}

// The bounds of the central intervals have the probabilities that they are for.
func TestCentralIntervals(t *testing.T) {
	near(t, "beyond the quartiles", math.Erfc(modelcheck.Quartile/math.Sqrt2), 0.5, 1e-15)
	near(t, "beyond the shoulders", math.Erfc(modelcheck.Shoulder/math.Sqrt2), 0.05, 1e-15)
	near(t, "outlying", math.Erfc(modelcheck.Outlying/math.Sqrt2), modelcheck.OutlyingProbability, 1e-14)
}
