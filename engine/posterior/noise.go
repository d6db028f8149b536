package posterior

// Noise says what is known of r, the repeatability standard deviation of one
// reading.
//
//   - Absent: nothing; every reading brings its own standard deviation, and
//     none may be added as one that informs r.
//   - Known: r = SD.
//   - else r is learned: r^2 is scaled inverse chi-squared with Worth degrees
//     of freedom and scale Guess^2, or, with Worth 0, r has the reference prior
//     1/r (Gelman et al. 2013, Bayesian Data Analysis, 2.6 and 3.2); with a
//     Floor, cut off below that.
type Noise struct {
	Absent bool
	Known  bool
	SD     float64
	Guess  float64
	Worth  float64
	Floor  float64 // of a learned r; 0: none
}

// learned tells whether readings can inform r.
func (n Noise) learned() bool { return !n.Absent && !n.Known }
