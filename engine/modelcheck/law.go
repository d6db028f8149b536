package modelcheck

import "math"

// Defaults of Settings.
const (
	DefaultWindow             = 64
	DefaultObjectionsPerYear  = 0.001
	DefaultFalseAlarmInterval = 1e6
)

// Ranges of Settings for which the package's precision holds; the caller sees to them.
const (
	MinWindow             = 16
	MaxWindow             = 4096
	MaxObjectionsPerYear  = 1000
	MinFalseAlarmInterval = 100
	MaxFalseAlarmInterval = 1e9
)

// Settings is what is declared of a check; a field that is 0 has its default.
type Settings struct {
	Window             int     // scored readings from one look to the next
	ObjectionsPerYear  float64 // mean number that a correct model raises in a year
	FalseAlarmInterval float64 // mean number of scored readings from one false step to the next
}

const (
	yearNanoseconds = 365.25 * 86400e9 // the Julian year
	// shares is among how many tests the objections of a year are divided: too narrow,
	// too wide, serial, prior.
	shares = 4
	// maxLevel bounds what the tests of one look have together, however long the time
	// since the one before.
	maxLevel = 0.01
)

// Law is what follows from Settings, made once and used for every reading. Two laws
// are the same if they compare equal with ==.
type Law struct {
	settings  Settings
	threshold float64

	// Outside of these bounds alone a statistic may be worth its probability: inside,
	// that is above maxLevel / shares.
	squareLow, squareHigh float64
	lagHigh               float64
}

// LawOf derives the law; some 0.3 ms.
func LawOf(s Settings) Law {
	if s.Window == 0 {
		s.Window = DefaultWindow
	}
	if s.ObjectionsPerYear == 0 {
		s.ObjectionsPerYear = DefaultObjectionsPerYear
	}
	if s.FalseAlarmInterval == 0 {
		s.FalseAlarmInterval = DefaultFalseAlarmInterval
	}
	l := Law{settings: s, threshold: Threshold(s.FalseAlarmInterval)}
	n := float64(s.Window)
	l.squareLow, l.squareHigh = cubeRoot(n, -2.6), cubeRoot(n, 2.6)
	l.lagHigh = 2.7 * math.Sqrt((n-1)/(n*(n+2)))
	return l
}

// cubeRoot returns roughly the chi-squared value with n degrees of freedom that corresponds to a
// normal score (Wilson & Hilferty 1931).
func cubeRoot(n, z float64) float64 {
	v := 2 / (9 * n)
	x := 1 - v + z*math.Sqrt(v)
	return n * x * x * x
}

// Settings returns what the law was derived from, defaults filled in.
func (l *Law) Settings() Settings { return l.settings }

// Threshold returns the decision interval of the CUSUM, in normal scores.
func (l *Law) Threshold() float64 { return l.threshold }

// level is the probability of error that each test of a look may spend which comes
// so many nanoseconds after the one before.
func (l *Law) level(nanoseconds float64) float64 {
	return math.Min(l.settings.ObjectionsPerYear*nanoseconds/yearNanoseconds, maxLevel) / shares
}
