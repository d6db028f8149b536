package posterior

// sharp is how much wider the belief about a reading must be than its noise, in
// variance, for the means to be sharpened: else the rounding of the gain is
// below 1e-12 standard deviations already.
const sharp = 1e6

// sharpen puts the means right in the direction of a reading that told far more
// than was known. The means move by gain / total innovation, of which a
// rounding is many standard deviations of what is known afterwards; but what must be
// left of the innovation is exactly variance / total of it, so what differs from
// that is taken off along the gain. The reading less its offset and the
// innovation are as before the means moved; f.space still holds the coefficients.
func (f *Filter) sharpen(reading pair, innovation float64, gain []float64, total, variance float64) {
	for i, c := range f.space[:f.n] {
		if c != 0 {
			reading = reading.minus(f.mean[i].pair().times(c))
		}
	}
	step := (reading.value() - innovation*(variance/total)) / total
	for i, g := range gain {
		f.mean[i] = f.mean[i].Plus(g * step)
	}
}
