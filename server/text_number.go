package server

import (
	"math"
	"strconv"
	"strings"
)

// place is the power of ten of the last digit that is shown of a number:
// -2 for hundredths.
type place int

// Places from which numbers are written with an exponent, as rows of zeros
// can't be read at a glance. Common practice, no source.
const (
	minPlainPlace place = -9
	maxPlainPlace place = 3
	maxPlainValue       = 1e15
)

// uncertaintyPlace returns the place of the second significant digit of the
// standard uncertainty u, rounded to nearest; ok is false unless u is above 0
// and finite.
//
// Source: JCGM 100:2008, 7.2.6 (two significant digits are enough for an
// uncertainty, and the estimate is rounded to be consistent with it). The same
// clause allows rounding up; nearest is used here, because the full digits are
// in the JSON answer.
func uncertaintyPlace(u float64) (last place, ok bool) {
	if !(u > 0) || math.IsInf(u, 1) {
		return 0, false
	}
	return place(exponentOf(u, 1) - 1), true
}

// exponentOf returns the decimal exponent of v, not 0, after rounding to
// 1+decimals significant digits.
func exponentOf(v float64, decimals int) int {
	s := strconv.FormatFloat(v, 'e', decimals, 64)
	e, err := strconv.Atoi(s[strings.IndexByte(s, 'e')+1:])
	if err != nil {
		panic("strconv wrote the exponent of " + s)
	}
	return e
}

// roundTo formats v rounded to the given place.
func roundTo(v float64, last place) string {
	switch {
	case math.IsNaN(v) || math.IsInf(v, 0):
		return strconv.FormatFloat(v, 'g', -1, 64)
	case last >= minPlainPlace && last <= 0 && math.Abs(v) < maxPlainValue:
		return withoutNegativeZero(strconv.FormatFloat(v, 'f', int(-last), 64))
	}
	s := significantTo(v, last)
	if last > maxPlainPlace || last < minPlainPlace || math.Abs(v) >= maxPlainValue {
		return s
	}
	rounded, err := strconv.ParseFloat(s, 64)
	if err != nil {
		panic("strconv wrote the number " + s)
	}
	return strconv.FormatFloat(rounded, 'f', 0, 64)
}

// significantTo formats v with an exponent and its last digit at the given
// place.
func significantTo(v float64, last place) string {
	if v == 0 {
		return "0"
	}
	digits := exponentOf(v, 17) - int(last)
	if digits >= 0 {
		return strconv.FormatFloat(v, 'e', digits, 64)
	}
	unit := "1e" + strconv.Itoa(int(last))
	half, err := strconv.ParseFloat("5e"+strconv.Itoa(int(last)-1), 64)
	if err != nil || math.Abs(v) <= half {
		return "0"
	}
	if v < 0 {
		return "-" + unit
	}
	return unit
}

func withoutNegativeZero(s string) string {
	if strings.HasPrefix(s, "-") && strings.Trim(s, "-0.") == "" {
		return s[1:]
	}
	return s
}

// shortest formats v with as few digits as give it back.
func shortest(v float64) string {
	if a := math.Abs(v); a >= 1e-6 && a < maxPlainValue {
		return strconv.FormatFloat(v, 'f', -1, 64)
	}
	return strconv.FormatFloat(v, 'g', -1, 64)
}

// probabilityText formats a probability with two significant digits of it or
// of its complement, whichever is smaller, so that neither 1e-9 nor 1 - 1e-9
// is shown as certain. Common practice, no source.
func probabilityText(p float64) string {
	switch {
	case p == 0 || p == 1 || math.IsNaN(p):
		return strconv.FormatFloat(p, 'g', -1, 64)
	case p < 1e-3:
		return strconv.FormatFloat(p, 'e', 1, 64)
	case p <= 0.5:
		return strconv.FormatFloat(p, 'f', 1-exponentOf(p, 1), 64)
	}
	// 1 - p is exact here (Sterbenz, 1974: y/2 <= x <= 2y).
	return strconv.FormatFloat(p, 'f', 1-exponentOf(1-p, 1), 64)
}

// within appends the unit to a number, with a space unless there is none.
func within(number, unit string) string {
	if unit == "" {
		return number
	}
	return number + " " + unit
}
