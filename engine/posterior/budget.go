package posterior

import "slices"

// SourceKind is where a part of the level's uncertainty comes from.
type SourceKind uint8

const (
	SourcePrior      SourceKind = iota // the level before any reading
	SourceSlopePrior                   // the slope before any reading
	SourceEntry                        // a further state as it was added or redrawn
	SourceWalk                         // the level's own movement
	SourceWander                       // the slope's movement
	SourceProcess                      // a further state's movement
	SourceWhite                        // the readings' own noise
)

// Part is the variance that one source gives to the level. State says whose entry or
// process it is, Label whose noise.
type Part struct {
	Source   SourceKind
	State    int
	Label    int
	Variance float64
}

// Account has f keep account of where its uncertainty comes from, from now on;
// f has seen no reading yet. It costs the square of the number of states for
// each source and step.
func (f *Filter) Account() {
	f.account = &account{n: f.n}
	f.account.renew(f.d[0], f.motion.Form == MotionTrend, 0)
	for k := 1; k < f.n; k++ {
		if f.motion.Form == MotionTrend && k == 1 {
			f.account.noise(SourceSlopePrior, 1, 0, 1, f.d[1])
		} else {
			f.account.noise(SourceEntry, k, 0, k, f.d[k])
		}
	}
}

// Parts returns what each source contributes to the level's variance: they sum to
// it. Without an account there is none.
func (f *Filter) Parts() []Part {
	if f.account == nil {
		return nil
	}
	var all []Part
	for i := range f.account.shares {
		s := &f.account.shares[i]
		if v := s.at(0, 0); v != 0 {
			all = append(all, Part{Source: s.source, State: s.state, Label: s.label, Variance: v})
		}
	}
	return all
}

// account splits the covariance of a Filter into the contributions of independent
// sources. The error after an update is A e - K noise with A = I - K h', so each
// contribution S becomes A S A', and that of the noise gains K K' variance: the
// form of Joseph (Bucy & Joseph 1968, Filtering for Stochastic Processes, from
// memory), which holds for any gain.
type account struct {
	n      int
	shares []share
}

// share is one source's covariance matrix.
type share struct {
	source SourceKind
	state  int
	label  int
	n      int
	matrix []float64 // n by n
}

func (s *share) at(i, j int) float64 { return s.matrix[i*s.n+j] }

func (a *account) clone() *account {
	c := &account{n: a.n, shares: slices.Clone(a.shares)}
	for i := range c.shares {
		c.shares[i].matrix = slices.Clone(c.shares[i].matrix)
	}
	return c
}

// of returns the share of a source, which is added if there is none.
func (a *account) of(source SourceKind, state, label int) *share {
	for i := range a.shares {
		if s := &a.shares[i]; s.source == source && s.state == state && s.label == label {
			return s
		}
	}
	a.shares = append(a.shares, share{source: source, state: state, label: label, n: a.n, matrix: make([]float64, a.n*a.n)})
	return &a.shares[len(a.shares)-1]
}

// noise adds variance from a source to the state at.
func (a *account) noise(source SourceKind, state, label, at int, variance float64) {
	if variance == 0 {
		return
	}
	s := a.of(source, state, label)
	s.matrix[at*s.n+at] += variance
}

// add takes in a further state.
func (a *account) add(n, state int, variance float64) {
	for i := range a.shares {
		s := &a.shares[i]
		wider := make([]float64, n*n)
		for row := range s.n {
			copy(wider[row*n:], s.matrix[row*s.n:(row+1)*s.n])
		}
		s.n, s.matrix = n, wider
	}
	a.n = n
	a.noise(SourceEntry, state, 0, state, variance)
}

// transform replaces each share S by T S T', where T differs from the identity in row
// k only.
func (a *account) transform(k int, row func(s *share, column int) float64) {
	for i := range a.shares {
		s := &a.shares[i]
		changed := make([]float64, s.n)
		for j := range s.n {
			changed[j] = row(s, j)
		}
		for j := range s.n {
			s.matrix[k*s.n+j] = changed[j]
		}
		for j := range s.n {
			changed[j] = row(&share{n: s.n, matrix: transposed(s)}, j)
		}
		for j := range s.n {
			s.matrix[j*s.n+k] = changed[j]
		}
	}
}

func transposed(s *share) []float64 {
	t := make([]float64, len(s.matrix))
	for i := range s.n {
		for j := range s.n {
			t[j*s.n+i] = s.matrix[i*s.n+j]
		}
	}
	return t
}

// glide adds h times the slope's error to the level's.
func (a *account) glide(h float64) {
	a.transform(0, func(s *share, j int) float64 { return s.at(0, j) + h*s.at(1, j) })
}

// evolve multiplies the error of a state by left and adds noise of its process.
func (a *account) evolve(k int, left, q float64) {
	if left != 1 {
		a.transform(k, func(s *share, j int) float64 { return left * s.at(k, j) })
	}
	source := SourceProcess
	switch {
	case k == 0:
		source = SourceWalk
	case k == 1 && a.slope():
		source = SourceWander
	}
	a.noise(source, k, 0, k, q)
}

// slope tells whether state 1 is a slope.
func (a *account) slope() bool {
	return slices.ContainsFunc(a.shares, func(s share) bool { return s.source == SourceSlopePrior })
}

// redraw draws a state anew.
func (a *account) redraw(state int, variance float64) {
	a.transform(state, func(*share, int) float64 { return 0 })
	a.noise(SourceEntry, state, 0, state, variance)
}

// renew draws level and slope anew.
func (a *account) renew(level float64, trend bool, slope float64) {
	a.transform(0, func(*share, int) float64 { return 0 })
	a.noise(SourcePrior, 0, 0, 0, level)
	if trend {
		a.transform(1, func(*share, int) float64 { return 0 })
		a.of(SourceSlopePrior, 1, 0)
		a.noise(SourceSlopePrior, 1, 0, 1, slope)
	}
}

// update follows a reading with coefficients h, gain times total, and the noise of
// a label.
func (a *account) update(label int, h, gain []float64, total, variance float64) {
	white := a.of(SourceWhite, 0, label)
	for i := range a.shares {
		a.shares[i].press(h, gain, total)
	}
	for i := range white.n {
		for j := range white.n {
			white.matrix[i*white.n+j] += gain[i] / total * (gain[j] / total) * variance
		}
	}
}

// press replaces S by A S A' with A = I - K h'.
func (s *share) press(h, gain []float64, total float64) {
	for range 2 { // A S, and with the transpose A (A S)'
		for j := range s.n {
			sum := 0.0
			for i := range s.n {
				sum += h[i] * s.at(i, j)
			}
			for i := range s.n {
				s.matrix[i*s.n+j] -= gain[i] / total * sum
			}
		}
		s.matrix = transposed(s)
	}
}

// settle follows the first reading of a level of which nothing was known: its
// error becomes -(sum of h_i e_i + noise) / h_0.
func (a *account) settle(label int, h []float64, variance float64) {
	a.of(SourceWhite, 0, label)
	a.transform(0, func(s *share, j int) float64 {
		sum := 0.0
		for i := 1; i < s.n; i++ {
			sum -= h[i] / h[0] * s.at(i, j)
		}
		return sum
	})
	a.noise(SourceWhite, 0, label, 0, variance/(h[0]*h[0]))
}
