package modelcheck_test

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"leadline.example/engine/modelcheck"
)

// explained is a case of testdata/reference/explain.json.
type explained struct {
	Name                                string
	Walk, Guess, Worth, Floor           float64
	Seconds, Value, Variance, Learned   []float64
	Declared, Stays, Moving, Correlated struct {
		LogLikelihood        float64 `json:"log_likelihood"`
		R, Walk, SD, Seconds float64
	}
}

func explainedCases(t *testing.T) []explained {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("..", "..", "testdata", "reference", "explain.json"))
	if err != nil {
		t.Fatal(err)
	}
	var cases []explained
	if err := json.Unmarshal(b, &cases); err != nil || len(cases) == 0 {
		t.Fatalf("%d cases: %v", len(cases), err)
	}
	return cases
}

func (c *explained) points() []modelcheck.Point {
	points := make([]modelcheck.Point, len(c.Value))
	for i := range points {
		points[i] = modelcheck.Point{Seconds: c.Seconds[i], Value: c.Value[i], Variance: c.Variance[i], Learned: c.Learned[i]}
	}
	return points
}

// The greatest log-likelihoods by differential evolution over dense covariances, and where they
// are. Where r vanishes beside the rest, no more is known of it than that.
func TestExplanationsOfPublishedReadings(t *testing.T) {
	for _, c := range explainedCases(t) {
		t.Run(c.Name, func(t *testing.T) {
			e := modelcheck.Explain(c.points(), c.Walk, modelcheck.Learned{Guess: c.Guess, Worth: c.Worth, Floor: c.Floor})
			within(t, "declared", e.Declared, c.Declared.LogLikelihood, 1e-5)
			near(t, "declared: r", e.R, c.Declared.R, 1e-3)

			within(t, "moving", e.Moving.LogLikelihood, math.Max(c.Moving.LogLikelihood, c.Declared.LogLikelihood), 1e-5)
			near(t, "moving: walk", e.Moving.Walk, c.Moving.Walk, 2e-3)
			near(t, "moving: r", e.Moving.R, c.Moving.R, 1e-3)

			within(t, "correlated", e.Correlated.LogLikelihood, c.Correlated.LogLikelihood, 1e-5)
			near(t, "correlated: sd", e.Correlated.SD, c.Correlated.SD, 1e-3)
			near(t, "correlated: seconds", e.Correlated.Seconds, c.Correlated.Seconds, 2e-3)
			if c.Correlated.R > 1e-2*c.Declared.R {
				near(t, "correlated: r", e.Correlated.R, c.Correlated.R, 1e-3)
			} else if e.Correlated.R > 1e-2*c.Declared.R {
				t.Errorf("correlated: r is %v, want about 0", e.Correlated.R)
			}
		})
	}
}

// No process on a grid over two of its numbers, and r besides, is likelier than what was fitted.
func TestExplanationsWithLearnedRAreTheGreatest(t *testing.T) {
	for _, test := range []struct {
		name              string
		walk, sd, seconds float64 // true
	}{
		{"as declared", 0, 0, 1},
		{"walk", 0.05, 0, 1},
		{"correlated noise", 0, 1.5, 30},
	} {
		points := irregular(t, 24, test.walk, test.sd, test.seconds)
		for i := range points {
			points[i].Learned = points[i].Variance
			points[i].Variance = 0.1
		}
		given := func(r float64) []modelcheck.Point {
			known := make([]modelcheck.Point, len(points))
			for i, p := range points {
				known[i] = modelcheck.Point{Seconds: p.Seconds, Value: p.Value, Variance: p.Variance + p.Learned*r*r}
			}
			return known
		}
		e := modelcheck.Explain(points, 0, modelcheck.Learned{})
		within(t, test.name+": declared", e.Declared, denseLogLikelihood(t, given(e.R), 0, 0, 1), 1e-7)
		within(t, test.name+": moving", e.Moving.LogLikelihood, denseLogLikelihood(t, given(e.Moving.R), e.Moving.Walk, 0, 1), 1e-7)
		within(t, test.name+": correlated", e.Correlated.LogLikelihood,
			denseLogLikelihood(t, given(e.Correlated.R), 0, e.Correlated.SD, e.Correlated.Seconds), 1e-5)
		for r := 0.05; r < 10; r *= 1.3 {
			known := given(r)
			for x := -10.0; x < 6; x += 0.5 {
				if better := denseLogLikelihood(t, known, math.Exp(x), 0, 1); better > e.Moving.LogLikelihood+1e-5 {
					t.Errorf("%s: walk %g and r %g have %v, the fit %+v", test.name, math.Exp(x), r, better, e.Moving)
				}
				for sd := 0.1; sd < 30; sd *= 2 {
					if better := denseLogLikelihood(t, known, 0, sd, math.Exp(x)); better > e.Correlated.LogLikelihood+1e-5 {
						t.Errorf("%s: sd %g in %g s and r %g have %v, the fit %+v", test.name, sd, math.Exp(x), r, better, e.Correlated)
					}
				}
			}
		}
	}
}

// A guess of great worth is a known r, and costs nothing.
func TestExplanationsTakeAFirmGuessForKnown(t *testing.T) {
	c := explainedCases(t)[0]
	learned, known := c.points(), c.points()
	for i := range known {
		known[i].Variance, known[i].Learned = 0.05*0.05, 0
	}
	got := modelcheck.Explain(learned, 0, modelcheck.Learned{Guess: 0.05, Worth: 1e9})
	want := modelcheck.Explain(known, 0, modelcheck.Learned{})
	within(t, "declared", got.Declared, want.Declared, 1e-4)
	within(t, "moving", got.Moving.LogLikelihood, want.Moving.LogLikelihood, 1e-4)
	within(t, "correlated", got.Correlated.LogLikelihood, want.Correlated.LogLikelihood, 1e-4)
	near(t, "r", got.Correlated.R, 0.05, 1e-3)
	if want.R != 0 || want.Moving.R != 0 || want.Correlated.R != 0 {
		t.Errorf("a known r is reported as fitted: %+v", want)
	}
}

// Units are free: values in thousandths have the same explanation, but for the factor that a
// density takes.
func TestExplanationsDoNotDependOnTheUnit(t *testing.T) {
	c := explainedCases(t)[1]
	e := modelcheck.Explain(c.points(), 0, modelcheck.Learned{})
	for i := range c.Value {
		c.Value[i] *= 1000
		c.Seconds[i] /= 60
	}
	f := modelcheck.Explain(c.points(), 0, modelcheck.Learned{})
	factor := float64(len(c.Value)-1) * math.Log(1000)
	within(t, "declared", f.Declared+factor, e.Declared, 1e-6)
	within(t, "moving", f.Moving.LogLikelihood+factor, e.Moving.LogLikelihood, 1e-5)
	within(t, "correlated", f.Correlated.LogLikelihood+factor, e.Correlated.LogLikelihood, 1e-5)
	near(t, "r", f.Moving.R, 1000*e.Moving.R, 1e-3)
	near(t, "walk", f.Moving.Walk, 60e6*e.Moving.Walk, 2e-3)
	near(t, "seconds", f.Correlated.Seconds, e.Correlated.Seconds/60, 2e-3)
}

// Readings that all say one value are explained by any r, unless something is known of
// their noise.
func TestExplanationsOfOneValue(t *testing.T) {
	points := make([]modelcheck.Point, 20)
	for i := range points {
		points[i] = modelcheck.Point{Seconds: float64(i), Value: 7, Learned: 1}
	}
	if e := modelcheck.Explain(points, 0, modelcheck.Learned{}); e != (modelcheck.Explanation{}) {
		t.Errorf("there is nothing to explain: %+v", e)
	}
	for i := range points {
		points[i].Variance = 1.0 / 12
	}
	e := modelcheck.Explain(points, 0, modelcheck.Learned{})
	for i := range points {
		points[i].Learned = 0
	}
	within(t, "displayed alike", e.Declared, denseLogLikelihood(t, points, 0, 0, 1), 1e-4)
	if e.Readings != 20 || e.R > 0.01 {
		t.Errorf("%+v", e)
	}
}

// Values and times that repeat, and few readings or none that inform r, still give finite
// explanations, of which none is less likely than what is declared.
func TestExplanationsAreOrderedAndFinite(t *testing.T) {
	rng := source(t)
	for range 40 {
		points := scattered(rng, 16+rng.IntN(8))
		walk := rng.Float64() * float64(rng.IntN(2))
		e := modelcheck.Explain(points, walk, modelcheck.Learned{})
		for _, v := range []float64{e.Declared, e.Moving.LogLikelihood, e.Correlated.LogLikelihood, e.R, e.Moving.R, e.Correlated.R} {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				t.Fatalf("%+v of %+v", e, points)
			}
		}
		if e.Moving.LogLikelihood < e.Declared || e.Correlated.LogLikelihood < e.Declared || e.Readings != len(points) {
			t.Errorf("%+v of %+v", e, points)
		}
	}
}

// scattered makes readings of few values and times, some of known noise.
func scattered(rng *rand.Rand, n int) []modelcheck.Point {
	points := make([]modelcheck.Point, n)
	at, learns := 0.0, rng.Float64()
	for i := range points {
		at += float64(rng.IntN(3))
		points[i] = modelcheck.Point{Seconds: at, Value: float64(rng.IntN(3)), Variance: 1}
		if rng.Float64() < learns {
			points[i].Variance, points[i].Learned = 0, 1/float64(1+rng.IntN(5))
		}
	}
	return points
}
