package server

import (
	"math"
	"strconv"

	"leadline.example/engine"
)

// The numbers of a belief. The breach probability of either side stands
// between the two, as it often equals one of them.
const (
	meanNumber = iota
	deviationNumber
	lowerNumber
	upperNumber
	belowNumber
	eitherNumber
	aboveNumber
	horizonNumber
	medianNumber
	halfNumber // of the readings within the central half of what was predicted
	mostNumber // and within 95 per cent
	squareNumber
	numberCount
)

// numberTexts are the numbers of a belief as the page has them. Writing a
// float64 with as few digits as give it back is half the work of a page, so
// the texts are kept for as long as the belief stays the same.
type numberTexts struct {
	figures engine.Figures
	texts   []byte
	ends    [numberCount]uint8 // in texts; a number has at most 24 bytes
}

// update makes n the texts of f.
func (n *numberTexts) update(f *engine.Figures) {
	if len(n.texts) > 0 && n.figures == *f {
		return
	}
	n.figures, n.texts = *f, n.texts[:0]
	values := [numberCount]float64{
		meanNumber: f.Mean, deviationNumber: f.StandardDeviation, lowerNumber: f.Lower, upperNumber: f.Upper,
		belowNumber: f.Breach.Below, eitherNumber: f.Breach.Either, aboveNumber: f.Breach.Above,
		horizonNumber: f.HorizonProbability, medianNumber: f.MedianSeconds,
		halfNumber: f.Check.Coverage50, mostNumber: f.Check.Coverage95, squareNumber: f.Check.MeanSquare,
	}
	for i, v := range values {
		if i > 0 && v == values[i-1] {
			n.texts = append(n.texts, n.text(i-1)...)
		} else {
			n.texts = appendValue(n.texts, v)
		}
		n.ends[i] = uint8(len(n.texts))
	}
}

// text returns one of the numbers; it is valid until the next update.
func (n *numberTexts) text(number int) []byte {
	if number == 0 {
		return n.texts[:n.ends[0]]
	}
	return n.texts[n.ends[number-1]:n.ends[number]]
}

// appendValue writes v with as few digits as give it back, so that the page
// carries the same float64 as the JSON answers.
func appendValue(b []byte, v float64) []byte {
	if v == math.Trunc(v) && math.Abs(v) < 1e15 && (v != 0 || !math.Signbit(v)) {
		return strconv.AppendInt(b, int64(v), 10)
	}
	return strconv.AppendFloat(b, v, 'g', -1, 64)
}

// appendSeconds writes a moment in seconds with all its decimals: a division
// would round twice.
func appendSeconds(b []byte, at engine.Instant) []byte {
	if at < 0 {
		b, at = append(b, '-'), -at
	}
	b = strconv.AppendInt(b, int64(at/1e9), 10)
	rest := at % 1e9
	if rest == 0 {
		return b
	}
	b = append(b, '.')
	for digit := engine.Instant(1e8); rest > 0; digit /= 10 {
		b = append(b, byte('0'+rest/digit))
		rest %= digit
	}
	return b
}
