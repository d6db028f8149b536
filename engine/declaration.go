package engine

import (
	"math"
	"time"

	"leadline.example/engine/decide"
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
	r := &d.Repeatability
	switch r.Form {
	case RepeatabilityKnown:
		return checkDeviation("repeatability.standard_deviation", r.StandardDeviation)
	case RepeatabilityLearned:
		if err := checkDeviation("repeatability.learned.guess", r.Guess); err != nil {
			return err
		}
		if !(r.Worth >= 1 && r.Worth <= maxWorth) {
			return refuse(InvalidField, "repeatability.learned.worth", "repeatability.learned.worth is %v; give the number of degrees of freedom that the guess is worth, from 1 to 1e9", r.Worth)
		}
	}
	return nil
}

func (d *Declaration) checkDynamics() *Error {
	y := &d.Dynamics
	field := map[DynamicsForm]string{
		DynamicsRandomWalk: "dynamics.random_walk", DynamicsLinearTrend: "dynamics.linear_trend", DynamicsMeanReverting: "dynamics.mean_reverting",
	}[y.Form]
	if y.Form != DynamicsConstant && d.Repeatability.Learned() {
		return refuse(NotSupported, "repeatability.learned", "repeatability.learned is not supported together with %s; give repeatability.standard_deviation, or dynamics.constant", field)
	}
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

// levelPrior returns the prior of the level as moments. A mean-reverting level of
// which nothing is stated follows its stationary law.
func (d *Declaration) levelPrior() posterior.Prior {
	if y := &d.Dynamics; d.Prior.Form == PriorVague && y.Form == DynamicsMeanReverting {
		return posterior.Prior{Mean: y.Mean, SD: y.StandardDeviation}
	}
	switch p := d.Prior; p.Form {
	case PriorNormal:
		return posterior.Prior{Mean: p.Mean, SD: p.StandardDeviation}
	case PriorInterval:
		return posterior.IntervalPrior(p.Low, p.High, p.Probability)
	}
	return posterior.Prior{Vague: true}
}

// noise returns what is declared of the repeatability.
func (d *Declaration) noise() posterior.Noise {
	switch r := d.Repeatability; r.Form {
	case RepeatabilityKnown:
		return posterior.Noise{Known: true, SD: r.StandardDeviation}
	case RepeatabilityLearned:
		return posterior.Noise{Guess: r.Guess, Worth: r.Worth}
	case RepeatabilityLearnedReference:
		return posterior.Noise{}
	}
	return posterior.Noise{Absent: true}
}
