package modelcheck

// Step is a shift of the readings against their predictions, or none.
type Step uint8

const (
	NoStep   Step = iota
	StepUp        // readings now lie above what was predicted
	StepDown      // and below
)

// String returns the word of the interface.
func (s Step) String() string {
	switch s {
	case StepUp:
		return "UP"
	case StepDown:
		return "DOWN"
	}
	return "NONE"
}

const (
	// reference is k of the CUSUM: half the shift, in normal scores, that it finds
	// soonest (Page 1954, Biometrika 41, 100-115, from memory).
	reference = 0.5
	// clip bounds the score that enters the CUSUM, so that with a threshold above 7.5
	// no single reading is a step, however far it lies off: it takes a second one.
	// P(|Z| > 8) = 1.2e-15, so run lengths don't notice.
	clip = 8
)

// cusum is one side of the two-sided CUSUM: the sum max(0, sum + z - k), and the time
// of the reading after which it was last 0.
type cusum struct {
	sum   float64
	since int64
}

func (c *cusum) add(z float64, at int64) {
	c.sum = max(0, c.sum+z-reference)
	if c.sum == 0 {
		c.since = at
	}
}

// cumulate adds the score of a reading to both sums. When one exceeds the threshold,
// both begin anew.
func (t *Tally) cumulate(l *Law, z float64, at int64) Step {
	z = max(-clip, min(clip, z))
	t.up.add(z, at)
	t.down.add(-z, at)
	switch {
	case t.up.sum > l.threshold:
		t.detect(StepUp, t.up.since, at)
		return StepUp
	case t.down.sum > l.threshold:
		t.detect(StepDown, t.down.since, at)
		return StepDown
	}
	return NoStep
}

func (t *Tally) detect(s Step, since, at int64) {
	t.steps++
	t.direction, t.stepAt, t.stepSince = s, at, since
	t.up, t.down = cusum{since: at}, cusum{since: at}
}
