package server

import (
	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// setModel reads what a declaration says of outliers and of the scale, and how it is
// held against the readings. What is given as 0 is refused, where the engine's 0 is
// absent.
func setModel(d *engine.Declaration, q *leadlinev1.Quantity) error {
	var err error
	if d.Outliers, err = outliersOf(q.GetOutliers()); err != nil {
		return err
	}
	if d.Scale, err = scaleOf(q.Scale); err != nil {
		return err
	}
	if d.ModelCheck, err = modelCheckOf(q.GetModelCheck()); err != nil {
		return err
	}
	d.StepDetection, err = stepDetectionOf(q.GetStepDetection())
	return err
}

func outliersOf(o *leadlinev1.Outliers) (engine.Outliers, error) {
	if o == nil {
		return engine.Outliers{}, nil
	}
	probability, inflation := given{"probability", o.Probability}, given{"inflation", o.Inflation}
	if err := together("outliers", probability, inflation); err != nil {
		return engine.Outliers{}, err
	}
	return engine.Outliers{Probability: o.GetProbability(), Inflation: o.GetInflation()}, noneZero("outliers.", probability, inflation)
}

func scaleOf(s *leadlinev1.Quantity_Scale) (engine.Scale, error) {
	switch {
	case s == nil, *s == leadlinev1.Quantity_LINEAR:
		return engine.ScaleLinear, nil
	case *s == leadlinev1.Quantity_LOG:
		return engine.ScaleLog, nil
	}
	return 0, refuse(engine.InvalidField, "scale", "scale is "+s.String()+"; give LINEAR or LOG, or leave it out for LINEAR")
}

func modelCheckOf(c *leadlinev1.ModelCheckSettings) (engine.ModelCheck, error) {
	if c == nil {
		return engine.ModelCheck{}, nil
	}
	d := engine.ModelCheck{Window: int(c.GetWindow()), ObjectionsPerYear: c.GetObjectionsPerYear()}
	if c.Window != nil && d.Window == 0 {
		return d, refuse(engine.InvalidField, "model_check.window", "model_check.window is 0; give a number of readings, or leave it out")
	}
	return d, notZero("model_check.objections_per_year", c.ObjectionsPerYear)
}

func stepDetectionOf(s *leadlinev1.StepDetection) (engine.StepDetection, error) {
	if s == nil {
		return engine.StepDetection{}, nil
	}
	d := engine.StepDetection{FalseAlarmInterval: s.GetFalseAlarmInterval(), Widen: s.GetOnStep().GetWiden()}
	if err := notZero("step_detection.false_alarm_interval", s.FalseAlarmInterval); err != nil {
		return d, err
	}
	if s.GetOnStep() == nil {
		return d, nil
	}
	widen := given{"widen", s.GetOnStep().Widen}
	if err := together("step_detection.on_step", widen); err != nil {
		return d, err
	}
	return d, noneZero("step_detection.on_step.", widen)
}

// learnedOf reads what was known of a repeatability that is learned.
func learnedOf(l *leadlinev1.Repeatability_Learned) (engine.Repeatability, error) {
	const message = "repeatability.learned"
	r := engine.Repeatability{Form: engine.RepeatabilityLearnedReference, Floor: l.GetFloor()}
	if err := notZero(message+".floor", l.Floor); err != nil {
		return r, err
	}
	if l.Guess == nil && l.Worth == nil {
		return r, nil
	}
	r.Form, r.Guess, r.Worth = engine.RepeatabilityLearned, l.GetGuess(), l.GetWorth()
	return r, together(message, given{"guess", l.Guess}, given{"worth", l.Worth})
}

// setModelMessage writes what setModel reads.
func setModelMessage(q *leadlinev1.Quantity, d *engine.Declaration) {
	q.Scale = scaleMessage(d.Scale).Enum()
	if o := d.Outliers; o != (engine.Outliers{}) {
		q.Outliers = &leadlinev1.Outliers{Probability: &o.Probability, Inflation: &o.Inflation}
	}
	if c := d.ModelCheck; c != (engine.ModelCheck{}) {
		q.ModelCheck = &leadlinev1.ModelCheckSettings{ObjectionsPerYear: unlessZero(c.ObjectionsPerYear)}
		if c.Window != 0 {
			q.ModelCheck.Window = new(uint32(c.Window))
		}
	}
	if s := d.StepDetection; s != (engine.StepDetection{}) {
		q.StepDetection = &leadlinev1.StepDetection{FalseAlarmInterval: unlessZero(s.FalseAlarmInterval)}
		if s.Widen != 0 {
			q.StepDetection.OnStep = &leadlinev1.StepDetection_OnStep{Widen: &s.Widen}
		}
	}
}

func scaleMessage(s engine.Scale) leadlinev1.Quantity_Scale {
	if s == engine.ScaleLog {
		return leadlinev1.Quantity_LOG
	}
	return leadlinev1.Quantity_LINEAR
}

// learnedMessage is nil for what isn't learned.
func learnedMessage(r engine.Repeatability) *leadlinev1.Repeatability_Learned {
	switch r.Form {
	case engine.RepeatabilityLearned:
		return &leadlinev1.Repeatability_Learned{Guess: &r.Guess, Worth: &r.Worth, Floor: unlessZero(r.Floor)}
	case engine.RepeatabilityLearnedReference:
		return &leadlinev1.Repeatability_Learned{Floor: unlessZero(r.Floor)}
	}
	return nil
}
