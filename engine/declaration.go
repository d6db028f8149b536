package engine

import (
	"math"
	"time"

	"leadline.example/engine/decide"
	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// Magnitudes that a value, a limit or a standard deviation may have. Within
// them no square of a ratio that the statistics form overflows.
const (
	MinMagnitude = 1e-100
	MaxMagnitude = 1e100
	// maxRatio bounds |value| / r: a reading whose square in units of r would
	// overflow is refused.
	maxRatio = 1e150
	maxWorth = 1e9
)

// Check returns an *Error for the first thing wrong with d, else nil.
func (d *Declaration) Check() error {
	checks := []func() *Error{
		d.checkText, d.checkPrior, d.checkRepeatability, d.checkDynamics, d.checkTolerance, d.checkRule, d.checkHorizon,
		d.checkOutliers, d.checkModelCheck, d.checkStepDetection, d.checkScale, d.checkSupport,
	}
	for _, check := range checks {
		if err := check(); err != nil {
			return err
		}
	}
	return nil
}

func (d *Declaration) checkText() *Error {
	if len(d.Unit) > MaxUnitBytes || !printable(d.Unit) {
		return refuse(InvalidField, "unit", "unit has %d bytes or a character that isn't printable; give at most %d printable bytes", len(d.Unit), MaxUnitBytes)
	}
	if len(d.Description) > MaxDescriptionBytes || !printable(d.Description) {
		return refuse(InvalidField, "description", "description has %d bytes or a character that isn't printable; give at most %d printable bytes", len(d.Description), MaxDescriptionBytes)
	}
	return nil
}

func (d *Declaration) checkPrior() *Error {
	p := &d.Prior
	if p.HasTime && !p.Time.Valid() {
		return refuse(InvalidField, "prior.time", "prior.time lies outside 1678 to 2262; give a time within")
	}
	switch p.Form {
	case PriorNormal:
		if err := checkNumber("prior.mean", p.Mean); err != nil {
			return err
		}
		return checkDeviation("prior.standard_deviation", p.StandardDeviation)
	case PriorInterval:
		return p.checkInterval()
	}
	return nil
}

func (p *Prior) checkInterval() *Error {
	if err := checkNumber("prior.low", p.Low); err != nil {
		return err
	}
	if err := checkNumber("prior.high", p.High); err != nil {
		return err
	}
	if p.Low >= p.High {
		return refuse(InvalidField, "prior.high", "prior.high is %v, not above prior.low %v; give low < high", p.High, p.Low)
	}
	if !(p.Probability > 0 && p.Probability < 1) {
		return refuse(InvalidField, "prior.probability", "prior.probability is %v; give a number above 0 and below 1", p.Probability)
	}
	sd := posterior.IntervalPrior(p.Low, p.High, p.Probability).SD
	if !(sd >= MinMagnitude && sd <= MaxMagnitude) {
		return refuse(InvalidField, "prior.probability", "prior.low, prior.high and prior.probability %v give a standard deviation of %v; give an interval that leads to 1e-100 to 1e100", p.Probability, sd)
	}
	return nil
}

func (d *Declaration) checkRepeatability() *Error {
	if r := &d.Repeatability; r.Form == RepeatabilityKnown {
		return checkDeviation("repeatability.standard_deviation", r.StandardDeviation)
	}
	return d.Repeatability.checkLearned("repeatability.learned")
}

// checkLearned checks what is stated of a repeatability that is learned.
func (r *Repeatability) checkLearned(field string) *Error {
	if r.Form == RepeatabilityLearned {
		if err := checkDeviation(field+".guess", r.Guess); err != nil {
			return err
		}
		if !(r.Worth >= 1 && r.Worth <= maxWorth) {
			return refuse(InvalidField, field+".worth", "%s.worth is %v; give the number of degrees of freedom that the guess is worth, from 1 to 1e9", field, r.Worth)
		}
	}
	return checkOptional(field+".floor", r.Floor)
}

func (d *Declaration) checkDynamics() *Error {
	y := &d.Dynamics
	field := map[DynamicsForm]string{
		DynamicsRandomWalk: "dynamics.random_walk", DynamicsLinearTrend: "dynamics.linear_trend", DynamicsMeanReverting: "dynamics.mean_reverting",
	}[y.Form]
	switch y.Form {
	case DynamicsRandomWalk:
		return y.checkWalk(field)
	case DynamicsLinearTrend:
		return y.checkTrend(field)
	case DynamicsMeanReverting:
		return y.checkReverting(field)
	}
	return nil
}

func (y *Dynamics) checkWalk(field string) *Error {
	if err := checkDeviation(field+".standard_deviation", y.StandardDeviation); err != nil {
		return err
	}
	return checkDuration(field+".per", y.Per)
}

func (y *Dynamics) checkTrend(field string) *Error {
	if y.StandardDeviation != 0 || y.Per != 0 {
		if err := y.checkWalk(field); err != nil {
			return err
		}
	}
	if err := y.Slope.check(field + ".slope"); err != nil {
		return err
	}
	if y.Wander == (Wander{}) {
		return nil
	}
	if err := checkDeviation(field+".slope_wander.standard_deviation", y.Wander.StandardDeviation); err != nil {
		return err
	}
	return checkDuration(field+".slope_wander.per", y.Wander.Per)
}

func (s *Slope) check(field string) *Error {
	if err := checkNumber(field+".mean", s.Mean); err != nil {
		return err
	}
	if err := checkDeviation(field+".standard_deviation", s.StandardDeviation); err != nil {
		return err
	}
	return checkDuration(field+".per", s.Per)
}

func (y *Dynamics) checkReverting(field string) *Error {
	if err := checkNumber(field+".mean", y.Mean); err != nil {
		return err
	}
	if err := checkDeviation(field+".standard_deviation", y.StandardDeviation); err != nil {
		return err
	}
	return checkDuration(field+".half_life", y.HalfLife)
}

// checkHorizon checks how far ahead a breach is looked for.
func (d *Declaration) checkHorizon() *Error {
	switch {
	case d.BreachHorizon == 0:
		return nil
	case !d.Tolerance.Declared():
		return refuse(MissingField, "tolerance", "breach_horizon is given without a tolerance, so there is nothing to breach; declare a limit, or leave it out")
	}
	return checkDuration("breach_horizon", d.BreachHorizon)
}

func (d *Declaration) checkTolerance() *Error { return d.Tolerance.check("tolerance") }

// check checks the limits of what field names.
func (t Tolerance) check(field string) *Error {
	if t.HasLower {
		if err := checkNumber(field+".lower", t.Lower); err != nil {
			return err
		}
	}
	if t.HasUpper {
		if err := checkNumber(field+".upper", t.Upper); err != nil {
			return err
		}
	}
	if t.HasLower && t.HasUpper && t.Lower >= t.Upper {
		return refuse(InvalidField, field+".upper", "%[1]s.upper is %[2]v, not above %[1]s.lower %[3]v; give lower < upper", field, t.Upper, t.Lower)
	}
	return nil
}

func (d *Declaration) checkOutliers() *Error {
	o := &d.Outliers
	switch {
	case *o == (Outliers{}):
		return nil
	case !(o.Probability > 0 && o.Probability <= 0.5):
		return refuse(InvalidField, "outliers.probability", "outliers.probability is %v; give a number above 0 and at most 0.5", o.Probability)
	case !(o.Inflation > 1 && o.Inflation <= maxInflation):
		return refuse(InvalidField, "outliers.inflation", "outliers.inflation is %v; give a number above 1 and at most 100, by which an outlier's standard deviation is larger", o.Inflation)
	}
	return nil
}

func (d *Declaration) checkModelCheck() *Error {
	c := &d.ModelCheck
	switch {
	case c.Window != 0 && !(c.Window >= modelcheck.MinWindow && c.Window <= modelcheck.MaxWindow):
		return refuse(InvalidField, "model_check.window", "model_check.window is %d; give a number of readings from %d to %d", c.Window, modelcheck.MinWindow, modelcheck.MaxWindow)
	case c.ObjectionsPerYear != 0 && !(c.ObjectionsPerYear >= minObjections && c.ObjectionsPerYear <= modelcheck.MaxObjectionsPerYear):
		return refuse(InvalidField, "model_check.objections_per_year", "model_check.objections_per_year is %v; give the rate of false objections from %v to %v", c.ObjectionsPerYear, minObjections, modelcheck.MaxObjectionsPerYear)
	}
	return nil
}

func (d *Declaration) checkStepDetection() *Error {
	s := &d.StepDetection
	if n := s.FalseAlarmInterval; n != 0 && !(n >= modelcheck.MinFalseAlarmInterval && n <= modelcheck.MaxFalseAlarmInterval) {
		return refuse(InvalidField, "step_detection.false_alarm_interval", "step_detection.false_alarm_interval is %v; give a mean number of readings from %v to %v", n, modelcheck.MinFalseAlarmInterval, modelcheck.MaxFalseAlarmInterval)
	}
	return checkOptional("step_detection.on_step.widen", s.Widen)
}

// Bounds of what checks of the model can be asked for.
const (
	minObjections = 1e-9
	maxInflation  = 100 // that a Grid resolves
)

// checkScale refuses what has no logarithm.
func (d *Declaration) checkScale() *Error {
	if d.Scale == ScaleLinear {
		return nil
	}
	positive := []struct {
		field string
		given bool
		value float64
	}{
		{"prior.mean", d.Prior.Form == PriorNormal, d.Prior.Mean},
		{"prior.low", d.Prior.Form == PriorInterval, d.Prior.Low},
		{"dynamics.mean_reverting.mean", d.Dynamics.Form == DynamicsMeanReverting, d.Dynamics.Mean},
		{"tolerance.lower", d.Tolerance.HasLower, d.Tolerance.Lower},
		{"tolerance.upper", d.Tolerance.HasUpper, d.Tolerance.Upper},
	}
	for _, p := range positive {
		if p.given && !(p.value > 0) {
			return refuse(InvalidField, p.field, "%s is %v but scale is LOG, on which every value is positive; give a number above 0", p.field, p.value)
		}
	}
	return nil
}

func (d *Declaration) checkRule() *Error {
	if d.Rule == (decide.Rule{}) {
		return nil
	}
	if p := d.Rule.ConformProbability; !(p > 0.5 && p <= 1) {
		return refuse(InvalidField, "decision_rule.conform_probability", "decision_rule.conform_probability is %v; give a number above 0.5 and at most 1", p)
	}
	if p := d.Rule.BreachProbability; !(p > 0.5 && p <= 1) {
		return refuse(InvalidField, "decision_rule.breach_probability", "decision_rule.breach_probability is %v; give a number above 0.5 and at most 1", p)
	}
	return nil
}

// checkNumber accepts 0 and what inRange accepts.
func checkNumber(field string, x float64) *Error {
	if !inRange(x) {
		return refuse(InvalidField, field, "%s is %v; give 0 or a number of magnitude 1e-100 to 1e100", field, x)
	}
	return nil
}

func checkDeviation(field string, s float64) *Error {
	if !(s >= MinMagnitude && s <= MaxMagnitude) {
		return refuse(InvalidField, field, "%s is %v; give a number above 0, from 1e-100 to 1e100", field, s)
	}
	return nil
}

func checkDuration(field string, t time.Duration) *Error {
	if t <= 0 {
		return refuse(InvalidField, field, "%s is %v; give a duration above 0, such as \"86400s\"", field, t)
	}
	return nil
}

// inRange tells whether x is 0 or of an admissible magnitude; NaN is not.
func inRange(x float64) bool {
	a := math.Abs(x)
	return x == 0 || a >= MinMagnitude && a <= MaxMagnitude
}

// levelPrior returns the prior of the level, of its logarithm under ScaleLog, as
// moments. A mean-reverting level of which nothing is stated follows its stationary law.
func (d *Declaration) levelPrior() posterior.Prior {
	if y := &d.Dynamics; d.Prior.Form == PriorVague && y.Form == DynamicsMeanReverting {
		return posterior.Prior{Mean: d.Scale.of(y.Mean), SD: y.StandardDeviation}
	}
	switch p := d.Prior; p.Form {
	case PriorNormal:
		if d.Scale == ScaleLog {
			return logNormalPrior(p.Mean, p.StandardDeviation)
		}
		return posterior.Prior{Mean: p.Mean, SD: p.StandardDeviation}
	case PriorInterval:
		return posterior.IntervalPrior(d.Scale.of(p.Low), d.Scale.of(p.High), p.Probability)
	}
	return posterior.Prior{Vague: true}
}

// logNormalPrior returns the prior of ln x for a lognormal x of that mean and standard
// deviation: s^2 = ln(1 + (sd/mean)^2), ln mean - s^2/2 (Johnson, Kotz & Balakrishnan
// 1994, Continuous Univariate Distributions 1, 14.3, from memory).
func logNormalPrior(mean, sd float64) posterior.Prior {
	ratio := sd / mean
	variance := math.Log1p(ratio * ratio)
	if ratio > 1e8 {
		variance = 2 * math.Log(ratio)
	}
	return posterior.Prior{Mean: math.Log(mean) - variance/2, SD: math.Sqrt(variance)}
}

// of returns a value on the scale.
func (s Scale) of(x float64) float64 {
	if s == ScaleLog {
		return math.Log(x)
	}
	return x
}

// noise returns what is declared of the repeatability.
func (d *Declaration) noise() posterior.Noise {
	switch r := d.Repeatability; r.Form {
	case RepeatabilityKnown:
		return posterior.Noise{Known: true, SD: r.StandardDeviation}
	case RepeatabilityLearned:
		return posterior.Noise{Guess: r.Guess, Worth: r.Worth, Floor: r.Floor}
	case RepeatabilityLearnedReference:
		return posterior.Noise{Floor: r.Floor}
	}
	return posterior.Noise{Absent: true}
}
