package engine

import (
	"context"
	"math"
	"time"

	"leadline.example/engine/posterior"
)

// ForecastQuery says what is asked of the future.
type ForecastQuery struct {
	Now      Instant
	Horizon  time.Duration // 0: the declared breach horizon
	Steps    int           // 0: 10
	Coverage float64       // in (0, 1); 0 means DefaultCoverage
}

const (
	defaultSteps = 10
	maxSteps     = 1_000
)

// check returns an *Error for the first thing wrong with q under d.
func (q *ForecastQuery) check(d *Declaration) error {
	belief := BeliefQuery{Coverage: q.Coverage}
	switch {
	case q.Horizon == 0 && d.BreachHorizon == 0:
		return refuse(MissingField, "horizon", "horizon is missing and the quantity declares no breach_horizon; give one, such as \"86400s\"")
	case q.Horizon < 0:
		return refuse(InvalidField, "horizon", "horizon is %v; give a duration above 0, such as \"86400s\"", q.Horizon)
	case q.Steps < 0 || q.Steps > maxSteps:
		return refuse(InvalidField, "steps", "steps is %d; give a number from 1 to %d", q.Steps, maxSteps)
	}
	return belief.Check()
}

// ForecastStep is the belief at a future time, without further readings.
type ForecastStep struct {
	Time         Instant
	Level        posterior.Posterior // FormNone where nothing is known
	Lower, Upper float64             // the coverage interval, unless Level is FormNone
	HasBreach    bool
	Breach       Breach             // at that time
	HasCrossed   bool               // something is known from the beginning
	Crossed      posterior.Crossing // by that time, mass already outside included
}

// Forecast is what a belief says of the time to come.
type Forecast struct {
	Quantity Quantity
	Time     Instant // from which it looks ahead
	Horizon  time.Duration
	Coverage float64
	Steps    []ForecastStep

	HasSlope                          bool // of a linear trend, as believed at Time, by SlopePer
	SlopeMean, SlopeStandardDeviation float64
	SlopePer                          time.Duration

	HasCrossing                      bool          // there is a tolerance, and something is known
	Probability                      float64       // that a limit is crossed within the horizon
	LowerDecile, Median, UpperDecile time.Duration // of the time to breach; -1 where not reached within the horizon

	Position     Position
	Rebuilding   bool
	Undetermined []string
}

// Forecast moves a belief on through the steps of a horizon and says when a
// limit of the tolerance is crossed.
func (k *Keeper) Forecast(ctx context.Context, id QuantityID, q ForecastQuery) (Forecast, error) {
	t, ok := k.find(id)
	if !ok {
		return Forecast{}, notDeclared("quantity", id)
	}
	v := t.View()
	d := &v.Declared().Declaration
	if err := q.check(d); err != nil {
		return Forecast{}, err
	}
	f := Forecast{Quantity: *v.Declared(), Time: q.Now, Horizon: q.Horizon, Coverage: q.Coverage, Position: v.Position, Rebuilding: v.Rebuilding}
	f.Time = v.latest(f.Time)
	if v.Rebuilding {
		f.Position = v.foldedTo
	}
	if f.Horizon == 0 {
		f.Horizon = d.BreachHorizon
	}
	if f.Coverage == 0 {
		f.Coverage = DefaultCoverage
	}
	if q.Steps == 0 {
		q.Steps = defaultSteps
	}
	if f.Time.Sub(MaxInstant) > -float64(f.Horizon) {
		return Forecast{}, refuse(InvalidField, "horizon", "horizon %v ends after 2262; give a shorter one", f.Horizon)
	}
	if v.basis.motion.Form == posterior.MotionReverting || v.basis.motion.Wander > 0 { // which take a core for long: one at a time
		select {
		case k.foretelling <- struct{}{}:
			defer func() { <-k.foretelling }()
		case <-ctx.Done():
			return Forecast{}, ctx.Err()
		}
	}
	return f, f.look(v, d, q.Steps)
}

// latest returns the instant from which v looks ahead: the one given, or the last
// reading or renewal if that is later, as of a clock that is ahead.
func (v *View) latest(at Instant) Instant {
	if v.HasLast {
		at = max(at, v.LastTime)
	}
	if n := len(v.basis.renewals); n > 0 {
		at = max(at, v.basis.renewals[n-1].Time)
	}
	return at
}

// look fills in the steps and the crossing.
func (f *Forecast) look(v *View, d *Declaration, steps int) error {
	crossing, err := v.crossing(f.Time, f.Horizon)
	if err != nil {
		return err
	}
	basis := v.basis.from(f.Time, v.HasLast)
	for i := 1; i <= steps; i++ {
		after := time.Duration(float64(f.Horizon) * float64(i) / float64(steps))
		step := ForecastStep{Time: f.Time + Instant(after)}
		step.Level = v.fold.level(basis, step.Time)
		if step.Level.Form() != posterior.FormNone {
			step.Lower, step.Upper = step.Level.Interval(f.Coverage)
			if step.HasBreach = d.Tolerance.Declared(); step.HasBreach {
				step.Breach = breachOf(step.Level, d.Tolerance)
				step.Crossed, step.HasCrossed = crossing.by(after), crossing != nil
			}
		}
		f.Steps = append(f.Steps, step)
	}
	if v.fold.level(v.basis, f.Time).Form() == posterior.FormNone {
		f.Undetermined = append(f.Undetermined, "steps")
	}
	b := Belief{}
	b.evaluateShared(v.basis, &v.fold, f.Time)
	f.HasSlope, f.SlopeMean, f.SlopeStandardDeviation, f.SlopePer = b.HasSlope, b.SlopeMean, b.SlopeStandardDeviation, b.SlopePer
	if f.HasCrossing = crossing != nil; !f.HasCrossing {
		if d.Tolerance.Declared() {
			f.Undetermined = append(f.Undetermined, "time_to_breach")
		}
		return nil
	}
	f.Probability = crossing.by(f.Horizon).Either
	f.LowerDecile, f.Median, f.UpperDecile = crossing.quantile(0.1), crossing.quantile(0.5), crossing.quantile(0.9)
	return nil
}

// crossing is when a limit is crossed: by a moving level, whose belief may be a mixture of
// normal ones, or, without passages, now or never.
type crossing struct {
	passages []*posterior.Passage
	weights  []float64 // sum to 1
	now      posterior.Crossing
	horizon  time.Duration
}

// crossing returns when the tolerance in force is breached from an instant on;
// nil without a tolerance or where nothing is known.
func (v *View) crossing(at Instant, horizon time.Duration) (*crossing, error) {
	tolerance := v.Declared().Declaration.Tolerance
	level := v.fold.level(v.basis, at)
	if !tolerance.Declared() || level.Form() == posterior.FormNone {
		return nil, nil
	}
	if v.basis.motion.Form == posterior.MotionConstant {
		b := breachOf(level, tolerance)
		return &crossing{now: posterior.Crossing{Below: b.Below, Above: b.Above, Either: b.Either}}, nil
	}
	limits := posterior.Limits(tolerance)
	if s := v.basis.declaration().Scale; s == ScaleLog {
		limits.Lower, limits.Upper = s.of(limits.Lower), s.of(limits.Upper)
	}
	c := &crossing{horizon: horizon}
	for _, w := range v.courses(at) {
		p, err := posterior.NewPassage(w.course, limits, horizon.Seconds())
		if err != nil {
			return nil, err
		}
		c.passages, c.weights = append(c.passages, p), append(c.weights, w.weight)
	}
	return c, nil
}

// weightedCourse is a normal part of how the level goes on.
type weightedCourse struct {
	course posterior.Course
	weight float64
}

// courses returns how the level, of which something is known, goes on from an instant:
// normal parts, whose weights sum to 1.
func (v *View) courses(at Instant) []weightedCourse {
	m := v.basis
	switch {
	case v.fold.count == 0: // whatever the form, what is known is the prior
	case m.form == bankForm:
		return v.fold.bank.courses(m, at)
	case m.form == gridForm:
		return slicesOf(v.fold.state(m, at), m.motion)
	case m.form == walkForm:
		p := v.fold.state(m, at)
		return []weightedCourse{{posterior.Course{Mean: p.Location(), SD: p.Scale(), Motion: m.motion}, 1}}
	}
	return []weightedCourse{{v.fold.jointAt(m, at).course(m), 1}}
}

// course returns how the level goes on from where the joint stands.
func (j *joint) course(m *model) posterior.Course {
	p := j.level()
	c := posterior.Course{Mean: p.Location(), SD: p.Scale(), Motion: m.motion}
	if c.Motion.Form != posterior.MotionTrend {
		return c
	}
	c.Slope, c.SlopeSD = j.filter.Mean(1), math.Sqrt(j.filter.Variance(1))
	if c.SD > 0 && c.SlopeSD > 0 {
		c.Correlation = max(-1, min(1, j.filter.Covariance(0, 1)/(c.SD*c.SlopeSD)))
	}
	return c
}

const (
	// maxCourses bounds the nodes of a learned repeatability from which a level goes on:
	// each takes as long as a quantity of known repeatability.
	maxCourses = 9
	// sliceWidth is that of the normal parts by which a belief on points is replaced, and
	// sliceReach how far they go, in normal scores.
	sliceWidth, sliceReach = 0.5, 7.0
)

// courses takes every so many nodes, so that there aren't too many: the trapezoid rule
// again, with a wider step.
func (b *bank) courses(m *model, at Instant) []weightedCourse {
	weights := b.weights()
	first, last := 0, len(weights)-1
	const negligible = 1e-6
	for first < last && weights[first] < negligible {
		first++
	}
	for last > first && weights[last] < negligible {
		last--
	}
	every := (last-first)/maxCourses + 1
	var all []weightedCourse
	sum := 0.0
	s := m.scale()
	for i := first + (last-first)%every/2; i <= last; i += every {
		n := &b.nodes[i]
		given := m.given(s.r(n.v))
		j := n.held.(*lone).joint.clone()
		j.move(given, at)
		all = append(all, weightedCourse{j.course(given), weights[i]})
		sum += weights[i]
	}
	for i := range all {
		all[i].weight /= sum
	}
	return all
}

// slicesOf replaces a belief on points by normal parts: one about the quantile of every
// half normal score, of the width that slices of a normal have, so that a normal belief is
// given back (derived for this package).
func slicesOf(p posterior.Posterior, motion posterior.Motion) []weightedCourse {
	standard := posterior.Normal(posterior.Level{}, 1)
	quantile := func(z float64) float64 {
		if z <= 0 {
			return p.Quantile(standard.LowerTail(z))
		}
		_, upper := p.Interval(1 - 2*standard.UpperTail(z))
		return upper
	}
	// exp(-z^2/2) is the convolution of slices of variance w^2 with weights of variance 1 - w^2.
	narrow := math.Sqrt(1 - sliceWidth*sliceWidth)
	var all []weightedCourse
	sum := 0.0
	for z := -sliceReach; z <= sliceReach; z += sliceWidth / 2 {
		weight := math.Exp(-z * z / (2 * narrow * narrow))
		sd := quantile(z+sliceWidth/2) - quantile(z-sliceWidth/2)
		all = append(all, weightedCourse{posterior.Course{Mean: quantile(z), SD: sd, Motion: motion}, weight})
		sum += weight
	}
	for i := range all {
		all[i].weight /= sum
	}
	return all
}

// by returns what has been crossed after a time; nothing is known of a nil crossing.
func (c *crossing) by(after time.Duration) posterior.Crossing {
	if c == nil {
		return posterior.Crossing{}
	}
	if c.passages == nil {
		return c.now
	}
	var sum posterior.Crossing
	for i, p := range c.passages {
		x := p.By(after.Seconds())
		sum.Below += c.weights[i] * x.Below
		sum.Above += c.weights[i] * x.Above
		sum.Either += c.weights[i] * x.Either
	}
	return sum
}

// quantile returns when the probability of a crossing reaches p; -1 if it
// doesn't within the horizon.
func (c *crossing) quantile(p float64) time.Duration {
	switch {
	case c.passages == nil:
		if c.now.Either >= p {
			return 0
		}
		return -1
	case len(c.passages) == 1:
		seconds, ok := c.passages[0].Quantile(p)
		if !ok {
			return -1
		}
		return time.Duration(seconds * float64(time.Second))
	case c.by(c.horizon).Either < p:
		return -1
	}
	early, late := time.Duration(-1), c.horizon
	for late-early > max(1, c.horizon>>30) {
		if middle := early + (late-early)/2; c.by(middle).Either >= p {
			late = middle
		} else {
			early = middle
		}
	}
	return late
}
