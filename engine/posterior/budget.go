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
// each source and step. Where standard deviations differ by more than some 70
// powers of ten, contributions can leave the range of a double.
func (f *Filter) Account() {
	a := &account{trend: f.motion.Form == MotionTrend}
	a.resize(f.n)
	f.account = a
	a.noise(SourcePrior, 0, 0, 0, f.d[0])
	if a.trend {
		a.noise(SourceSlopePrior, 1, 0, 1, f.d[1])
	}
	for k := f.first(); k < f.n; k++ {
		a.noise(SourceEntry, k, 0, k, f.d[k])
	}
}

// Parts returns what each source contributes to the level's variance: they sum to
// it. Without an account, and while the level is vague, there is none.
func (f *Filter) Parts() []Part {
	if f.account == nil || f.vague {
		return nil
	}
	var all []Part
	for i := range f.account.shares {
		s := &f.account.shares[i]
		if v := s.matrix[0]; v != 0 {
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
	trend  bool // state 1 is the slope
	n      int
	shares []share
	vector []float64 // n, for the caller of a method
	space  []float64 // n, for use within one
}

// share is one source's covariance matrix.
type share struct {
	source SourceKind
	state  int
	label  int
	matrix []float64 // n by n, by rows
}

func (a *account) clone() *account {
	c := &account{trend: a.trend, shares: slices.Clone(a.shares)}
	for i := range c.shares {
		c.shares[i].matrix = slices.Clone(c.shares[i].matrix)
	}
	c.n, c.vector, c.space = a.n, make([]float64, a.n), make([]float64, a.n)
	return c
}

// resize makes room for n states.
func (a *account) resize(n int) {
	for i := range a.shares {
		s := &a.shares[i]
		wider := make([]float64, n*n)
		for row := range a.n {
			copy(wider[row*n:], s.matrix[row*a.n:(row+1)*a.n])
		}
		s.matrix = wider
	}
	a.n, a.vector, a.space = n, make([]float64, n), make([]float64, n)
}

// noise adds variance from a source to the state at.
func (a *account) noise(source SourceKind, state, label, at int, variance float64) {
	if variance != 0 {
		a.of(source, state, label).matrix[at*a.n+at] += variance
	}
}

// of returns the share of a source, which is added if there is none.
func (a *account) of(source SourceKind, state, label int) *share {
	for i := range a.shares {
		if s := &a.shares[i]; s.source == source && s.state == state && s.label == label {
			return s
		}
	}
	a.shares = append(a.shares, share{source, state, label, make([]float64, a.n*a.n)})
	return &a.shares[len(a.shares)-1]
}

// add takes in a further state.
func (a *account) add(n, state int, variance float64) {
	a.resize(n)
	a.noise(SourceEntry, state, 0, state, variance)
}

// zeros returns a.vector, cleared.
func (a *account) zeros() []float64 {
	clear(a.vector)
	return a.vector
}

// transform replaces each share S by T S T', where T is the identity but for row
// k, which is t.
func (a *account) transform(k int, t []float64) {
	for i := range a.shares {
		m := a.shares[i].matrix
		a.before(m, t)
		copy(m[k*a.n:], a.space)
		for j := 0; j < len(m); j += a.n {
			m[j+k] = inner(m[j:j+a.n], t)
		}
	}
}

// before puts v' M into a.space.
func (a *account) before(m, v []float64) {
	clear(a.space)
	for i, x := range v {
		if x == 0 {
			continue
		}
		for j, y := range m[i*a.n : (i+1)*a.n] {
			a.space[j] += x * y
		}
	}
}

// inner returns a' b.
func inner(a, b []float64) float64 {
	sum := 0.0
	for i, x := range a {
		sum += x * b[i]
	}
	return sum
}

// glide adds h times the slope's error to the level's.
func (a *account) glide(h float64) {
	t := a.zeros()
	t[0], t[1] = 1, h
	a.transform(0, t)
}

// evolve multiplies the error of a state by left and adds noise of its process.
func (a *account) evolve(k int, left, q float64) {
	if left != 1 {
		t := a.zeros()
		t[k] = left
		a.transform(k, t)
	}
	source := SourceProcess
	switch {
	case k == 0:
		source = SourceWalk
	case k == 1 && a.trend:
		source = SourceWander
	}
	a.noise(source, k, 0, k, q)
}

// redraw draws a state anew.
func (a *account) redraw(state int, variance float64) {
	a.transform(state, a.zeros())
	a.noise(SourceEntry, state, 0, state, variance)
}

// renew draws level and slope anew.
func (a *account) renew(level, slope float64) {
	a.transform(0, a.zeros())
	a.noise(SourcePrior, 0, 0, 0, level)
	if a.trend {
		a.transform(1, a.zeros())
		a.noise(SourceSlopePrior, 1, 0, 1, slope)
	}
}

// white returns the share of the readings' own noise under a label.
func (a *account) white(label int) *share { return a.of(SourceWhite, 0, label) }

// update follows a reading with coefficients h, gain times total, and noise that
// belongs to a share.
func (a *account) update(noise *share, h, gain []float64, total, variance float64) {
	k := a.vector
	for i, g := range gain {
		k[i] = g / total
	}
	for i := range a.shares {
		a.press(a.shares[i].matrix, h, k)
	}
	for i, x := range k {
		for j, y := range k {
			noise.matrix[i*a.n+j] += x * y * variance
		}
	}
}

// press replaces S by A S A' with A = I - K h'.
func (a *account) press(m, h, k []float64) {
	a.before(m, h)
	for i, x := range k {
		row := m[i*a.n : (i+1)*a.n]
		for j, y := range a.space {
			row[j] -= x * y
		}
		s := inner(row, h)
		for j, y := range k {
			row[j] -= s * y
		}
	}
}

// spread adds variance to the level from a label, with what the other states share in it.
func (a *account) spread(label int, share []float64, variance float64) {
	white := a.white(label)
	for i, x := range share {
		for j, y := range share {
			white.matrix[i*a.n+j] += x * y * variance
		}
	}
}

// settle follows the first reading of a level of which nothing was known: its
// error becomes -(sum of h_i e_i + noise) / h_0.
func (a *account) settle(label int, h []float64, variance float64) {
	t := a.zeros()
	for i := 1; i < a.n; i++ {
		t[i] = -h[i] / h[0]
	}
	a.transform(0, t)
	a.noise(SourceWhite, 0, label, 0, variance/(h[0]*h[0]))
}
