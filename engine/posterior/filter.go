package posterior

import (
	"math"
	"slices"
)

// MaxStates is the number of states that a Filter can have.
const MaxStates = 128

// Process is how a further state of a Filter starts and moves: from N(0, Variance),
// then as a random walk that gains Diffusion, a variance, in a second; or, with
// Rate above 0, as a stationary Ornstein-Uhlenbeck process of that Variance whose
// autocorrelation decays as exp(-Rate h).
type Process struct {
	Variance  float64
	Diffusion float64
	Rate      float64
}

// Term is a state's part in a reading. State 0 is the level, state 1 under a
// trend the slope, others are as Add returned them.
type Term struct {
	State       int
	Coefficient float64
}

// Filter is the joint normal belief about a level, its slope, and further states
// such as biases, by which readings are tied together: the Kalman filter.
//
// Its covariance is held as P = U D U' with U unit upper triangular and D
// diagonal. The obvious way, to hold P and subtract from it at each reading, loses
// what is left of a variance that falls by more than a double has digits, and
// may leave it negative; here no variance is ever subtracted from, so each keeps
// its relative accuracy: about 1e-15 a step. Means are Levels; an update adds the gain
// times the innovation, so the mean is off by some 1e-16 of the distance moved.
//
// Sources: Bierman (1977), Factorization Methods for Discrete Sequential
// Estimation, chapter V (measurement update) and VII (rank-one update, after Agee &
// Turner 1972), from memory; Durbin & Koopman (2012), 5.2, for the flat start.
//
// A Filter of n states takes some 192 + 72 n + 4 n (n - 1) bytes: 0.4 kB for a level
// with two biases, 0.6 kB for a trend with two biases and correlated noise.
// It isn't copied by assignment, see Clone.
type Filter struct {
	motion Motion
	vague  bool // nothing is known of the level yet: its variance is infinite
	n      int
	mean   []Level
	d      []float64 // D
	u      []float64 // U above the diagonal, column by column
	moves  []Process // how the states after level and slope move
	space  []float64 // three times n, for use within a call

	account *account // nil: none is kept
}

// NewFilter starts from what is known of level and slope, which are independent.
// The slope counts under a trend only.
func NewFilter(m Motion, level Prior, slope SlopePrior) Filter {
	f := Filter{motion: m}
	f.resize(f.first())
	f.Renew(level, slope)
	return f
}

// resize makes room for n states, no less than there are; new ones are known to be 0.
func (f *Filter) resize(n int) {
	f.n = n
	f.mean = append(make([]Level, 0, n), f.mean...)[:n]
	f.d = append(make([]float64, 0, n), f.d...)[:n]
	f.u = append(make([]float64, 0, n*(n-1)/2), f.u...)[:n*(n-1)/2]
	f.moves = append(make([]Process, 0, n), f.moves...)[:n]
	f.space = make([]float64, 3*n)
}

// Add appends an independent state and returns its number. There are at most
// MaxStates. Of what moves a filter on, this alone allocates.
func (f *Filter) Add(p Process) int {
	k := f.n
	f.resize(k + 1)
	f.d[k], f.moves[k] = p.Variance, p
	if f.account != nil {
		f.account.add(f.n, k, p.Variance)
	}
	return k
}

// States returns the number of states.
func (f *Filter) States() int { return f.n }

// Vague tells whether nothing is known of the level yet.
func (f *Filter) Vague() bool { return f.vague }

// Clone returns a copy that shares nothing.
func (f *Filter) Clone() Filter {
	c := *f
	c.mean, c.d, c.u, c.moves = slices.Clone(f.mean), slices.Clone(f.d), slices.Clone(f.u), slices.Clone(f.moves)
	c.space = make([]float64, 3*f.n)
	if f.account != nil {
		c.account = f.account.clone()
	}
	return c
}

// column returns U's column j above the diagonal.
func (f *Filter) column(j int) []float64 { return f.u[j*(j-1)/2 : j*(j+1)/2] }

// entry returns U_ij.
func (f *Filter) entry(i, j int) float64 {
	switch {
	case i == j:
		return 1
	case i > j:
		return 0
	}
	return f.column(j)[i]
}

// Advance moves everything on by a time of at least 0 seconds.
func (f *Filter) Advance(seconds float64) {
	if seconds <= 0 {
		return
	}
	f.advanceLevel(seconds)
	for k := f.first(); k < f.n; k++ {
		switch p := &f.moves[k]; {
		case p.Rate > 0:
			left := math.Exp(-p.Rate * seconds)
			f.evolve(k, left, p.Variance*gained(p.Rate, seconds))
			f.mean[k] = levelOf(f.mean[k].pair().times(left))
		case p.Diffusion > 0:
			f.evolve(k, 1, p.Diffusion*seconds)
		}
	}
}

// first is the number of the first state after level and slope.
func (f *Filter) first() int {
	if f.motion.Form == MotionTrend {
		return 2
	}
	return 1
}

// gained returns the part of its stationary variance that an Ornstein-Uhlenbeck
// process gains in a time: 1 - exp(-2 rate h).
func gained(rate, seconds float64) float64 { return -math.Expm1(-2 * rate * seconds) }

// advanceLevel moves level and slope on. A wandering slope s gives them the
// covariance w [h^3/3 h^2/2; h^2/2 h] (Durbin & Koopman 2012, 3.8), which is half
// the step, w h to the slope, the other half, and w h^3/12 to the level. What is
// unknown stays unknown.
func (f *Filter) advanceLevel(h float64) {
	m := &f.motion
	switch m.Form {
	case MotionTrend:
		if m.Wander == 0 {
			f.glide(h)
		} else {
			f.glide(h / 2)
			f.evolve(1, 1, m.Wander*h)
			f.glide(h / 2)
		}
		f.walk(m.Walk*h, m.Wander*h*h*h/12)
	case MotionWalk:
		f.walk(m.Walk*h, 0)
	case MotionReverting:
		left := math.Exp(-m.Rate * h)
		f.evolve(0, left, m.Variance*gained(m.Rate, h))
		f.mean[0] = LevelOf(m.Mean).Plus(f.mean[0].Minus(LevelOf(m.Mean)) * left)
	}
}

// walk adds to the level's variance, unless that is infinite.
func (f *Filter) walk(walked, wandered float64) {
	if f.vague {
		return
	}
	f.d[0] += walked + wandered
	if f.account != nil {
		f.account.noise(SourceWalk, 0, 0, 0, walked)
		f.account.noise(SourceWander, 1, 0, 0, wandered)
	}
}

// glide moves the level on by its slope.
func (f *Filter) glide(h float64) {
	if f.account != nil {
		f.account.glide(h)
	}
	if f.vague {
		return
	}
	f.column(1)[0] += h
	for j := 2; j < f.n; j++ {
		c := f.column(j)
		c[0] += h * c[1]
	}
	f.mean[0] = levelOf(f.mean[0].pair().plus(f.mean[1].pair().times(h)))
}

// evolve multiplies the error of state k by left and adds independent noise of
// variance q to it:
//
//	D_k' = left^2 D_k + q;  column' = left D_k / D_k' column
//
// and D_k q / D_k' times column column' is what the states before k keep.
func (f *Filter) evolve(k int, left, q float64) {
	if f.account != nil {
		f.account.evolve(k, left, q)
	}
	if left == 1 && q == 0 {
		return
	}
	before := f.d[k]
	after := left*left*before + q
	share, rest := 0.0, 0.0
	if after > 0 {
		share, rest = left*before/after, before*(q/after)
	}
	f.d[k] = after
	f.split(k, share, rest)
	for j := k + 1; j < f.n; j++ {
		f.column(j)[k] *= left
	}
}

// forgotten is less than any entry of U that says something (the ratio of two
// standard deviations, of 1e-100 to 1e100): one that decays for ever is let go
// before it becomes subnormal, with which a processor is slow.
const forgotten = 1e-280

// split multiplies column k by share and gives rest column column' to the states
// before it.
func (f *Filter) split(k int, share, rest float64) {
	a, c := f.space[:k], f.column(k)
	for i, u := range c {
		if math.Abs(u) < forgotten {
			u = 0
		}
		a[i], c[i] = u, u*share
	}
	f.spread(a, rest)
}

// spread adds w a a', w at least 0, to the covariance of the first len(a) states.
// The new U is a mean of the old and a/s, weighted by their variances, not the old with a
// correction, which would leave nothing of a where it differs by many digits.
func (f *Filter) spread(a []float64, w float64) {
	for j := len(a) - 1; j >= 0 && w > 0; j-- {
		s, before := a[j], f.d[j]
		after := before + w*s*s
		if after == 0 {
			continue
		}
		per := 1 / after
		kept, beta := before*per, w*s*per
		f.d[j] = after
		w = shrunk(w, before, per)
		at := j * (j - 1) / 2
		c, head := f.u[at:at+j], a[:j]
		for i, u := range c {
			c[i] = u*kept + beta*head[i]
			head[i] -= s * u
		}
	}
}

// shrunk returns x before / after for 0 <= before <= after, with per = 1 / after:
// where the quotient underflows x / after doesn't overflow.
func shrunk(x, before, per float64) float64 {
	if q := before * per; q > 1e-150 {
		return x * q
	}
	return x * per * before
}

// Redraw forgets a state and draws it anew from a process, independent of all
// else: an instrument's next calibration, or its next occasion.
func (f *Filter) Redraw(state int, p Process) {
	if f.account != nil {
		f.account.redraw(state, p.Variance)
	}
	f.forget(state)
	f.d[state], f.moves[state], f.mean[state] = p.Variance, p, Level{}
}

// Diffuse has a state after level and slope gain a variance in a second from now on.
func (f *Filter) Diffuse(state int, variance float64) { f.moves[state].Diffusion = variance }

// Widen has a state after level and slope gain a variance at once, by its movement.
func (f *Filter) Widen(state int, variance float64) { f.evolve(state, 1, variance) }

// WidenLevel has the level gain a variance at once, unless that is infinite.
func (f *Filter) WidenLevel(variance float64) { f.walk(variance, 0) }

// forget leaves a state out of the covariance.
func (f *Filter) forget(k int) {
	f.split(k, 0, f.d[k])
	for j := k + 1; j < f.n; j++ {
		f.column(j)[k] = 0
	}
}

// Renew draws level and slope anew, independent of all else: the part that is
// measured was replaced.
func (f *Filter) Renew(level Prior, slope SlopePrior) {
	if f.motion.Form == MotionTrend {
		f.forget(1)
		f.d[1], f.mean[1] = slope.SD*slope.SD, LevelOf(slope.Mean)
	}
	f.forget(0)
	f.d[0], f.mean[0], f.vague = level.SD*level.SD, LevelOf(level.Mean), level.Vague
	if level.Vague {
		f.d[0], f.mean[0] = 0, Level{}
	}
	if f.account != nil {
		f.account.renew(f.d[0], slope.SD*slope.SD)
	}
}

// Mean returns the mean of a state.
func (f *Filter) Mean(state int) float64 { return f.mean[state].Value() }

// Variance returns the variance of a state. That of the level is without meaning
// while it is vague.
func (f *Filter) Variance(state int) float64 { return f.Covariance(state, state) }

// Covariance returns the covariance of two states.
func (f *Filter) Covariance(i, j int) float64 {
	sum := 0.0
	for k := max(i, j); k < f.n; k++ {
		sum += f.entry(i, k) * f.d[k] * f.entry(j, k)
	}
	return sum
}

// Combination returns mean and variance of a linear combination of states. The
// variance is a sum of squares, so it doesn't cancel where biases offset each other.
func (f *Filter) Combination(terms []Term) (mean, variance float64) {
	var sum pair
	for _, t := range terms {
		sum = sum.plus(f.mean[t.State].pair().times(t.Coefficient))
	}
	for k := range f.n {
		s := 0.0
		for _, t := range terms {
			s += t.Coefficient * f.entry(t.State, k)
		}
		variance += s * f.d[k] * s
	}
	return sum.value(), variance
}

// Posterior returns the distribution of the level; FormNone while it is vague.
func (f *Filter) Posterior() Posterior {
	if f.vague {
		return Posterior{}
	}
	return Posterior{form: FormNormal, location: f.mean[0], scale: math.Sqrt(f.Variance(0))}
}

// PosteriorAfter returns the distribution of the level after a time of at least 0
// seconds: what Posterior gives after Advance, but for rounding, without moving f on
// and without allocation.
func (f *Filter) PosteriorAfter(seconds float64) Posterior {
	if f.vague || seconds <= 0 || f.motion.Form == MotionConstant {
		return f.Posterior()
	}
	m, mean, h := &f.motion, f.mean[0], seconds
	variance := 0.0
	switch m.Form {
	case MotionWalk:
		variance = f.Variance(0) + m.Walk*h
	case MotionTrend:
		mean = levelOf(mean.pair().plus(f.mean[1].pair().times(h)))
		for k := range f.n {
			s := f.entry(0, k) + h*f.entry(1, k)
			variance += s * f.d[k] * s
		}
		variance += m.Walk*h + m.Wander*h*h*h/3
	case MotionReverting:
		left := math.Exp(-m.Rate * h)
		variance = left*left*f.Variance(0) + m.Variance*gained(m.Rate, h)
		mean = LevelOf(m.Mean).Plus(mean.Minus(LevelOf(m.Mean)) * left)
	}
	return Posterior{form: FormNormal, location: mean, scale: math.Sqrt(variance)}
}

// Predictive returns the distribution of a reading made now: as in Update.
func (f *Filter) Predictive(offset, levelCoefficient float64, terms []Term, variance float64) Posterior {
	if f.vague {
		return Posterior{}
	}
	all := append([]Term{{0, levelCoefficient}}, terms...)
	_, known := f.Combination(all)
	mean := LevelOf(offset).pair()
	for _, t := range all {
		mean = mean.plus(f.mean[t.State].pair().times(t.Coefficient))
	}
	return Posterior{form: FormNormal, location: levelOf(mean), scale: math.Sqrt(known + variance)}
}
