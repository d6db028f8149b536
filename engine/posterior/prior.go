package posterior

import "math"

// Prior is what was known of the level before any reading: normal with Mean
// and SD > 0, or flat over the whole line if Vague.
type Prior struct {
	Vague bool
	Mean  float64
	SD    float64
}

// IntervalPrior returns the normal prior whose central interval of the given
// probability, in (0, 1), is [low, high], low < high:
//
//	mean = (low + high) / 2
//	SD   = (high - low) / (2 z),  z = sqrt(2) erfinv(probability)
//
// Source: DLMF 7.17(i) for the inverse error function; JCGM 100:2008, 4.3.4
// and 4.3.5 convert stated intervals in the same way.
func IntervalPrior(low, high, probability float64) Prior {
	z := math.Sqrt2 * math.Erfinv(probability)
	// Halves first: the sum of two values near the largest double is not one.
	return Prior{Mean: low/2 + high/2, SD: (high/2 - low/2) / z}
}
