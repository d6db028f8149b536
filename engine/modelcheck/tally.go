package modelcheck

// Tally is what is kept of the scores of a quantity's readings so far, in canonical order: the
// window that fills, the one that was looked at, totals, the CUSUM, and how the prior
// fared. The zero value is that before any reading. It is part of a fold's state, holds no
// pointer and is copied by assignment.
type Tally struct {
	last      Score
	now, full window // the one that fills, and the last one that was full
	previous  float64
	began     int64   // when now began, in Unix nanoseconds: at the last look
	level     float64 // that each test of full had

	scored                     int64
	square, within50, within95 float64 // sums over all scored readings

	up, down          cusum
	stepAt, stepSince int64

	outlying, steps, raised uint32
	priorScore              float32 // at the last look at the prior
	filled                  uint16  // readings in now
	direction               Step    // of the last step
	priorStage              priorStage
	objections              resultSet
	started, looked         bool
}

// window is the sums over the readings of a window.
type window struct {
	square, lag        float64 // of squares, and of products of neighbours
	within50, within95 float32 // shares of readings in the central intervals
}

// Add takes the score of a reading of a time in Unix nanoseconds. Readings come in canonical order,
// so times don't fall. It returns whether the CUSUM now detects a step, and allocates
// nothing. A score that isn't one (NaN) counts as none.
func (t *Tally) Add(l *Law, z Score, at int64) Step {
	if !(z.Lower <= z.Upper) {
		t.Pass(at)
		return NoStep
	}
	t.start(at)
	t.last = z
	if z.outlying() {
		t.outlying++
	}
	mean, square := z.Lower, z.Lower*z.Lower
	if z.Exact() {
		t.cover(central(mean, quartile), central(mean, shoulder))
	} else {
		mean, square = truncatedMoments(z.Lower, z.Upper)
		t.cover(z.within(quartile), z.within(shoulder))
	}
	t.scored++
	t.square += square
	t.now.square += square
	if t.filled > 0 {
		t.now.lag += mean * t.previous
	}
	t.previous = mean
	t.filled++
	if int(t.filled) >= l.settings.Window {
		t.look(l, at)
	}
	return t.cumulate(l, mean, at)
}

// cover counts a reading's shares in the central intervals.
func (t *Tally) cover(in50, in95 float64) {
	t.within50 += in50
	t.within95 += in95
	t.now.within50 += float32(in50)
	t.now.within95 += float32(in95)
}

// Pass takes a reading without a score: its predictive was improper, so nothing could
// be foretold.
func (t *Tally) Pass(at int64) { t.start(at) }

// Tail returns the two-sided tail probability of the last scored reading, see
// Score.Tail; false if there is none.
func (t *Tally) Tail() (p float64, ok bool) {
	if t.scored == 0 {
		return 0, false
	}
	return t.last.Tail(), true
}

// Filled returns how many scored readings the window that fills holds: those since the last
// look, from 0 to one less than Settings.Window. Before the first look they are all scored readings.
func (t *Tally) Filled() int { return int(t.filled) }

// Looked tells whether a window has been full, which the tests have looked at.
func (t *Tally) Looked() bool { return t.looked }

// LastStep returns the latest detected step.
func (t *Tally) LastStep() LastStep { return LastStep{t.stepAt, t.stepSince, t.direction} }

// start sets the clock going at the first reading.
func (t *Tally) start(at int64) {
	if !t.started {
		t.started, t.began = true, at
		t.up.since, t.down.since = at, at
	}
}

// look tests the window that has just become full, with what may be spent for the time since
// the look before, and begins the next.
func (t *Tally) look(l *Law, at int64) {
	t.full, t.now, t.filled = t.now, window{}, 0
	t.level = l.level(float64(at) - float64(t.began))
	t.began, t.looked = at, true

	found := t.objections.only(PriorConflict)
	w := &t.full
	if w.square > l.squareHigh && narrowProbability(l.settings.Window, w.square) < t.level {
		found.add(IntervalsTooNarrow)
	}
	if w.square < l.squareLow && wideProbability(l.settings.Window, w.square) < t.level {
		found.add(IntervalsTooWide)
	}
	if r := w.lag1(); (r > l.lagHigh || r < -l.lagHigh) && serialProbability(l.settings.Window, r) < t.level {
		found.add(Serial)
	}
	t.raised += uint32(found.count() - found.only(PriorConflict).count())
	t.objections = found
}

// lag1 is the serial correlation at lag 1 about 0, the mean that scores have.
func (w *window) lag1() float64 {
	if w.square == 0 {
		return 0
	}
	return w.lag / w.square
}
