package posterior

// Indication is what one reading says that its instrument indicated: a value, where
// Lower == Upper, or that it lay between Lower and Upper, one of which may be
// infinite. A display of resolution d that shows y says y - d/2 to y + d/2
// (JCGM 100:2008, F.2.2.1).
type Indication struct{ Lower, Upper float64 }

// Exactly returns the indication of a value y.
func Exactly(y float64) Indication { return Indication{y, y} }

// Exact tells whether the indication is a value.
func (y Indication) Exact() bool { return y.Lower == y.Upper }

// Spread is the white noise of one reading: normal with standard deviation SD, or,
// with OutlierProbability, SD times Inflation (the contaminated normal of Tukey 1960,
// from memory). SD is finite and above 0, OutlierProbability lies in [0, 1), Inflation
// above 1 and up to 100, which is as much as a Grid resolves.
type Spread struct{ SD, OutlierProbability, Inflation float64 }
