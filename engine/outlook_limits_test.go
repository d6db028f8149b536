package engine_test

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine"
)

// A repeatability that is learned but known well beforehand, and outliers that hardly occur,
// leave the forecast of a known repeatability without outliers, which is exact.
func TestForecastsAgreeInTheLimit(t *testing.T) {
	moving := map[string]engine.Dynamics{
		"walk": {Form: engine.DynamicsRandomWalk, StandardDeviation: 0.2, Per: time.Minute},
		"trend": {
			Form: engine.DynamicsLinearTrend, StandardDeviation: 0.1, Per: time.Minute,
			Slope: engine.Slope{StandardDeviation: 0.02, Per: time.Minute},
		},
		"reverting": {Form: engine.DynamicsMeanReverting, Mean: 100, StandardDeviation: 1, HalfLife: 10 * time.Minute},
	}
	sharp := func(d *engine.Declaration) {
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.3, Worth: 1e7}
	}
	rare := func(d *engine.Declaration) { d.Outliers = engine.Outliers{Probability: 1e-12, Inflation: 2} }
	for _, test := range []struct {
		dynamics string
		change   func(*engine.Declaration)
		method   engine.Method
	}{
		{"walk", sharp, engine.MethodBank}, {"trend", sharp, engine.MethodBank}, {"reverting", sharp, engine.MethodBank},
		{"walk", rare, engine.MethodGrid}, {"reverting", rare, engine.MethodGrid},
	} {
		t.Run(test.dynamics+" "+string(test.method), func(t *testing.T) {
			var outlook [2]engine.Forecast
			for i, change := range []func(*engine.Declaration){func(*engine.Declaration) {}, test.change} {
				r := newRig(t, engine.Options{})
				r.declare(gapID, with(gap(), func(d *engine.Declaration) {
					d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.3}
					d.Dynamics = moving[test.dynamics]
					d.Tolerance = engine.Tolerance{HasLower: true, HasUpper: true, Lower: 98, Upper: 101.5}
					change(d)
				}))
				rng := rand.New(rand.NewPCG(3, 5))
				for k := range 20 {
					at := seconds(float64(30 * k))
					r.post(at, engine.Reading{Quantity: gapID, HasTime: true, Time: at, Value: 100 + 0.3*rng.NormFloat64()})
				}
				outlook[i] = r.forecast(gapID, engine.ForecastQuery{Now: seconds(700), Horizon: 30 * time.Minute})
				if b := r.settled(gapID, engine.BeliefQuery{Now: seconds(700)}); i == 1 && b.Method != test.method {
					t.Fatalf("the belief is held by %s", b.Method)
				}
			}
			known, other := &outlook[0], &outlook[1]
			for i := range known.Steps {
				a, b := known.Steps[i].Crossed.Either, other.Steps[i].Crossed.Either
				if math.Abs(a-b) > 2e-3*a+1e-5 {
					t.Errorf("after step %d a limit has been crossed with probability %v, want %v", i, b, a)
				}
			}
			if a, b := known.Median.Seconds(), other.Median.Seconds(); math.Abs(a-b) > 5e-3*math.Abs(a)+0.1 {
				t.Errorf("the median time to breach is %v s, want %v s", b, a)
			}
		})
	}
}
