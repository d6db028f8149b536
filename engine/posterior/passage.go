package posterior

import (
	"fmt"
	"math"
)

// Course is the joint normal belief of level and slope now, and how the level
// goes on. Times are in seconds; the level is in the quantity's unit.
type Course struct {
	Mean, SD       float64 // of the level; SD >= 0
	Slope, SlopeSD float64 // unit per second, SlopeSD >= 0; looked at under MotionTrend alone
	Correlation    float64 // of level and slope, in [-1, 1]
	Motion         Motion
}

// Limits bound the levels that haven't crossed: [Lower, Upper], either of which
// may be missing.
type Limits struct {
	HasLower, HasUpper bool
	Lower, Upper       float64
}

// Crossing holds the probabilities of having crossed a limit by some time.
// Below means that the lower limit was crossed first, Above the upper one, so
// Either is their sum.
type Crossing struct{ Below, Above, Either float64 }

// Passage is the law of the time at which a level first leaves its limits. It is
// immutable and may be shared.
//
// Where scales differ by tens of powers of ten (a slope that is a function of the level,
// and a walk or a distance from a limit as nothing beside it) a share of one side
// can be lost.
//
// Where the level's path is known in closed form given where it starts (every
// motion but a reverting one and a wandering slope), each By integrates it over
// the belief. The rest is computed once, into a table of times.
type Passage struct {
	course  Course
	limits  Limits
	horizon float64
	table   *passageTable // nil where By integrates
}

// NewPassage prepares the law of the first crossing of the limits l within
// horizon seconds, > 0. Mass of the belief outside the limits counts as crossed
// at once.
//
// Closed forms are good to 1e-9, the numerical ones (MotionReverting with
// spread, MotionTrend whose slope wanders) to 1e-3. It refuses numbers that
// aren't finite or not in their range, with a sentence.
func NewPassage(c Course, l Limits, horizon float64) (*Passage, error) {
	if err := c.check(); err != nil {
		return nil, err
	}
	if err := l.check(); err != nil {
		return nil, err
	}
	if !(horizon > 0) || math.IsInf(horizon, 1) {
		return nil, fmt.Errorf("horizon is %v; give a finite number of seconds above 0", horizon)
	}
	p := &Passage{course: c.plain(), limits: l, horizon: horizon}
	switch m := p.course.Motion; {
	case m.Form == MotionReverting && m.Variance > 0:
		p.table = p.revert()
	case m.Form == MotionTrend && m.Wander > 0:
		p.table = p.wander()
	}
	return p, nil
}

// By returns the probabilities of having crossed within the given seconds.
// They never fall with time; seconds below 0 count as 0. Beyond the horizon a
// numerical form stays as it is there. NaN seconds count as 0.
func (p *Passage) By(seconds float64) Crossing {
	if !(seconds > 0) {
		return p.now()
	}
	if p.table != nil {
		return p.table.at(seconds)
	}
	return p.closed(math.Min(seconds, math.MaxFloat64))
}

// Quantile returns the seconds within which a limit has been crossed with the
// given probability, in [0, 1], to 1e-9 of them; not ok if that isn't reached
// within the horizon or the probability is NaN.
func (p *Passage) Quantile(probability float64) (seconds float64, ok bool) {
	if probability <= p.now().Either {
		return 0, true
	}
	if !(p.By(p.horizon).Either >= probability) {
		return 0, false
	}
	lo, hi := p.horizon*0x1p-60, p.horizon
	for hi-lo > 1e-9*hi {
		// On the logarithmic scale first, as crossings may begin at once.
		middle := lo/2 + hi/2
		if lo < hi/4 {
			middle = math.Sqrt(lo) * math.Sqrt(hi)
		}
		if p.By(middle).Either >= probability {
			hi = middle
		} else {
			lo = middle
		}
	}
	return hi, true
}

// now is the mass of the belief outside the limits.
func (p *Passage) now() Crossing {
	c, l := p.course, p.limits
	var below, above float64
	if l.HasLower {
		below = outside(c.Mean, c.SD, l.Lower)
	}
	if l.HasUpper {
		above = outside(-c.Mean, c.SD, -l.Upper)
	}
	return crossing(below, above)
}

// outside returns P(X < limit), X ~ N(mean, sd^2); a certain level on its limit
// hasn't crossed.
func outside(mean, sd, limit float64) float64 {
	if sd == 0 {
		if mean < limit {
			return 1
		}
		return 0
	}
	d := twoDiff(mean, limit)
	return normalTail(pair{hi: d.value() / sd})
}

// crossing makes what rounding left probabilities.
func crossing(below, above float64) Crossing {
	below = probability(below)
	above = probability(above)
	if sum := below + above; sum > 1 {
		below /= sum
		above /= sum
	}
	return Crossing{Below: below, Above: above, Either: math.Min(1, below+above)}
}

func probability(p float64) float64 {
	if !(p > 0) {
		return 0
	}
	return math.Min(1, p)
}

// plain drops what the motion doesn't look at.
func (c Course) plain() Course {
	m := &c.Motion
	if m.Form != MotionTrend {
		c.Slope, c.SlopeSD, c.Correlation, m.Wander = 0, 0, 0, 0
	}
	if m.Form == MotionConstant || m.Form == MotionReverting {
		m.Walk = 0
	}
	if c.SD == 0 {
		c.Correlation = 0
	}
	if m.Form == MotionReverting && m.Rate == 0 {
		m.Form = MotionConstant
	}
	return c
}

func (c Course) check() error {
	m := c.Motion
	for _, v := range []struct {
		name  string
		value float64
		least float64
	}{
		{"mean", c.Mean, math.Inf(-1)},
		{"standard_deviation", c.SD, 0},
		{"slope.mean", c.Slope, math.Inf(-1)},
		{"slope.standard_deviation", c.SlopeSD, 0},
		{"motion.walk", m.Walk, 0},
		{"motion.wander", m.Wander, 0},
		{"motion.mean", m.Mean, math.Inf(-1)},
		{"motion.variance", m.Variance, 0},
		{"motion.rate", m.Rate, 0},
	} {
		if math.IsNaN(v.value) || math.IsInf(v.value, 0) {
			return fmt.Errorf("%s is %v; give a finite number", v.name, v.value)
		}
		if v.value < v.least {
			return fmt.Errorf("%s is %v; give a number of at least 0", v.name, v.value)
		}
	}
	if !(math.Abs(c.Correlation) <= 1) {
		return fmt.Errorf("correlation is %v; give a number from -1 to 1", c.Correlation)
	}
	return nil
}

func (l Limits) check() error {
	switch {
	case !l.HasLower && !l.HasUpper:
		return fmt.Errorf("neither limit is given; give lower, upper or both")
	case l.HasLower && (math.IsNaN(l.Lower) || math.IsInf(l.Lower, 0)):
		return fmt.Errorf("lower is %v; give a finite number", l.Lower)
	case l.HasUpper && (math.IsNaN(l.Upper) || math.IsInf(l.Upper, 0)):
		return fmt.Errorf("upper is %v; give a finite number", l.Upper)
	case l.HasLower && l.HasUpper && l.Lower >= l.Upper:
		return fmt.Errorf("lower is %v and upper %v; give a lower limit below the upper", l.Lower, l.Upper)
	}
	return nil
}
