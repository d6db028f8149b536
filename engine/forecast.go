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
	if j := v.fold.jointAt(v.basis, f.Time); j != nil {
		f.HasSlope, f.SlopeMean, f.SlopeStandardDeviation, f.SlopePer = j.slope(v.basis)
	}
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

// crossing is when a limit is crossed: by a moving level, or, if passage is nil,
// now or never.
type crossing struct {
	passage *posterior.Passage
	now     posterior.Crossing
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
	p, err := posterior.NewPassage(v.course(level, at), posterior.Limits(tolerance), horizon.Seconds())
	if err != nil {
		return nil, err
	}
	return &crossing{passage: p}, nil
}

// course returns how the level goes on from an instant. It is normal, as every
// moving level is.
func (v *View) course(level posterior.Posterior, at Instant) posterior.Course {
	c := posterior.Course{Mean: level.Location(), SD: level.Scale(), Motion: v.basis.motion}
	if c.Motion.Form != posterior.MotionTrend {
		return c
	}
	j := v.fold.jointAt(v.basis, at)
	c.Slope, c.SlopeSD = j.filter.Mean(1), math.Sqrt(j.filter.Variance(1))
	if c.SD > 0 && c.SlopeSD > 0 {
		c.Correlation = max(-1, min(1, j.filter.Covariance(0, 1)/(c.SD*c.SlopeSD)))
	}
	return c
}

// by returns what has been crossed after a time; nothing is known of a nil crossing.
func (c *crossing) by(after time.Duration) posterior.Crossing {
	if c == nil {
		return posterior.Crossing{}
	}
	if c.passage == nil {
		return c.now
	}
	return c.passage.By(after.Seconds())
}

// quantile returns when the probability of a crossing reaches p; -1 if it
// doesn't within the horizon.
func (c *crossing) quantile(p float64) time.Duration {
	if c.passage == nil {
		if c.now.Either >= p {
			return 0
		}
		return -1
	}
	seconds, ok := c.passage.Quantile(p)
	if !ok {
		return -1
	}
	return time.Duration(seconds * float64(time.Second))
}
