package engine

import (
	"cmp"
	"math"
	"slices"
	"time"

	"leadline.example/engine/posterior"
)

// A joint is the belief about a quantity together with what its readings share:
// the errors of calibrations, references and instruments. Each of those is a
// state of the filter, added when a reading first meets it, in canonical order.
//
// Once readings have moved on to an instrument's next calibration, or to its
// next occasion, no later reading in canonical order can meet the one before:
// its state is given to the new one, so the states stay few however long a
// quantity lives, and nothing is lost by it.
//
// A joint belongs to the fold it is in; others take a clone.
type joint struct {
	filter  posterior.Filter
	at      Instant          // where the filter stands
	renewed int              // of the model's renewals, those taken in
	routes  []route          // one for each instrument met
	states  []source         // what each state is, by its index in the filter
	terms   []posterior.Term // of the reading at hand; its space is used again
}

// route is how an instrument's errors enter its readings. An index of 0, which is
// the level's, stands for none.
type route struct {
	instrument  InstrumentNumber
	calibration int // index; -1 for none
	until       Instant
	own         int
	reference   int
	gain        int
	scale       float64 // of the gain: the level it is relative to; 0 before it is met
	restated    float64 // the level for which what was known of the gain's error was stated
	drift       float64 // variance that the bias is to gain in a second ...
	drifts      Instant // ... from then on; 0 once it does
	correlated  int
	shared      int    // the occasion's error
	occasion    uint64 // whose it is
}

// source says what a state of the filter is.
type source struct {
	kind       BudgetSource
	instrument InstrumentNumber
	reference  string
}

const (
	// MaxQuantityInstruments bounds the instruments of one quantity, so that each
	// finds room for its states.
	MaxQuantityInstruments = 12
	maxReferences          = posterior.MaxStates - 2 - 4*MaxQuantityInstruments
)

// newJoint starts from the model's prior at an instant.
func newJoint(m *model, at Instant) *joint {
	j := &joint{filter: posterior.NewFilter(m.motion, m.prior, m.slope), at: at}
	j.states = make([]source, j.filter.States())
	return j
}

// startJoint starts where the prior holds: at its own time, else at the first
// reading's, or at a renewal before that. Of a level that stays it holds at any time.
func startJoint(m *model, first Instant) *joint {
	switch d := m.declaration(); {
	case d.Prior.HasTime && !m.still():
		first = d.Prior.Time
	case len(m.renewals) > 0:
		first = min(first, m.renewals[0].Time)
	}
	return newJoint(m, first)
}

func (j *joint) clone() *joint {
	c := *j
	c.filter = j.filter.Clone()
	c.routes, c.states = slices.Clone(j.routes), slices.Clip(j.states)
	c.terms = nil
	return &c
}

// move goes on to an instant, through the renewals up to then. What lies before
// is reached already.
func (j *joint) move(m *model, to Instant) {
	for j.renewsBy(m, to) {
		r := &m.renewals[j.renewed]
		j.advance(r.Time)
		j.filter.Renew(m.renewalPrior(r))
		j.renewed++
		for i := range j.routes {
			j.routes[i].scale, j.routes[i].restated = 0, 0 // the level that a gain is relative to is another
		}
	}
	j.advance(to)
}

// renewsBy tells whether there is a renewal to go through up to an instant.
func (j *joint) renewsBy(m *model, to Instant) bool {
	return j.renewed < len(m.renewals) && m.renewals[j.renewed].Time <= to
}

// advance goes on to an instant, through the beginnings of drifts up to then.
func (j *joint) advance(to Instant) {
	for r := j.nextDrift(to); r != nil; r = j.nextDrift(to) {
		j.step(r.drifts)
		j.filter.Diffuse(r.own, r.drift)
		r.drift = 0
	}
	j.step(to)
}

// nextDrift returns the route whose drift begins first, up to an instant; nil for none.
func (j *joint) nextDrift(to Instant) (next *route) {
	for i := range j.routes {
		if r := &j.routes[i]; r.drift > 0 && r.drifts <= to && (next == nil || r.drifts < next.drifts) {
			next = r
		}
	}
	return next
}

func (j *joint) step(to Instant) {
	if to > j.at {
		j.filter.Advance(lasting(j.at, to))
		j.at = to
	}
}

// add takes in a reading of the value y that is not before any other. It returns how
// far y was off what the readings before foretold, and the variance of that; none
// while nothing is known of the level.
func (j *joint) add(m *model, e *Row, y float64) posterior.Surprise {
	j.move(m, e.Time)
	if e.Instrument == 0 {
		s := e.white(m.declaration().Repeatability.StandardDeviation)
		return j.filter.Update(y, 0, 1, nil, s*s)
	}
	d := &m.instrument(e.Instrument).Declaration
	i := indication{d: d, terms: j.terms[:0]}
	i.white(m, e)
	r := j.route(d, e)
	offset := i.shared(r)
	j.terms = i.terms
	level, variance := y-offset, 0.0
	if !j.filter.Vague() {
		level, variance = j.filter.Mean(0), j.filter.Variance(0)
	}
	i.noise.Label = int(e.Instrument)
	first := r.gain > 0 && r.scale == 0
	if !first && r.gain > 0 && m.motion.Form == posterior.MotionConstant {
		j.restate(d, r, math.Sqrt(level*level+variance))
		level, variance = j.filter.Mean(0), j.filter.Variance(0)
	}
	i.about(m, r, level, variance)
	if first && !j.filter.Vague() {
		j.refine(y, r, &i, offset)
		i.noise.Gain, i.noise.Scale = math.Sqrt(j.filter.Variance(r.gain)), r.scale
	}
	if first {
		r.restated = math.Abs(r.scale)
	}
	return j.filter.UpdateFrom(y, offset, 1, i.terms, i.noise)
}

// route returns how the errors of a reading's instrument enter it, after adding
// the states that it is the first to meet.
func (j *joint) route(d *InstrumentDeclaration, e *Row) *route {
	n := slices.IndexFunc(j.routes, func(r route) bool { return r.instrument == e.Instrument })
	if n < 0 {
		n = len(j.routes)
		r := route{instrument: e.Instrument, calibration: -1, until: math.MinInt64}
		if c := d.Repeatability.Correlated; c.StandardDeviation > 0 {
			r.correlated = j.enter(source{kind: CorrelatedNoise, instrument: e.Instrument}, posterior.Process{
				Variance: c.StandardDeviation * c.StandardDeviation, Rate: 1 / c.Time.Seconds(),
			})
		}
		j.routes = append(j.routes, r)
	}
	r := &j.routes[n]
	if e.Time >= r.until {
		j.calibrate(r, d, e.Time)
	}
	if s := d.Repeatability.BetweenOccasions; s > 0 && (r.shared == 0 || e.Occasion == 0 || e.Occasion != r.occasion) {
		r.occasion = e.Occasion
		j.renew(&r.shared, source{kind: Occasion, instrument: e.Instrument}, posterior.Process{Variance: s * s})
	}
	return r
}

// calibrate goes on to the calibration that a reading at an instant rests on.
func (j *joint) calibrate(r *route, d *InstrumentDeclaration, at Instant) {
	n := d.at(at)
	r.until = math.MaxInt64
	if n+1 < len(d.Calibrations) {
		r.until = d.Calibrations[n+1].ValidFrom
	}
	if n < 0 {
		return
	}
	r.calibration = n
	c := &d.Calibrations[n]
	own := c.ownVariance()
	r.reference = 0
	if c.Reference != "" {
		if r.reference = j.reference(c.Reference); r.reference == 0 {
			own += c.CommonStandardUncertainty * c.CommonStandardUncertainty
		}
	}
	if own > 0 || c.drift() > 0 || r.own > 0 {
		p := posterior.Process{Variance: own, Diffusion: c.drift()}
		if r.drift, r.drifts = 0, c.ValidFrom; at < c.ValidFrom { // it drifts from then on
			r.drift, p.Diffusion = c.drift(), 0
		}
		j.renew(&r.own, source{kind: Bias, instrument: r.instrument}, p)
		j.filter.Widen(r.own, c.drift()*lasting(c.ValidFrom, at))
	}
	if u := c.RelativeBiasStandardUncertainty; u > 0 || r.gain > 0 {
		r.scale = 0
		j.renew(&r.gain, source{kind: Gain, instrument: r.instrument}, posterior.Process{Variance: u * u})
	}
}

// renew gives a state to what is met from now on, adding it if there is none.
func (j *joint) renew(state *int, s source, p posterior.Process) {
	if *state == 0 {
		*state = j.enter(s, p)
		return
	}
	j.filter.Redraw(*state, p)
}

// enter adds a state.
func (j *joint) enter(s source, p posterior.Process) int {
	j.states = append(j.states, s)
	return j.filter.Add(p)
}

// reference returns the state of the part that all calibrations against a
// reference share, in units of its standard deviation; 0 if there is no room for
// one more: it then counts as the calibration's own.
func (j *joint) reference(name string) int {
	met := 0
	for i := range j.states {
		if j.states[i].kind == CommonReference {
			if met++; j.states[i].reference == name {
				return i
			}
		}
	}
	if met == maxReferences {
		return 0
	}
	return j.enter(source{kind: CommonReference, reference: name}, posterior.Process{Variance: 1})
}

// level returns the distribution of the level where the joint stands.
func (j *joint) level() posterior.Posterior { return j.filter.Posterior() }

// predictive returns the distribution of an indication of an instrument, nil for
// none, where the joint stands, on an occasion of its own. It changes j.
func (j *joint) predictive(m *model, i *Instrument) posterior.Posterior {
	e := Row{Time: j.at}
	r := m.declaration().Repeatability
	if j.filter.Vague() {
		return posterior.Posterior{}
	}
	if i == nil {
		if r.Form != RepeatabilityKnown {
			return posterior.Posterior{}
		}
		return j.filter.Predictive(0, 1, nil, r.StandardDeviation*r.StandardDeviation)
	}
	d := &i.Declaration
	if d.Repeatability.StandardDeviation == 0 && r.Form != RepeatabilityKnown {
		return posterior.Posterior{}
	}
	e.Instrument = i.Number
	y := indication{d: d}
	y.white(m, &e)
	route := j.route(d, &e)
	offset := y.shared(route)
	y.about(m, route, j.filter.Mean(0), j.filter.Variance(0))
	return j.filter.Predictive(offset, 1, y.terms, y.noise.Variance)
}

// bias returns what is believed of the bias of a route's calibration, declared and learned.
func (j *joint) bias(m *model, r *route) BiasBelief {
	d := &m.instrument(r.instrument).Declaration
	c := &d.Calibrations[r.calibration]
	var terms []posterior.Term
	if r.own > 0 {
		terms = append(terms, posterior.Term{State: r.own, Coefficient: 1})
	}
	if r.reference > 0 {
		terms = append(terms, posterior.Term{State: r.reference, Coefficient: c.CommonStandardUncertainty})
	}
	mean, variance := j.filter.Combination(terms)
	return BiasBelief{
		Instrument: m.instrument(r.instrument).ID, ValidFrom: c.ValidFrom, Reference: c.Reference,
		Mean: c.Bias + mean, StandardDeviation: math.Sqrt(variance),
	}
}

// slope returns what is believed of a trend's slope, by the time that was declared.
func (j *joint) slope(m *model) (ok bool, mean, sd float64, per time.Duration) {
	y := &m.declaration().Dynamics
	if y.Form != DynamicsLinearTrend {
		return false, 0, 0, 0
	}
	per = y.Slope.Per
	return true, j.filter.Mean(1) * per.Seconds(), math.Sqrt(j.filter.Variance(1)) * per.Seconds(), per
}

// biases returns what is believed of the calibrations in force where the joint stands,
// by instrument. It changes j.
func (j *joint) biases(m *model) []BiasBelief {
	var all []BiasBelief
	for i := range j.routes {
		if r := &j.routes[i]; j.at >= r.until {
			j.calibrate(r, &m.instrument(r.instrument).Declaration, j.at)
		}
		if j.routes[i].calibration >= 0 {
			all = append(all, j.bias(m, &j.routes[i]))
		}
	}
	slices.SortFunc(all, func(a, b BiasBelief) int { return cmp.Compare(a.Instrument, b.Instrument) })
	return all
}

// commons returns what is believed of the references met, by name.
func (j *joint) commons() []ReferenceBelief {
	var all []ReferenceBelief
	for i, s := range j.states {
		if s.kind == CommonReference {
			all = append(all, ReferenceBelief{s.reference, j.filter.Mean(i), math.Sqrt(j.filter.Variance(i))})
		}
	}
	slices.SortFunc(all, func(a, b ReferenceBelief) int { return cmp.Compare(a.Reference, b.Reference) })
	return all
}
