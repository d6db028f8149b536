package posterior

// MotionForm tells which fields of a Motion count.
type MotionForm uint8

const (
	MotionConstant  MotionForm = iota // the level stays
	MotionWalk                        // Walk
	MotionTrend                       // Walk, Wander: there is a slope
	MotionReverting                   // Mean, Variance, Rate
)

// Motion says how the level moves. Times are in seconds, so rates are by the
// second. Two motions are the same if they compare equal with ==.
type Motion struct {
	Form     MotionForm
	Walk     float64 // variance the level gains in a second, at least 0
	Wander   float64 // variance the slope gains in a second, at least 0
	Mean     float64 // about which a reverting level moves
	Variance float64 // that it has when undisturbed, above 0
	Rate     float64 // at which a deviation decays: ln 2 / half-life, above 0
}

// SlopePrior is what was known of a slope before any reading: normal, in units
// of the level by the second.
type SlopePrior struct{ Mean, SD float64 }
