package server

import (
	"fmt"
	"math"
	"time"

	"google.golang.org/protobuf/types/known/durationpb"
	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
	"leadline.example/engine/decide"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// declarationOf reads a declaration. It checks what only the interface knows:
// which fields exclude each other and which belong together. Ranges are the
// engine's.
func declarationOf(q *leadlinev1.Quantity) (engine.Declaration, error) {
	d := engine.Declaration{Unit: q.GetUnit(), Description: q.GetDescription()}
	var err error
	if d.Prior, err = priorOf(q.GetPrior()); err != nil {
		return d, err
	}
	if d.Repeatability, err = repeatabilityOf(q.GetRepeatability()); err != nil {
		return d, err
	}
	if d.Dynamics, err = dynamicsOf(q.GetDynamics()); err != nil {
		return d, err
	}
	if d.Tolerance, err = toleranceOf(q.GetTolerance()); err != nil {
		return d, err
	}
	if d.Rule, err = ruleOf(q.GetDecisionRule()); err != nil {
		return d, err
	}
	if d.BreachHorizon, err = horizonOf("breach_horizon", q.GetBreachHorizon()); err != nil {
		return d, err
	}
	return d, setModel(&d, q)
}

// horizonOf reads how far to look ahead; 0, the engine's word for absent, can't
// be given.
func horizonOf(field string, d *durationpb.Duration) (time.Duration, error) {
	if d == nil {
		return 0, nil
	}
	horizon, err := durationOf(field, d)
	if err == nil && horizon == 0 {
		err = refuse(engine.InvalidField, field, field+" is 0s; give a duration above 0, such as \"86400s\", or leave it out")
	}
	return horizon, err
}

func priorOf(p *leadlinev1.Prior) (engine.Prior, error) {
	if p == nil {
		return engine.Prior{}, nil
	}
	moments := p.Mean != nil || p.StandardDeviation != nil
	interval := p.Low != nil || p.High != nil || p.Probability != nil
	prior := engine.Prior{
		Mean: p.GetMean(), StandardDeviation: p.GetStandardDeviation(),
		Low: p.GetLow(), High: p.GetHigh(), Probability: p.GetProbability(),
	}
	const forms = "mean and standard_deviation; low, high and probability; or vague"
	switch {
	case moments && interval, moments && p.Vague != nil, interval && p.Vague != nil:
		return prior, refuse(engine.InvalidField, "prior", "prior has several forms at once; give only one of: "+forms)
	case moments:
		prior.Form = engine.PriorNormal
		if err := together("prior", given{"mean", p.Mean}, given{"standard_deviation", p.StandardDeviation}); err != nil {
			return prior, err
		}
	case interval:
		prior.Form = engine.PriorInterval
		if err := together("prior", given{"low", p.Low}, given{"high", p.High}, given{"probability", p.Probability}); err != nil {
			return prior, err
		}
	case p.Vague == nil:
		return prior, refuse(engine.MissingField, "prior", "prior is empty; give one of: "+forms)
	}
	if p.Time == nil {
		return prior, nil
	}
	var err error
	prior.HasTime = true
	prior.Time, err = instantOf("prior.time", p.Time)
	return prior, err
}

// given is an optional number and its name.
type given struct {
	name  string
	value *float64
}

// together refuses a message in which one of the numbers is missing.
func together(message string, numbers ...given) error {
	for _, n := range numbers {
		if n.value == nil {
			field := message + "." + n.name
			return refuse(engine.MissingField, field, field+" is missing; give it too")
		}
	}
	return nil
}

func repeatabilityOf(r *leadlinev1.Repeatability) (engine.Repeatability, error) {
	switch {
	case r == nil:
		return engine.Repeatability{}, nil
	case r.StandardDeviation != nil && r.Learned != nil:
		return engine.Repeatability{}, refuse(engine.InvalidField, "repeatability", "repeatability has both standard_deviation and learned; give one of the two")
	case r.StandardDeviation != nil:
		return engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: r.GetStandardDeviation()}, nil
	case r.Learned == nil:
		return engine.Repeatability{}, refuse(engine.MissingField, "repeatability", "repeatability is empty; give standard_deviation or learned, or leave repeatability out if every reading brings its own")
	}
	return learnedOf(r.GetLearned())
}

func toleranceOf(t *leadlinev1.Tolerance) (engine.Tolerance, error) {
	if t == nil {
		return engine.Tolerance{}, nil
	}
	tolerance := engine.Tolerance{HasLower: t.Lower != nil, HasUpper: t.Upper != nil, Lower: t.GetLower(), Upper: t.GetUpper()}
	if !tolerance.Declared() {
		return tolerance, refuse(engine.MissingField, "tolerance", "tolerance is empty; give lower, upper or both, or leave tolerance out")
	}
	return tolerance, nil
}

// ruleOf reads a decision rule. The default, stated or not, becomes the zero
// Rule, so that stating it is no other declaration.
func ruleOf(r *leadlinev1.DecisionRule) (decide.Rule, error) {
	rule := decide.DefaultRule
	if r == nil {
		return decide.Rule{}, nil
	}
	if r.ConformProbability != nil {
		rule.ConformProbability = r.GetConformProbability()
	}
	if r.BreachProbability != nil {
		rule.BreachProbability = r.GetBreachProbability()
	}
	switch rule {
	case decide.DefaultRule:
		return decide.Rule{}, nil
	case decide.Rule{}: // which the engine would take for the default
		return rule, refuse(engine.InvalidField, "decision_rule.conform_probability", "decision_rule.conform_probability is 0; give a number above 0.5 and at most 1")
	}
	return rule, nil
}

// instantOf reads a time; outside 1678 to 2262 it gives an Instant that isn't
// Valid.
func instantOf(field string, t *timestamppb.Timestamp) (engine.Instant, error) {
	if !t.IsValid() {
		return 0, refuse(engine.InvalidField, field, field+" is not a time of the years 1 to 9999; give one")
	}
	i := engine.InstantOf(t.AsTime())
	if !i.Valid() {
		return 0, refuse(engine.InvalidField, field, field+" lies outside 1678 to 2262; give a time within")
	}
	return i, nil
}

func durationOf(field string, d *durationpb.Duration) (time.Duration, error) {
	long := d.GetSeconds() > math.MaxInt64/int64(time.Second)-1 || d.GetSeconds() < math.MinInt64/int64(time.Second)+1
	if !d.IsValid() || long {
		return 0, refuse(engine.InvalidField, field, fmt.Sprintf("%s is %ds, more than 292 years; give a shorter duration", field, d.GetSeconds()))
	}
	return d.AsDuration(), nil
}

// timestamp is nil for an instant that stands for one it cannot hold.
func timestamp(i engine.Instant) *timestamppb.Timestamp {
	if !i.Valid() {
		return nil
	}
	return timestamppb.New(i.Time())
}

// quantityMessage writes a quantity. Defaults are spelled out; what doesn't
// exist is left out.
func quantityMessage(q *engine.Quantity) *leadlinev1.Quantity {
	d := &q.Declaration
	rule := d.DecisionRule()
	m := &leadlinev1.Quantity{
		Id:            string(q.ID),
		Unit:          d.Unit,
		Description:   d.Description,
		Prior:         priorMessage(&d.Prior),
		Repeatability: repeatabilityMessage(d.Repeatability),
		Dynamics:      dynamicsMessage(d.Dynamics),
		Tolerance:     toleranceMessage(d.Tolerance),
		DecisionRule:  &leadlinev1.DecisionRule{ConformProbability: &rule.ConformProbability, BreachProbability: &rule.BreachProbability},
		Revision:      q.Revision,
		Etag:          q.ETag(),
		CreateTime:    timestamp(q.CreateTime),
		UpdateTime:    timestamp(q.UpdateTime),
	}
	setModelMessage(m, d)
	if d.BreachHorizon != 0 {
		m.BreachHorizon = durationpb.New(d.BreachHorizon)
	}
	if q.Retired {
		m.RetireTime = timestamp(q.RetireTime)
	}
	return m
}

func priorMessage(p *engine.Prior) *leadlinev1.Prior {
	m := &leadlinev1.Prior{}
	switch p.Form {
	case engine.PriorNormal:
		m.Mean, m.StandardDeviation = new(p.Mean), new(p.StandardDeviation)
	case engine.PriorInterval:
		m.Low, m.High, m.Probability = new(p.Low), new(p.High), new(p.Probability)
	default:
		m.Vague = &leadlinev1.Prior_Vague{}
	}
	if p.HasTime {
		m.Time = timestamp(p.Time)
	}
	return m
}

func repeatabilityMessage(r engine.Repeatability) *leadlinev1.Repeatability {
	switch {
	case r.Form == engine.RepeatabilityKnown:
		return &leadlinev1.Repeatability{StandardDeviation: &r.StandardDeviation}
	case r.Learned():
		return &leadlinev1.Repeatability{Learned: learnedMessage(r)}
	}
	return nil
}

func toleranceMessage(t engine.Tolerance) *leadlinev1.Tolerance {
	if !t.Declared() {
		return nil
	}
	m := &leadlinev1.Tolerance{}
	if t.HasLower {
		m.Lower = &t.Lower
	}
	if t.HasUpper {
		m.Upper = &t.Upper
	}
	return m
}
