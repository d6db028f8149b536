package engine

import (
	"math"

	"leadline.example/engine/posterior"
)

// indication returns what a reading says that was indicated, on the scale of the level. A
// value beyond the measuring interval says no more than that; one that is displayed, where
// the method takes account of that, that it was rounded (JCGM 100:2008, F.2.2.1).
func (m *model) indication(e *Row) posterior.Indication {
	y := posterior.Indication{Lower: e.Value, Upper: e.Value}
	switch e.Extent {
	case ExtentAbove:
		y.Upper = math.Inf(1)
	case ExtentBelow:
		y.Lower = math.Inf(-1)
	case ExtentBetween:
		y.Upper = e.Upper
	}
	if i := m.instrument(e.Instrument); i != nil && m.form >= countsForm {
		y = i.Declaration.indicated(y)
	}
	if m.declaration().Scale == ScaleLog {
		return posterior.Indication{Lower: logOf(y.Lower), Upper: logOf(y.Upper)}
	}
	return y
}

// indicated returns what a displayed value or an interval says if the instrument can indicate
// no more than its measuring interval.
func (d *InstrumentDeclaration) indicated(y posterior.Indication) posterior.Indication {
	switch r := &d.MeasuringInterval; {
	case r.HasUpper && y.Lower > r.Upper:
		return posterior.Indication{Lower: r.Upper, Upper: math.Inf(1)}
	case r.HasLower && y.Upper < r.Lower:
		return posterior.Indication{Lower: math.Inf(-1), Upper: r.Lower}
	case y.Exact():
		return posterior.Indication{Lower: y.Lower - d.Resolution/2, Upper: y.Upper + d.Resolution/2}
	}
	return y
}

// logOf returns ln x, -Inf for what isn't positive.
func logOf(x float64) float64 {
	if x <= 0 {
		return math.Inf(-1)
	}
	return math.Log(x)
}

// spread returns the white noise of a reading where r is the repeatability that is learned.
func (m *model) spread(e *Row, r float64) posterior.Spread {
	o := m.declaration().Outliers
	s := posterior.Spread{SD: r, OutlierProbability: o.Probability, Inflation: o.Inflation}
	switch {
	case e.HasUncertainty:
		s.SD = e.Uncertainty
	case m.teaches(e):
		s.SD = e.white(r)
	default:
		s.SD = m.declaration().Repeatability.StandardDeviation
		if i := m.instrument(e.Instrument); i != nil && i.Declaration.Repeatability.StandardDeviation > 0 {
			s.SD = i.Declaration.Repeatability.StandardDeviation
		}
		s.SD = e.white(s.SD)
	}
	if f := m.forced; f != nil && f.position == e.Position {
		s.OutlierProbability = 0
		if f.outlier {
			s.SD *= o.Inflation
		}
	}
	return s
}

// indication is how a reading of an instrument rests on the states.
type indication struct {
	d        *InstrumentDeclaration
	s        float64 // of the white part, but for what is relative or displayed
	relative float64 // the white part that is relative to the level
	terms    []posterior.Term
	noise    posterior.White
}

// white finds the repeatability that applies: the reading's own, else the
// instrument's, else the quantity's.
func (y *indication) white(m *model, e *Row) {
	switch r := &y.d.Repeatability; {
	case e.HasUncertainty:
		y.s = e.Uncertainty
	case r.StandardDeviation > 0:
		y.s, y.relative = e.white(r.StandardDeviation), r.Relative/math.Sqrt(e.samples())
	default:
		y.s = e.white(m.declaration().Repeatability.StandardDeviation)
	}
}

// samples returns of how many indications the reading is the mean.
func (e *Row) samples() float64 { return float64(max(1, e.Samples)) }

// white returns the white part's standard deviation of a reading whose single
// indications have r: its own, else that of a mean.
func (e *Row) white(r float64) float64 {
	switch {
	case e.HasUncertainty:
		return e.Uncertainty
	case e.Samples > 1:
		return r / math.Sqrt(float64(e.Samples))
	}
	return r
}

// shared adds the states that r's instrument shares between readings, the gain last,
// and returns the declared bias.
func (y *indication) shared(r *route) (offset float64) {
	for _, state := range [...]int{r.own, r.correlated, r.shared} {
		if state > 0 {
			y.terms = append(y.terms, posterior.Term{State: state, Coefficient: 1})
		}
	}
	if r.calibration < 0 {
		return 0
	}
	c := &y.d.Calibrations[r.calibration]
	if r.reference > 0 {
		y.terms = append(y.terms, posterior.Term{State: r.reference, Coefficient: c.CommonStandardUncertainty})
	}
	if r.gain > 0 {
		y.terms = append(y.terms, posterior.Term{State: r.gain})
	}
	return c.Bias
}

// about linearises what is relative to the level about its prediction: never
// about the reading, whose own error would then weigh it.
//
// A level times a gain's error g counts as an error of its own, g times the root mean
// square of the level as predicted: for a level that stays, as it was when the gain
// was first met, see restate. The obvious way, the extended Kalman filter, linearises
// the product anew at each reading, and takes the differences between its points of
// linearisation for knowledge of g. The white noise has the mean of its variance
// over the level.
func (y *indication) about(m *model, r *route, level, variance float64) {
	y.noise.Variance = y.s*y.s + y.d.Resolution*y.d.Resolution/12
	if u := y.relative; u > 0 {
		y.noise.Variance += u * u * (level*level + variance)
		y.noise.Relative = u
	}
	if r.gain == 0 {
		return
	}
	if r.scale == 0 || m.motion.Form != posterior.MotionConstant {
		r.relate(level, variance)
	}
	y.terms[len(y.terms)-1].Coefficient = r.scale
}

// restating is by how much a level must have moved for what was known of a gain's error
// to be stated anew.
const restating = 0.02

// restate takes account of a level that is other than was thought when a gain was met: the
// gain's error, a part of the level, then had another standard deviation before any
// reading. Its coefficient stays, since differences between coefficients would be taken
// for knowledge of the gain.
func (j *joint) restate(d *InstrumentDeclaration, r *route, level float64) {
	if math.Abs(level/r.restated-1) <= restating {
		return
	}
	u := d.Calibrations[r.calibration].RelativeBiasStandardUncertainty
	was, is := u*r.restated/r.scale, u*level/r.scale
	j.filter.Restate(r.gain, was*was, is*is)
	r.restated = level
}

// refine lets a gain that is met for the first time be relative to the level as the reading
// at hand leaves it, weighed as it deserves: what was known before may be far off. Two
// rounds settle it.
func (j *joint) refine(value float64, r *route, y *indication, offset float64) {
	for range 2 {
		trial := j.filter.Clone()
		trial.UpdateFrom(value, offset, 1, y.terms, y.noise)
		r.relate(trial.Mean(0), trial.Variance(0))
		y.terms[len(y.terms)-1].Coefficient = r.scale
	}
}

// relate lets the gain be relative to the root mean square of a level.
func (r *route) relate(level, variance float64) {
	r.scale = math.Copysign(math.Sqrt(level*level+variance), level)
}
