package engine_test

import (
	"context"
	"errors"
	"math"
	"testing"
	"time"

	"leadline.example/engine"
)

func (r *rig) forecast(id engine.QuantityID, q engine.ForecastQuery) engine.Forecast {
	r.t.Helper()
	f, err := r.keeper.Forecast(context.Background(), id, q)
	if err != nil {
		r.t.Fatalf("forecast of %s: %v", id, err)
	}
	return f
}

// wearing declares a gap that wears towards its upper limit.
func wearing(horizon time.Duration) engine.Declaration {
	return with(gap(), func(d *engine.Declaration) {
		d.Prior = engine.Prior{}
		d.Tolerance = engine.Tolerance{HasUpper: true, Upper: 110}
		d.BreachHorizon = horizon
		d.Dynamics = engine.Dynamics{
			Form: engine.DynamicsLinearTrend, StandardDeviation: 0.1, Per: time.Minute,
			Slope: engine.Slope{StandardDeviation: 10, Per: time.Minute},
		}
	})
}

// A level that rises by a unit in 10 s from 100 reaches 110 in about 100 s.
func TestForecastOfWear(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, wearing(5*time.Minute))
	if f := r.forecast(gapID, engine.ForecastQuery{Now: start}); f.HasCrossing || len(f.Undetermined) == 0 || len(f.Steps) != 10 {
		t.Errorf("of nothing known: %+v", f)
	}
	for i := range 200 {
		noise := math.Sin(float64(i) * 2.3)
		r.post(seconds(300), reading(gapID, seconds(float64(i)/4), 95+float64(i)/40+noise, ""))
	}
	now := seconds(50)
	f := r.forecast(gapID, engine.ForecastQuery{Now: now, Steps: 5, Coverage: 0.9})
	if f.Probability < 0.99 || f.Median < 80*time.Second || f.Median > 120*time.Second ||
		f.LowerDecile >= f.Median || f.Median >= f.UpperDecile || f.Horizon != 5*time.Minute {
		t.Errorf("got %+v, want a median of about 100 s", f)
	}
	crossed := 0.0
	for _, s := range f.Steps {
		b := r.belief(gapID, engine.BeliefQuery{HasTime: true, Time: s.Time, Coverage: 0.9})
		if b.Level != s.Level || b.Lower != s.Lower || b.Upper != s.Upper || b.Above != s.Breach.Above {
			t.Errorf("at %v the forecast is %+v, the belief %+v", s.Time, s, b)
		}
		if s.Crossed.Either < crossed-1e-12 || s.Crossed.Either < s.Breach.Either-1e-9 {
			t.Errorf("at %v a limit has been crossed with %v, after %v; outside now with %v", s.Time, s.Crossed.Either, crossed, s.Breach.Either)
		}
		crossed = s.Crossed.Either
	}
	v := r.keeper.Tracks()[0].View()
	figures := r.figuresAhead(v, now)
	if !figures.HasMedian || figures.HorizonProbability != f.Probability ||
		time.Duration(figures.MedianSeconds*float64(time.Second)).Round(time.Microsecond) != f.Median.Round(time.Microsecond) {
		t.Errorf("the figures are %+v, want those of %+v", figures, f)
	}
	if later, err := r.keeper.Figures(v, now+engine.Instant(time.Second)); err != nil || later.HorizonProbability != figures.HorizonProbability {
		t.Errorf("a second later they are %+v (%v), want the same", later, err)
	}
	r.declare(gapID, with(wearing(5*time.Minute), func(d *engine.Declaration) { d.Tolerance.Upper = 1000 }))
	if f, err := r.keeper.Figures(r.keeper.Tracks()[0].View(), now); err != nil || f.HasHorizon {
		t.Errorf("with another tolerance, before anyone has looked: %+v (%v)", f, err)
	}
	if f := r.figuresAhead(r.keeper.Tracks()[0].View(), now); f.HasMedian || f.HorizonProbability > 1e-3 {
		t.Errorf("with another tolerance the figures are %+v", f)
	}
}

// figuresAhead asks until the forecaster has looked.
func (r *rig) figuresAhead(v *engine.View, at engine.Instant) engine.Figures {
	r.t.Helper()
	for range 10_000_000 {
		f, err := r.keeper.Figures(v, at)
		if err != nil {
			r.t.Fatal(err)
		}
		if f.HasHorizon {
			return f
		}
	}
	r.t.Fatal("the forecaster doesn't look")
	return engine.Figures{}
}

// What doesn't move is outside now or never.
func TestForecastOfAConstant(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	r.post(start, reading(gapID, start, 98, ""))
	b := r.belief(gapID, engine.BeliefQuery{Now: start})
	f := r.forecast(gapID, engine.ForecastQuery{Now: start, Horizon: time.Hour})
	if f.Probability != b.Either || f.Median != 0 || f.UpperDecile != 0 || f.Steps[9].Crossed.Either != b.Either {
		t.Errorf("got %+v, want the breach probability %v now", f, b.Either)
	}
}

func TestForecastIsChecked(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare(gapID, gap())
	for _, test := range []struct {
		field string
		q     engine.ForecastQuery
	}{
		{"horizon", engine.ForecastQuery{}},
		{"horizon", engine.ForecastQuery{Horizon: -1}},
		{"horizon", engine.ForecastQuery{Horizon: math.MaxInt64}},
		{"steps", engine.ForecastQuery{Horizon: time.Hour, Steps: 1001}},
		{"coverage_probability", engine.ForecastQuery{Horizon: time.Hour, Coverage: 1}},
	} {
		test.q.Now = start
		var refused *engine.Error
		if _, err := r.keeper.Forecast(context.Background(), gapID, test.q); !errors.As(err, &refused) || refused.Field != test.field {
			t.Errorf("%+v: got %v, want an objection to %s", test.q, err, test.field)
		}
	}
	if _, _, err := r.keeper.Declare(context.Background(), gapID, with(gap(), func(d *engine.Declaration) {
		d.BreachHorizon, d.Tolerance = time.Hour, engine.Tolerance{}
	}), engine.Condition{}, start); err == nil {
		t.Error("a horizon without a tolerance went through")
	}
}
