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

// What is relative enters by a linearisation: with parts of up to 0.2 % (noise) and 0.4 %
// (gain) and a level known to 2 % beforehand, the mean is within 1 % of the
// exact standard deviation, and that within 3 %.
func TestLinearisedPartsAgainstIntegration(t *testing.T) {
	worstMean, worstSD := 0.0, 0.0
	for _, s := range seeds(200) {
		rng := rand.New(rand.NewPCG(s, 3))
		c := relativeCase{mean: 100, sd: 0.2 + 1.8*rng.Float64(), r: 0.1 + 0.9*rng.Float64(), white: 0.002 * rng.Float64(), gain: 0.001 + 0.003*rng.Float64(), bias: 0.1 + 0.4*rng.Float64(), length: 16}
		level, g, b := c.mean+c.sd*rng.NormFloat64(), c.gain*rng.NormFloat64(), c.bias*rng.NormFloat64()
		for range 1 + rng.IntN(12) {
			c.readings = append(c.readings, level*(1+g)+b+math.Hypot(c.r, c.white*level)*rng.NormFloat64())
		}
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
		belief := r.belief(gapID, engine.BeliefQuery{Now: seconds(100)})
		if !belief.Linearised {
			t.Fatal("the belief isn't marked as linearised")
		}
		mean, sd := c.exact()
		off, wide := math.Abs(belief.Level.Location()-mean)/sd, math.Abs(belief.Level.Scale()/sd-1)
		worstMean, worstSD = max(worstMean, off), max(worstSD, wide)
		if off > 0.01 || wide > 0.03 {
			t.Errorf("-seed %d: mean off by %.4f sd, sd by %.4f: %+v", s, off, wide, c)
		}
	}
	t.Logf("worst: mean off by %.4f sd, sd by %.4f", worstMean, worstSD)
}
