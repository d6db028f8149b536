package engine_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"leadline.example/engine"
)

// relativeCase is a constant level read by an instrument with relative parts.
type relativeCase struct {
	mean, sd       float64 // of the prior
	white, r       float64 // relative part of the repeatability, and absolute
	gain, bias     float64 // relative and absolute standard uncertainty of the bias
	readings       []float64
	offset, length float64 // of what is integrated over, in prior standard deviations
}

// exact integrates the posterior of the level over level and gain: the bias and the white
// noise given both are normal, so a set of readings has the density of a normal of
// one shared error (Sherman & Morrison 1950 for its covariance).
func (c *relativeCase) exact() (mean, sd float64) {
	var sum, first, second float64
	const steps = 400
	for i := range steps + 1 {
		level := c.mean + c.sd*(c.offset+c.length*(float64(i)/steps-0.5))
		for k := range steps + 1 {
			g := c.gain * 12 * (float64(k)/steps - 0.5)
			z := (level - c.mean) / c.sd
			logDensity := -z*z/2 - g*g/(2*c.gain*c.gain)
			v := c.r*c.r + c.white*c.white*level*level
			n := float64(len(c.readings))
			residuals, squares := 0.0, 0.0
			for _, y := range c.readings {
				d := y - level*(1+g)
				residuals += d
				squares += d * d
			}
			shared := c.bias * c.bias
			logDensity += -squares/(2*v) + residuals*residuals*shared/(2*v*(v+n*shared)) - (n-1)/2*math.Log(v) - math.Log(v+n*shared)/2
			w := math.Exp(logDensity)
			sum += w
			first += w * (level - c.mean)
			second += w * (level - c.mean) * (level - c.mean)
		}
	}
	m := first / sum
	return c.mean + m, math.Sqrt(second/sum - m*m)
}

// random draws a case from parts of up to the sizes given.
func randomRelative(rng *rand.Rand, prior, white, gain float64) relativeCase {
	c := relativeCase{
		mean: 100, sd: 0.2 + prior*rng.Float64(), r: 0.1 + 0.9*rng.Float64(), white: white * rng.Float64(),
		gain: 0.001 + gain*rng.Float64(), bias: 0.1 + 0.4*rng.Float64(), length: 16,
	}
	level, g, b := c.mean+c.sd*rng.NormFloat64(), c.gain*rng.NormFloat64(), c.bias*rng.NormFloat64()
	for range 1 + rng.IntN(12) {
		c.readings = append(c.readings, level*(1+g)+b+math.Hypot(c.r, c.white*level)*rng.NormFloat64())
	}
	return c
}

// belief is what the keeper holds after the readings.
func (c *relativeCase) belief(t *testing.T) engine.Belief {
	r := newRig(t, engine.Options{})
	r.declare(gapID, with(gap(), func(d *engine.Declaration) {
		d.Prior = engine.Prior{Form: engine.PriorNormal, Mean: c.mean, StandardDeviation: c.sd}
	}))
	r.declareInstrument("gauge", engine.InstrumentDeclaration{
		Unit: "mm", Repeatability: engine.InstrumentRepeatability{StandardDeviation: c.r, Relative: max(1e-12, c.white)},
		Calibrations: []engine.Calibration{{ValidFrom: start, BiasStandardUncertainty: c.bias, RelativeBiasStandardUncertainty: c.gain}},
	})
	var readings []engine.Reading
	for i, y := range c.readings {
		readings = append(readings, engine.Reading{Quantity: gapID, HasTime: true, Time: seconds(float64(i)), Value: y, Instrument: "gauge"})
	}
	r.post(seconds(100), readings...)
	return r.belief(gapID, engine.BeliefQuery{Now: seconds(100)})
}

// What is relative is an approximation: with noise of up to 0.2 %, a gain known to 0.5 %
// and a level known to 2 % beforehand, the mean is within 1 % of the exact
// standard deviation, and that within 3 %; with 2 %, 3 % and 5 %, within 15 % and 10 %.
func TestLinearisedPartsAgainstIntegration(t *testing.T) {
	for _, test := range []struct {
		name               string
		prior, white, gain float64
		meanBound, sdBound float64
	}{
		{"as of good instruments", 1.8, 0.002, 0.004, 0.01, 0.03},
		{"as of poor ones", 4.8, 0.02, 0.029, 0.15, 0.1},
	} {
		t.Run(test.name, func(t *testing.T) {
			worstMean, worstSD := 0.0, 0.0
			for _, s := range seeds(200) {
				c := randomRelative(rand.New(rand.NewPCG(s, 3)), test.prior, test.white, test.gain)
				belief := c.belief(t)
				if !belief.Linearised {
					t.Fatal("the belief isn't marked as linearised")
				}
				mean, sd := c.exact()
				off, wide := math.Abs(belief.Level.Location()-mean)/sd, math.Abs(belief.Level.Scale()/sd-1)
				worstMean, worstSD = max(worstMean, off), max(worstSD, wide)
				if off > test.meanBound || wide > test.sdBound {
					t.Errorf("-seed %d: mean off by %.4f sd, sd by %.4f: %+v", s, off, wide, c)
				}
			}
			t.Logf("worst: mean off by %.4f sd, sd by %.4f", worstMean, worstSD)
		})
	}
}

// A reading far off, as of a dead sensor, leaves a belief.
func TestOutlierByRelativeInstrumentLeavesABelief(t *testing.T) {
	for _, y := range []float64{0, 1e-12, 50, 150, 200, 1000, 1e6, 1e12, 1e40, -100, -1e6} {
		for _, white := range []float64{1e-3, 0.01, 0.2} {
			c := relativeCase{mean: 100, sd: 1, r: 0.1, white: white, gain: 0.01, bias: 0.1, readings: []float64{y, y, 100}}
			b := c.belief(t)
			mean, ok := b.Level.Mean()
			if sd := b.Level.Scale(); !ok || math.IsNaN(mean) || math.IsInf(mean, 0) || !(sd > 1e-3) || math.IsInf(sd, 0) {
				t.Errorf("after %v with %v relative noise: mean %v, sd %v", y, white, mean, sd)
			}
		}
	}
}
