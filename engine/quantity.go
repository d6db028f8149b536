package engine

import (
	"strconv"
	"time"

	"leadline.example/engine/decide"
)

// QuantityID names a quantity; see CheckID for its form.
type QuantityID string

// InstrumentID names an instrument; same form as a QuantityID.
type InstrumentID string

// ReadingID names a reading among those of one quantity; 1 to 128 bytes of
// UTF-8, or empty for a reading without one.
type ReadingID string

// QuantityNumber is the ledger's short name of a quantity: 1, 2, 3 ... in the
// order of first declaration, never used again.
type QuantityNumber uint32

// PriorForm tells which fields of a Prior count.
type PriorForm uint8

const (
	PriorVague    PriorForm = iota // flat over the whole line
	PriorNormal                    // Mean, StandardDeviation
	PriorInterval                  // Low, High, Probability: a central interval
)

// Prior is what was known of the level before any reading. It is kept as it
// was declared; levelPrior gives the normal distribution it stands for.
type Prior struct {
	Form              PriorForm
	Mean              float64
	StandardDeviation float64
	Low, High         float64
	Probability       float64
	HasTime           bool
	Time              Instant // when it holds; without HasTime, at the earliest applied reading
}

// RepeatabilityForm tells which fields of a Repeatability count.
type RepeatabilityForm uint8

const (
	RepeatabilityAbsent           RepeatabilityForm = iota // every reading brings its own
	RepeatabilityKnown                                     // StandardDeviation
	RepeatabilityLearned                                   // Guess, Worth
	RepeatabilityLearnedReference                          // the reference prior 1/r
)

// Repeatability is the random part of one reading, as a standard deviation r.
type Repeatability struct {
	Form              RepeatabilityForm
	StandardDeviation float64 // r, above 0
	Guess             float64 // r^2 ~ scaled inverse chi-squared(Worth, Guess^2)
	Worth             float64 // degrees of freedom, at least 1
	Floor             float64 // a learned r is at least that; 0: no floor
}

// Learned tells whether r is learned from the readings.
func (r Repeatability) Learned() bool {
	return r.Form == RepeatabilityLearned || r.Form == RepeatabilityLearnedReference
}

// scale returns r as far as it is known, else 1: what a value is compared with
// to see that its square won't overflow.
func (r Repeatability) scale() float64 {
	switch r.Form {
	case RepeatabilityKnown:
		return r.StandardDeviation
	case RepeatabilityLearned:
		return r.Guess
	}
	return 1
}

// DynamicsForm tells how the true value may move.
type DynamicsForm uint8

const (
	DynamicsConstant      DynamicsForm = iota
	DynamicsRandomWalk                 // StandardDeviation, Per
	DynamicsLinearTrend                // Slope, Wander; StandardDeviation and Per may be 0
	DynamicsMeanReverting              // Mean, StandardDeviation, HalfLife
)

// Dynamics says how the true value may move. StandardDeviation^2 h / Per is the
// variance that a random walk, also that of a linear trend's level, gains in a
// time h. A mean-reverting level is an Ornstein-Uhlenbeck process with
// that mean and StandardDeviation when undisturbed, half of a deviation being gone
// after HalfLife.
type Dynamics struct {
	Form              DynamicsForm
	StandardDeviation float64
	Per               time.Duration
	Slope             Slope
	Wander            Wander
	Mean              float64
	HalfLife          time.Duration
}

// Slope is the normal prior of a linear trend's slope: what the level changes
// by in a time Per.
type Slope struct {
	Mean              float64
	StandardDeviation float64 // at least 0
	Per               time.Duration
}

// Wander is the random walk of a slope: the standard deviation, in the slope's
// unit, of its change within Per. The zero value is none.
type Wander struct {
	StandardDeviation float64
	Per               time.Duration
}

// Outliers says that each reading is, with Probability, one whose random standard
// deviation is Inflation times what it otherwise would be. The zero value: none are.
type Outliers struct {
	Probability float64 // above 0, at most 0.5
	Inflation   float64 // above 1
}

// Scale is the scale on which the level and its errors are normal.
type Scale uint8

const (
	ScaleLinear Scale = iota
	// ScaleLog: the natural logarithm of the level, which is positive by nature.
	// Standard deviations of readings and dynamics are then of the logarithm; values,
	// limits and the prior are in the quantity's unit.
	ScaleLog
)

// ModelCheck says how the model is held against its readings. Fields that are 0
// have the defaults of package modelcheck.
type ModelCheck struct {
	Window            int     // scored readings from one look to the next
	ObjectionsPerYear float64 // that a correct model may raise
}

// StepDetection says when a shift of the readings against their predictions counts as a
// step, and what follows.
type StepDetection struct {
	FalseAlarmInterval float64 // mean number of readings between false detections; 0: the default
	Widen              float64 // standard deviation added to the level at a step; 0: none
}

// Tolerance is the range of permissible true values; the limits conform.
type Tolerance struct {
	HasLower, HasUpper bool
	Lower, Upper       float64
}

// Declared tells whether there is any limit.
func (t Tolerance) Declared() bool { return t.HasLower || t.HasUpper }

// Declaration is all that a user states of a quantity. Two declarations are
// the same if they compare equal with ==.
type Declaration struct {
	Unit          string
	Description   string
	Prior         Prior
	Repeatability Repeatability
	Dynamics      Dynamics
	Outliers      Outliers
	Scale         Scale
	ModelCheck    ModelCheck
	StepDetection StepDetection
	Tolerance     Tolerance
	Rule          decide.Rule   // the zero Rule means decide.DefaultRule
	BreachHorizon time.Duration // how far ahead a breach is looked for, for the metrics; 0: it isn't
}

// SameBelief tells whether d and e give every set of readings the same belief
// and every check of the model the same result, so that going from one to the other
// needs no refolding.
func (d Declaration) SameBelief(e Declaration) bool {
	return d.Prior == e.Prior && d.Repeatability == e.Repeatability && d.Dynamics == e.Dynamics &&
		d.Outliers == e.Outliers && d.Scale == e.Scale && d.ModelCheck == e.ModelCheck && d.StepDetection == e.StepDetection
}

// DecisionRule returns the rule in force: the declared one or the default.
func (d Declaration) DecisionRule() decide.Rule {
	if d.Rule == (decide.Rule{}) {
		return decide.DefaultRule
	}
	return d.Rule
}

// Quantity is a declaration with what the service adds to it.
type Quantity struct {
	ID          QuantityID
	Number      QuantityNumber
	Declaration Declaration
	Revision    uint32 // from 1, one more at each change of the declaration and at each revival
	CreateTime  Instant
	UpdateTime  Instant
	Retired     bool
	RetireTime  Instant
	Renewals    []Renewal // by time, withdrawn ones included; never changed in place
}

// ETag changes whenever anything of the quantity but its belief does.
func (q Quantity) ETag() string {
	tag := strconv.FormatUint(uint64(q.Revision), 10)
	if q.Retired {
		tag += "-retired"
	}
	return tag
}
