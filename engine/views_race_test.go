package engine_test

import (
	"context"
	"sync"
	"testing"
	"time"

	"leadline.example/engine"
)

// Queries of every kind share a view with each other and with readings that arrive; the
// race detector sees to it that none changes it.
func TestQueriesShareAViewSafely(t *testing.T) {
	for _, test := range []struct {
		method engine.Method
		change func(*engine.Declaration)
	}{
		{engine.MethodBank, learningOn},
		{engine.MethodGrid, func(d *engine.Declaration) { d.Outliers = engine.Outliers{Probability: 0.05, Inflation: 9} }},
		{engine.MethodCounts, func(d *engine.Declaration) { d.Dynamics = engine.Dynamics{} }},
	} {
		t.Run(string(test.method), func(t *testing.T) {
			r := newRig(t, engine.Options{})
			r.declare("residual", bothScales[0].declaration(func(d *engine.Declaration) {
				walkingOn(d)
				test.change(d)
			}))
			post := func(i int) {
				y := engine.Reading{Quantity: "residual", HasTime: true, Time: seconds(float64(i)), Value: 1 + 0.1*float64(i%5)}
				if test.method == engine.MethodCounts && i%2 == 0 {
					y.Extent = engine.ExtentBelow
				}
				if _, err := r.keeper.Post(context.Background(), engine.Batch{Readings: []engine.Reading{y}, Receive: y.Time}); err != nil {
					t.Error(err)
				}
			}
			post(0)
			// Another text: the model is exchanged for one that gives the same beliefs.
			r.declare("residual", bothScales[0].declaration(func(d *engine.Declaration) {
				walkingOn(d)
				test.change(d)
				d.Description = "declared anew"
			}))
			var all sync.WaitGroup
			for range 3 {
				all.Go(func() {
					for i := range 3 {
						b, err := r.keeper.Belief(context.Background(), "residual", engine.BeliefQuery{Now: seconds(float64(40 + i))})
						if err != nil || b.Method != test.method {
							t.Errorf("%s: %v", b.Method, err)
						}
						if _, err := r.keeper.Forecast(context.Background(), "residual", engine.ForecastQuery{Now: seconds(40), Horizon: time.Minute, Steps: 2}); err != nil {
							t.Error(err)
						}
						if _, err := r.keeper.ModelCheck(context.Background(), "residual", seconds(40)); err != nil {
							t.Error(err)
						}
					}
				})
			}
			for i := 1; i < 12; i++ {
				post(i)
			}
			all.Wait()
		})
	}
}
