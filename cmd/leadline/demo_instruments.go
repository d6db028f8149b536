package main

import (
	"math"
	"math/rand/v2"
	"time"

	"leadline.example/engine"
)

// plantInstrument is one instrument of the plant: how it is declared, and how it
// really errs, which nobody in the plant knows.
type plantInstrument struct {
	id          engine.InstrumentID
	declaration engine.InstrumentDeclaration
	bias        float64
	swing       *swing // nil: its noise is white
}

// swing is noise that neighbouring readings share, as of a transmitter sampled
// faster than it settles.
type swing struct {
	sd, seconds float64
	level       float64
	last        time.Time
}

// next moves the swing on to an instant.
func (s *swing) next(random *rand.Rand, at time.Time) float64 {
	left := math.Exp(-at.Sub(s.last).Seconds() / s.seconds)
	if s.last.IsZero() {
		left = 0
	}
	s.level = left*s.level + s.sd*math.Sqrt(1-left*left)*random.NormFloat64()
	s.last = at
	return s.level
}

const (
	overdueGauge engine.InstrumentID = "feeler-gauge-2"
	wallProbe    engine.InstrumentID = "store-4.wall-probe"
	returnProbe  engine.InstrumentID = "store-4.return-air-probe"
	fastSender   engine.InstrumentID = "brine-pump-1.pressure-transmitter"
	bearingGauge engine.InstrumentID = "dial-gauge-5"

	oilThermometer engine.InstrumentID = "compressor-1.oil-thermometer"
)

const (
	day            = 24 * time.Hour
	referenceProbe = "reference thermometer 3"
)

// plantInstruments are the plant's instruments, calibrated before its start.
func plantInstruments(start time.Time) []plantInstrument {
	ago := func(d time.Duration) engine.Instant { return engine.InstantOf(start.Add(-d)) }
	probe := func(where string, bias float64) engine.InstrumentDeclaration {
		return engine.InstrumentDeclaration{
			Unit: "Cel", Description: "thermometer of store room 4, " + where, Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.1}, Resolution: 0.1,
			Calibrations: []engine.Calibration{{
				ValidFrom: ago(90 * day), Bias: bias, ExpandedUncertainty: 0.5, CoverageFactor: 2,
				Reference: referenceProbe, CommonStandardUncertainty: 0.1,
				HasDue: true, Due: ago(-275 * day),
			}},
		}
	}
	return []plantInstrument{
		{
			id: overdueGauge, bias: 0.004,
			declaration: engine.InstrumentDeclaration{
				Unit: "mm", Description: "feeler gauges, workshop; their calibration is past due",
				Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.01, BetweenOccasions: 0.01},
				Calibrations: []engine.Calibration{{
					ValidFrom: ago(500 * day), BiasStandardUncertainty: 0.005,
					DriftStandardDeviation: 0.01, DriftPer: 365 * day, HasDue: true, Due: ago(135 * day),
				}},
			},
		},
		{id: wallProbe, bias: 0.35, declaration: probe("on the wall", 0.1)},
		{id: returnProbe, bias: -0.3, declaration: probe("in the return air", 0)},
		{
			id: fastSender, bias: 0.005, swing: &swing{sd: 0.03, seconds: 15},
			declaration: engine.InstrumentDeclaration{
				Unit: "bar", Description: "delivery pressure transmitter, damped; neighbouring readings share their error",
				Repeatability: engine.InstrumentRepeatability{
					StandardDeviation: 0.01, Correlated: engine.Correlated{StandardDeviation: 0.03, Time: 15 * time.Second},
				},
				Calibrations: []engine.Calibration{{ValidFrom: ago(30 * day), BiasStandardUncertainty: 0.01}},
			},
		},
		{
			id: oilThermometer,
			declaration: engine.InstrumentDeclaration{
				Unit: "Cel", Description: "dial thermometer in the oil line, read to half a degree",
				Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.1}, Resolution: 0.5,
			},
		},
		{
			id: bearingGauge, bias: 0.002,
			declaration: engine.InstrumentDeclaration{
				Unit: "mm", Description: "dial gauge on the winch's main bearing",
				Repeatability: engine.InstrumentRepeatability{StandardDeviation: 0.004}, Resolution: 0.001,
				Calibrations: []engine.Calibration{{ValidFrom: ago(60 * day), BiasStandardUncertainty: 0.003}},
			},
		},
	}
}

// measured are the quantities that those instruments read.
func measured() []plantItem {
	return []plantItem{
		{
			id: "ice-crusher.blade-gap", every: 20, noise: 0.01, truth: steady(0.40), instruments: []engine.InstrumentID{overdueGauge},
			declaration: engine.Declaration{
				Unit: "mm", Description: "blade gap, ice crusher; by a gauge past its due date",
				Prior: normal(0.4, 0.1), Tolerance: between(0.3, 0.5),
			},
		},
		{
			id: "store-4.temperature", every: 1, noise: 0.1, display: 0.1, truth: wave(-21.0, 0.2, 300),
			instruments: []engine.InstrumentID{wallProbe, returnProbe},
			declaration: engine.Declaration{
				Unit: "Cel", Description: "air temperature, store room 4; its two probes disagree",
				Prior: normal(-21, 2), Dynamics: walk(0.2, 20*time.Second), Tolerance: below(-18),
			},
		},
		{
			id: "brine-pump-1.delivery-pressure", every: 1, noise: 0.01, truth: steady(2.35), instruments: []engine.InstrumentID{fastSender},
			declaration: engine.Declaration{
				Unit: "bar", Description: "delivery pressure, brine pump 1; sampled faster than the transmitter settles",
				Prior: normal(2.4, 0.2), Dynamics: walk(0.005, time.Minute), Tolerance: between(2.2, 2.6),
			},
		},
		{
			// Wears by a thousandth of a millimetre in 12 s and reaches its limit
			// some 12 minutes after the start.
			id: bearingID, every: 5, noise: 0.004, display: 0.001, truth: func(second float64) float64 { return 0.24 + second/12_000 },
			instruments: []engine.InstrumentID{bearingGauge},
			declaration: engine.Declaration{
				Unit: "mm", Description: "radial play of the main bearing, slipway winch; wearing",
				Prior: normal(0.2, 0.1), Tolerance: below(0.30), BreachHorizon: 30 * time.Minute,
				Dynamics: engine.Dynamics{
					Form: engine.DynamicsLinearTrend, StandardDeviation: 0.001, Per: time.Minute,
					Slope: engine.Slope{StandardDeviation: 0.01, Per: time.Minute},
				},
			},
		},
	}
}
