package server

import (
	"fmt"
	"time"

	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

func dynamicsOf(d *leadlinev1.Dynamics) (engine.Dynamics, error) {
	switch {
	case d.GetRandomWalk() != nil:
		w := d.GetRandomWalk()
		y := engine.Dynamics{Form: engine.DynamicsRandomWalk}
		var err error
		y.StandardDeviation, y.Per, err = spreadOf("dynamics.random_walk", w.StandardDeviation, w.GetPer())
		return y, err
	case d.GetLinearTrend() != nil:
		return trendOf(d.GetLinearTrend())
	case d.GetMeanReverting() != nil:
		return revertingOf(d.GetMeanReverting())
	}
	return engine.Dynamics{}, nil
}

// spreadOf reads how far something moves in which time.
func spreadOf(message string, sd *float64, per *durationpb.Duration) (float64, time.Duration, error) {
	if err := together(message, given{"standard_deviation", sd}); err != nil {
		return 0, 0, err
	}
	if per == nil {
		return 0, 0, refuse(engine.MissingField, message+".per", message+".per is missing; give the time in which the movement has that standard deviation, such as \"86400s\"")
	}
	t, err := positiveOf(message+".per", per)
	return *sd, t, err
}

// positiveOf reads a time that has to be above 0. The engine would take 0 for
// absent in places.
func positiveOf(field string, d *durationpb.Duration) (time.Duration, error) {
	t, err := durationOf(field, d)
	if err == nil && t <= 0 {
		err = refuse(engine.InvalidField, field, fmt.Sprintf("%s is %v; give a duration above 0, such as \"86400s\"", field, t))
	}
	return t, err
}

func trendOf(t *leadlinev1.Dynamics_LinearTrend) (engine.Dynamics, error) {
	const message = "dynamics.linear_trend"
	y := engine.Dynamics{Form: engine.DynamicsLinearTrend}
	var err error
	if t.StandardDeviation != nil || t.GetPer() != nil {
		if err := notZero(message+".standard_deviation", t.StandardDeviation); err != nil {
			return y, err
		}
		if y.StandardDeviation, y.Per, err = spreadOf(message, t.StandardDeviation, t.GetPer()); err != nil {
			return y, err
		}
	}
	if t.GetSlope() == nil {
		return y, refuse(engine.MissingField, message+".slope", message+".slope is missing; give what was known of it, with mean, standard_deviation and per")
	}
	if y.Slope, err = slopeOf(message+".slope", t.GetSlope()); err != nil {
		return y, err
	}
	if w := t.GetSlopeWander(); w != nil {
		if err := notZero(message+".slope_wander.standard_deviation", w.StandardDeviation); err != nil {
			return y, err
		}
		y.Wander.StandardDeviation, y.Wander.Per, err = spreadOf(message+".slope_wander", w.StandardDeviation, w.GetPer())
	}
	return y, err
}

// slopeOf reads a slope.
func slopeOf(message string, s *leadlinev1.Slope) (engine.Slope, error) {
	if err := together(message, given{"mean", s.Mean}); err != nil {
		return engine.Slope{}, err
	}
	sd, per, err := spreadOf(message, s.StandardDeviation, s.GetPer())
	return engine.Slope{Mean: s.GetMean(), StandardDeviation: sd, Per: per}, err
}

func revertingOf(m *leadlinev1.Dynamics_MeanReverting) (engine.Dynamics, error) {
	const message = "dynamics.mean_reverting"
	y := engine.Dynamics{Form: engine.DynamicsMeanReverting, Mean: m.GetMean(), StandardDeviation: m.GetStandardDeviation()}
	if err := together(message, given{"mean", m.Mean}, given{"standard_deviation", m.StandardDeviation}); err != nil {
		return y, err
	}
	if m.GetHalfLife() == nil {
		return y, refuse(engine.MissingField, message+".half_life", message+".half_life is missing; give the time after which half of a deviation is gone, such as \"3600s\"")
	}
	var err error
	y.HalfLife, err = positiveOf(message+".half_life", m.GetHalfLife())
	return y, err
}

// notZero refuses a number that the engine would take for absent.
func notZero(field string, x *float64) error {
	if x != nil && *x == 0 {
		return refuse(engine.InvalidField, field, field+" is 0; give a number above 0, or leave it out")
	}
	return nil
}

func dynamicsMessage(d engine.Dynamics) *leadlinev1.Dynamics {
	switch d.Form {
	case engine.DynamicsRandomWalk:
		walk := &leadlinev1.Dynamics_RandomWalk{StandardDeviation: &d.StandardDeviation, Per: durationpb.New(d.Per)}
		return &leadlinev1.Dynamics{Model: &leadlinev1.Dynamics_RandomWalk_{RandomWalk: walk}}
	case engine.DynamicsLinearTrend:
		return &leadlinev1.Dynamics{Model: &leadlinev1.Dynamics_LinearTrend_{LinearTrend: trendMessage(&d)}}
	case engine.DynamicsMeanReverting:
		reverting := &leadlinev1.Dynamics_MeanReverting{Mean: &d.Mean, StandardDeviation: &d.StandardDeviation, HalfLife: durationpb.New(d.HalfLife)}
		return &leadlinev1.Dynamics{Model: &leadlinev1.Dynamics_MeanReverting_{MeanReverting: reverting}}
	}
	return &leadlinev1.Dynamics{Model: &leadlinev1.Dynamics_Constant_{Constant: &leadlinev1.Dynamics_Constant{}}}
}

func trendMessage(d *engine.Dynamics) *leadlinev1.Dynamics_LinearTrend {
	m := &leadlinev1.Dynamics_LinearTrend{Slope: slopeMessage(&d.Slope)}
	if d.Per != 0 {
		m.StandardDeviation, m.Per = &d.StandardDeviation, durationpb.New(d.Per)
	}
	if d.Wander.Per != 0 {
		m.SlopeWander = &leadlinev1.Dynamics_SlopeWander{StandardDeviation: &d.Wander.StandardDeviation, Per: durationpb.New(d.Wander.Per)}
	}
	return m
}

func slopeMessage(s *engine.Slope) *leadlinev1.Slope {
	return &leadlinev1.Slope{Mean: new(s.Mean), StandardDeviation: new(s.StandardDeviation), Per: durationpb.New(s.Per)}
}
