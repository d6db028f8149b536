package server

import (
	"context"
	"fmt"
	"math"
	"time"

	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// outlookKeeper is what forecasts and budgets need of the keeper.
type outlookKeeper interface {
	Forecast(ctx context.Context, id engine.QuantityID, q engine.ForecastQuery) (engine.Forecast, error)
	Budget(ctx context.Context, id engine.QuantityID, q engine.BudgetQuery) (engine.Budget, error)
}

// ForecastBelief answers with what is to come of one quantity.
func (s *beliefService) ForecastBelief(ctx context.Context, r *leadlinev1.ForecastBeliefRequest) (*leadlinev1.Forecast, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	query := engine.ForecastQuery{Now: engine.InstantOf(s.now()), Steps: int(r.GetSteps())}
	if r.Steps != nil && r.GetSteps() == 0 { // which the engine would take for absent
		return nil, refuse(engine.InvalidField, "steps", "steps is 0; give a number from 1 to 1000, or leave it out for 10")
	}
	var err error
	if query.Horizon, err = horizonOf("horizon", r.GetHorizon()); err != nil {
		return nil, err
	}
	if query.Coverage, err = coverageOf(r.CoverageProbability); err != nil {
		return nil, err
	}
	f, err := s.outlook.Forecast(ctx, engine.QuantityID(r.GetQuantity()), query)
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return forecastText(&f) })
	return forecastMessage(&f), nil
}

func forecastMessage(f *engine.Forecast) *leadlinev1.Forecast {
	m := &leadlinev1.Forecast{
		Quantity: string(f.Quantity.ID), Unit: f.Quantity.Declaration.Unit,
		Time: timestamp(f.Time), Horizon: durationpb.New(f.Horizon),
		Revision: f.Quantity.Revision, LedgerPosition: uint64(f.Position), Rebuilding: f.Rebuilding,
		Undetermined: f.Undetermined,
	}
	for i := range f.Steps {
		m.Steps = append(m.Steps, stepMessage(&f.Steps[i], f.Coverage))
	}
	if f.HasCrossing {
		m.TimeToBreach = &leadlinev1.Forecast_TimeToBreach{
			Probability: f.Probability,
			LowerDecile: reached(f.LowerDecile), Median: reached(f.Median), UpperDecile: reached(f.UpperDecile),
		}
	}
	return m
}

// reached is nil for what isn't reached within the horizon.
func reached(d time.Duration) *durationpb.Duration {
	if d < 0 {
		return nil
	}
	return durationpb.New(d)
}

func stepMessage(s *engine.ForecastStep, coverage float64) *leadlinev1.Forecast_Step {
	m := &leadlinev1.Forecast_Step{Time: timestamp(s.Time)}
	m.Mean, m.StandardDeviation, m.Interval = summary(s.Level, coverage, s.Lower, s.Upper)
	if s.HasBreach && s.Level.Form() != posterior.FormNone {
		m.Breach = &leadlinev1.Belief_Breach{Below: s.Breach.Below, Above: s.Breach.Above, Either: s.Breach.Either}
	}
	if s.HasCrossed {
		m.Crossed = &leadlinev1.Forecast_Crossed{Below: s.Crossed.Below, Above: s.Crossed.Above, Either: s.Crossed.Either}
	}
	return m
}

// GetBudget answers with where the uncertainty of one quantity comes from.
func (s *beliefService) GetBudget(ctx context.Context, r *leadlinev1.GetBudgetRequest) (*leadlinev1.Budget, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	query := engine.BudgetQuery{Now: engine.InstantOf(s.now()), HasTime: r.GetTime() != nil}
	if query.HasTime {
		var err error
		if query.Time, err = instantOf("time", r.GetTime()); err != nil {
			return nil, err
		}
	}
	b, err := s.outlook.Budget(ctx, engine.QuantityID(r.GetQuantity()), query)
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return budgetText(&b) })
	return budgetMessage(&b), nil
}

func budgetMessage(b *engine.Budget) *leadlinev1.Budget {
	m := &leadlinev1.Budget{
		Quantity: string(b.Quantity.ID), Unit: b.Quantity.Declaration.Unit, Time: timestamp(b.Time),
		Revision: b.Quantity.Revision, LedgerPosition: uint64(b.Position), Rebuilding: b.Rebuilding,
		Undetermined: b.Undetermined,
	}
	if len(b.Undetermined) > 0 {
		return m
	}
	m.Variance, m.StandardDeviation = new(b.Variance), new(math.Sqrt(b.Variance))
	for i := range b.Parts {
		p := &b.Parts[i]
		m.Parts = append(m.Parts, &leadlinev1.Budget_Part{
			Source: sourceMessage(p.Source), Instrument: string(p.Instrument), Reference: p.Reference,
			Variance: p.Variance, StandardDeviation: math.Sqrt(p.Variance), Share: p.Variance / b.Variance,
		})
	}
	return m
}

// sourceMessage relies on both lists having the same words, which a test compares.
func sourceMessage(s engine.BudgetSource) leadlinev1.Budget_Source {
	value, ok := leadlinev1.Budget_Source_value[s.String()]
	if !ok {
		panic(fmt.Sprintf("budget source %d has no word in the interface", s))
	}
	return leadlinev1.Budget_Source(value)
}
