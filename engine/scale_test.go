package engine_test

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine"
)

// declaredOn is a quantity on a scale: the linear one of x, or the logarithmic one of exp x.
type declaredOn struct {
	id engine.QuantityID
	of func(x float64) float64
}

var bothScales = []declaredOn{{"linear", func(x float64) float64 { return x }}, {"logarithmic", math.Exp}}

// On the logarithmic scale all of a belief is that of the logarithm: the same readings of x and
// of exp x give the same probabilities, and intervals, forecasts and medians that are
// each other's exponentials.
func TestLogarithmicScaleIsThatOfTheLogarithm(t *testing.T) {
	for _, test := range []struct {
		name     string
		change   func(d *engine.Declaration)
		censored bool
	}{
		{"known", func(*engine.Declaration) {}, false},
		{"walk", walkingOn, false},
		{"trend", func(d *engine.Declaration) {
			d.Dynamics = engine.Dynamics{Form: engine.DynamicsLinearTrend, Slope: engine.Slope{StandardDeviation: 0.1, Per: time.Minute}}
		}, false},
		{"learned", learningOn, false},
		{"learned walk", func(d *engine.Declaration) { walkingOn(d); learningOn(d) }, false},
		{"censored", func(*engine.Declaration) {}, true},
		{"censored walk with outliers", func(d *engine.Declaration) {
			walkingOn(d)
			d.Outliers = engine.Outliers{Probability: 0.05, Inflation: 8}
		}, true},
	} {
		t.Run(test.name, func(t *testing.T) {
			var beliefs []engine.Belief
			var forecasts []engine.Forecast
			for _, on := range bothScales {
				r := newRig(t, engine.Options{})
				r.declare(on.id, on.declaration(test.change))
				rng := rand.New(rand.NewPCG(7, 11))
				for i := range 40 {
					x := 1 + 0.3*rng.NormFloat64()
					y := engine.Reading{Quantity: on.id, HasTime: true, Time: seconds(float64(10 * i)), Value: on.of(x)}
					if test.censored && i%4 == 1 {
						y.Extent = [...]engine.Extent{engine.ExtentAbove, engine.ExtentBelow, engine.ExtentBetween}[i%3]
						y.Value = on.of([...]float64{0.7, 1.4, 0.9}[i%3])
						if y.Extent == engine.ExtentBetween {
							y.Upper = on.of(1.2)
						}
					}
					if res := r.post(y.Time, y)[0]; res.Status != engine.Applied {
						t.Fatalf("%+v is refused: %s", y, res.Detail)
					}
				}
				q := engine.BeliefQuery{Now: seconds(500), HasThreshold: true, Threshold: on.of(1.05)}
				beliefs = append(beliefs, r.settled(on.id, q))
				f, err := r.keeper.Forecast(context.Background(), on.id, engine.ForecastQuery{Now: seconds(500), Horizon: time.Hour})
				if err != nil {
					t.Fatal(err)
				}
				forecasts = append(forecasts, f)
			}
			compareScales(t, &beliefs[0], &beliefs[1])
			a, b := forecasts[0], forecasts[1]
			same(t, "crossing", a.Probability, b.Probability)
			for i := range a.Steps {
				same(t, fmt.Sprint("step ", i, " above"), a.Steps[i].Breach.Above, b.Steps[i].Breach.Above)
				same(t, fmt.Sprint("step ", i, " upper"), math.Exp(a.Steps[i].Upper), b.Steps[i].Upper)
			}
		})
	}
}

func walkingOn(d *engine.Declaration) {
	d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.1, Per: time.Minute}
}

func learningOn(d *engine.Declaration) {
	d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.2, Worth: 3}
}

// declaration is of a quantity whose level on its scale is about 1.
func (on declaredOn) declaration(change func(*engine.Declaration)) engine.Declaration {
	d := engine.Declaration{
		Unit: "mg/L", Prior: engine.Prior{Form: engine.PriorInterval, Low: on.of(-1), High: on.of(2), Probability: 0.9},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.3},
		Tolerance:     engine.Tolerance{HasLower: true, HasUpper: true, Lower: on.of(0.8), Upper: on.of(1.3)},
	}
	if on.id == "logarithmic" {
		d.Scale = engine.ScaleLog
	}
	change(&d)
	return d
}

func compareScales(t *testing.T, a, b *engine.Belief) {
	t.Helper()
	same(t, "below", a.Below, b.Below)
	same(t, "above", a.Above, b.Above)
	same(t, "conformance", a.Conformance, b.Conformance)
	same(t, "threshold", a.ProbabilityBelow, b.ProbabilityBelow)
	same(t, "outside", a.OutsideEither, b.OutsideEither)
	same(t, "lower", math.Exp(a.Lower), b.Lower)
	same(t, "upper", math.Exp(a.Upper), b.Upper)
	same(t, "predictive upper", math.Exp(a.PredictiveUpper), b.PredictiveUpper)
	same(t, "repeatability", a.Repeatability.Median, b.Repeatability.Median)
	mean, _ := a.Level.Mean()
	geometric, ok := b.Level.GeometricMean()
	if !ok {
		t.Error("there is no geometric mean")
	}
	same(t, "geometric mean", math.Exp(mean), geometric)
	if a.Method != b.Method || a.Check.Result != b.Check.Result {
		t.Errorf("%s %v on the linear scale, %s %v on the logarithmic one", a.Method, a.Check.Result, b.Method, b.Check.Result)
	}
	same(t, "mean square of scores", a.Check.Total.MeanSquare, b.Check.Total.MeanSquare)
}

// same compares numbers that differ by rounding, of logarithms and exponentials too, alone.
func same(t *testing.T, what string, a, b float64) {
	t.Helper()
	if math.IsNaN(a) && math.IsNaN(b) {
		return
	}
	if !(math.Abs(a-b) <= 1e-7*math.Max(math.Abs(a), math.Abs(b))) {
		t.Errorf("%s is %v on the linear scale, %v from the logarithmic one", what, a, b)
	}
}

// The mean and standard deviation of a lognormal come back from a prior that states them.
func TestLogarithmicPriorHasItsMoments(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("residual", engine.Declaration{
		Unit: "mg/L", Scale: engine.ScaleLog, Prior: engine.Prior{Form: engine.PriorNormal, Mean: 0.5, StandardDeviation: 0.2},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.1},
	})
	b := r.belief("residual", engine.BeliefQuery{Now: start})
	mean, _ := b.Level.Mean()
	sd, _ := b.Level.StandardDeviation()
	if math.Abs(mean-0.5) > 1e-15 || math.Abs(sd-0.2) > 1e-15 {
		t.Errorf("the prior's mean and standard deviation are %v and %v, want 0.5 and 0.2", mean, sd)
	}
}
