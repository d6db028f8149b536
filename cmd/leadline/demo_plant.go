package main

import (
	"math"
	"time"

	"leadline.example/engine"
)

// The quantities that the tour points at.
const (
	driftingID engine.QuantityID = "brine-pump-3.coupling-gap"
	silentID   engine.QuantityID = "store-2.temperature"
	bearingID  engine.QuantityID = "slipway-winch.bearing-play"
)

// plantItem is one quantity of the plant: how it is declared, and how its
// readings are made up.
type plantItem struct {
	id          engine.QuantityID
	declaration engine.Declaration
	truth       func(second float64) float64 // the true value; seconds from the start, negative before it
	noise       float64                      // standard deviation of the random error
	odd         float64                      // share of readings that are oddInflation times as far off
	display     float64                      // step of the display; 0: none to speak of
	every       int                          // seconds between readings
	silentAfter int                          // the second of the last reading; 0: reports for good
	instruments []engine.InstrumentID        // that take turns in reading it; none: nobody says which
}

// oddInflation is how much farther off than others an odd reading is.
const oddInflation = 12

// pastEvery is how many steps of the past lie between two readings: rare
// readings are rare there too.
func (i plantItem) pastEvery() int { return max(1, i.every/2) }

// plant is an invented harbour ice plant with a cold store and a slipway.
// Things happen faster than in a real one, so that they can be watched.
func plant() []plantItem {
	items := refrigeration()
	items = append(items, brineCircuit()...)
	items = append(items, stores()...)
	items = append(items, measured()...)
	return append(items, workshop()...)
}

func refrigeration() []plantItem {
	return []plantItem{
		{
			id: "compressor-1.suction-pressure", noise: 0.02, every: 1, truth: wave(1.90, 0.05, 90),
			declaration: engine.Declaration{
				Unit: "bar", Description: "suction pressure, screw compressor 1",
				Prior: normal(1.9, 0.3), Repeatability: known(0.02), Dynamics: walk(0.02, 10*time.Second),
				Tolerance: between(1.6, 2.3),
			},
		},
		{
			id: "compressor-1.discharge-pressure", noise: 0.05, every: 1, truth: wave(11.8, 0.4, 120),
			declaration: engine.Declaration{
				Unit: "bar", Description: "discharge pressure, screw compressor 1",
				Prior: normal(12, 1), Repeatability: known(0.05), Dynamics: walk(0.1, 10*time.Second),
				Tolerance: below(14),
			},
		},
		{
			id: "compressor-1.oil-temperature", noise: 0.1, display: 0.5, every: 2, truth: wave(58.2, 0.8, 200),
			instruments: []engine.InstrumentID{oilThermometer},
			declaration: engine.Declaration{
				Unit: "Cel", Description: "oil temperature, screw compressor 1; the display shows steps of 0.5",
				Prior: normal(55, 8), Dynamics: walk(0.2, 10*time.Second), Tolerance: between(45, 70),
			},
		},
		{
			// One reading in forty is a burst of interference.
			id: "machine-room.ammonia", noise: 0.6, odd: 0.025, every: 1, truth: wave(3.0, 0.3, 150),
			declaration: engine.Declaration{
				Unit: "ppm", Description: "ammonia in the machine room's air, leak check; some readings are interference",
				Prior: normal(3, 3), Repeatability: known(0.6), Dynamics: walk(0.3, 30*time.Second),
				Outliers: engine.Outliers{Probability: 0.02, Inflation: oddInflation}, Tolerance: below(25),
			},
		},
		{
			id: "ice-maker-2.harvest-time", noise: 1.5, every: 5, truth: steady(94),
			declaration: engine.Declaration{
				Unit: "s", Description: "time to release one harvest, ice maker 2",
				Prior: normal(95, 10), Repeatability: learned(2, 4), Tolerance: below(110),
			},
		},
	}
}

func brineCircuit() []plantItem {
	return []plantItem{
		{
			// Crosses its upper limit about 90 s after the start.
			id: driftingID, noise: 0.02, every: 1, truth: drift(0.80, 10, 0.00125),
			declaration: engine.Declaration{
				Unit: "mm", Description: "coupling gap, brine pump 3",
				Prior: normal(0.80, 0.05), Repeatability: known(0.02), Dynamics: walk(0.01, 10*time.Second),
				Tolerance: between(0.70, 0.90),
			},
		},
		{
			// Single readings leave the tolerance now and then; the flow doesn't.
			id: "brine-pump-3.flow", noise: 4, every: 1, truth: wave(41, 0.5, 300),
			declaration: engine.Declaration{
				Unit: "m3/h", Description: "brine flow, pump 3; noisy, and in order",
				Prior: normal(40, 5), Repeatability: known(4), Dynamics: walk(0.5, time.Minute),
				Tolerance: between(32, 50),
			},
		},
		{
			id: "brine.supply-temperature", noise: 0.05, every: 1, truth: wave(-12.1, 0.3, 180),
			declaration: engine.Declaration{
				Unit: "Cel", Description: "brine supply temperature",
				Prior: normal(-12, 2), Repeatability: known(0.05), Dynamics: walk(0.1, 10*time.Second),
				Tolerance: between(-14, -10),
			},
		},
		{
			id: "brine.density", noise: 1.2, every: 10, truth: steady(1182),
			declaration: engine.Declaration{
				Unit: "kg/m3", Description: "brine density by hydrometer",
				Repeatability: learned(0, 0), Tolerance: between(1170, 1195),
			},
		},
		{
			id: "dosing.chlorine-residual", noise: 0.06, every: 2, truth: wave(0.55, 0.05, 240),
			declaration: engine.Declaration{
				Unit: "mg/L", Description: "free chlorine in the wash-down water; positive, and noisy by per cents",
				Scale: engine.ScaleLog,
				Prior: interval(0.2, 1.0, 0.95), Repeatability: known(0.11), Dynamics: walk(0.1, time.Minute),
				Tolerance: between(0.3, 0.9),
			},
		},
	}
}

func stores() []plantItem {
	return []plantItem{
		{
			id: "store-1.temperature", noise: 0.1, every: 1, truth: wave(-22.0, 0.4, 240),
			declaration: engine.Declaration{
				Unit: "Cel", Description: "air temperature, store room 1",
				Prior: normal(-22, 2), Repeatability: known(0.1), Dynamics: walk(0.3, 20*time.Second),
				Tolerance: below(-18),
			},
		},
		{
			// Its instrument dies; from about two minutes later on the walk has
			// taken the belief so wide that the rule can't be met.
			id: silentID, noise: 0.1, every: 1, silentAfter: 30, truth: wave(-20.0, 0.2, 240),
			declaration: engine.Declaration{
				Unit: "Cel", Description: "air temperature, store room 2",
				Prior: normal(-20, 2), Repeatability: known(0.1), Dynamics: walk(0.5, 20*time.Second),
				Tolerance: below(-18),
			},
		},
		{
			id: "store-3.humidity", noise: 1, every: 3, truth: wave(86, 1, 400),
			declaration: engine.Declaration{
				Unit: "%RH", Description: "relative humidity, ice store; nobody has set a tolerance",
				Prior: normal(85, 8), Repeatability: known(1), Dynamics: walk(1, time.Minute),
			},
		},
	}
}

func workshop() []plantItem {
	return []plantItem{
		{
			id: "slipway-winch.rope-diameter", noise: 0.04, display: 0.01, every: 15, truth: steady(15.72),
			declaration: engine.Declaration{
				Unit: "mm", Description: "rope diameter at the drum, slipway winch",
				Prior: normal(16, 0.2), Repeatability: learned(0.05, 4), Tolerance: above(15.2),
			},
		},
		{
			id: "slipway-winch.brake-lining", noise: 0.05, display: 0.05, every: 20, truth: steady(4.10),
			declaration: engine.Declaration{
				Unit: "mm", Description: "brake lining thickness, slipway winch; near its limit",
				Prior: normal(5, 1), Repeatability: learned(0.05, 2), Tolerance: above(4),
			},
		},
	}
}

// steady is a true value that doesn't move.
func steady(level float64) func(float64) float64 {
	return func(float64) float64 { return level }
}

// wave is a true value that swings about a level with a period in seconds.
func wave(level, amplitude, period float64) func(float64) float64 {
	return func(second float64) float64 {
		return level + amplitude*math.Sin(2*math.Pi*second/period)
	}
}

// drift is a true value that leaves its level after a while, by slope a second.
func drift(level, after, slope float64) func(float64) float64 {
	return func(second float64) float64 {
		return level + slope*max(0, second-after)
	}
}

func normal(mean, sd float64) engine.Prior {
	return engine.Prior{Form: engine.PriorNormal, Mean: mean, StandardDeviation: sd}
}

func interval(low, high, probability float64) engine.Prior {
	return engine.Prior{Form: engine.PriorInterval, Low: low, High: high, Probability: probability}
}

func known(r float64) engine.Repeatability {
	return engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: r}
}

// learned is a repeatability learned from a guess worth so many degrees of
// freedom, or from the reference prior if that is worth nothing.
func learned(guess, worth float64) engine.Repeatability {
	if worth == 0 {
		return engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	}
	return engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: guess, Worth: worth}
}

func walk(sd float64, per time.Duration) engine.Dynamics {
	return engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: sd, Per: per}
}

func between(lower, upper float64) engine.Tolerance {
	return engine.Tolerance{HasLower: true, Lower: lower, HasUpper: true, Upper: upper}
}

func below(upper float64) engine.Tolerance {
	return engine.Tolerance{HasUpper: true, Upper: upper}
}

func above(lower float64) engine.Tolerance {
	return engine.Tolerance{HasLower: true, Lower: lower}
}
