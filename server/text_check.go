package server

import (
	"fmt"
	"math"
	"strings"

	"leadline.example/engine"
	"leadline.example/engine/modelcheck"
)

// lastReading writes how the last reading agreed with the belief, where it stands out
// or outliers are declared.
func (p *sheet) lastReading(b *engine.Belief) {
	if tail := b.Tail; b.HasTail && tail < modelcheck.OutlyingProbability {
		p.line("last reading", "outlying: one so far out had probability %s", probabilityText(tail))
	}
	if b.HasOutlier {
		p.line("last reading", "is an outlier with probability %s", probabilityText(b.Outlier))
	}
}

// modelCheck writes how the readings agree with the declaration.
func (p *sheet) modelCheck(r *modelcheck.Report) {
	if r.Result == 0 {
		return
	}
	p.line("model check", "%s", checkText(r))
	if s := r.LastStep; s.Direction != modelcheck.NoStep {
		p.line("steps", "%d, the last %s at %s, since %s", r.Steps, s.Direction, engine.Instant(s.At), engine.Instant(s.Since))
	}
}

func checkText(r *modelcheck.Report) string {
	words := []string{r.Result.String()}
	for _, o := range r.Objections {
		if o != r.Result {
			words = append(words, o.String())
		}
	}
	t := &r.Total
	if t.Readings == 0 {
		return strings.Join(words, ", ") + "; no scored readings"
	}
	return fmt.Sprintf("%s; scored readings: %d, %s of them within the central 50 %%, %s within 95 %%",
		strings.Join(words, ", "), t.Readings, percent(t.Within50), percent(t.Within95))
}

// modelCheckText renders all that is told of a model.
func modelCheckText(r *engine.ModelCheckReport) string {
	p := new(sheet)
	fmt.Fprintf(p, "%s at %s\n", r.Belief.Quantity.ID, r.Belief.Time)
	c := &r.Report
	p.modelCheck(c)
	if c.Total.Readings > 0 {
		p.line("scores", "mean square %s, 1 expected; %d outlying", rounded(c.Total.MeanSquare), c.Outlying)
	}
	p.line("looked at", "%d scored readings at a time", r.Law.Settings().Window)
	if finite(c.Lag1) && len(c.Tests) > 0 {
		p.line("lag 1", "correlation %s of scores with those before them, 0 expected", rounded(c.Lag1))
	}
	p.line("cusum", "up %s, down %s; a step from %s", rounded(c.CUSUMUp), rounded(c.CUSUMDown), rounded(r.Law.Threshold()))
	if r.HasExplanation {
		p.explanation(&r.Explanation, spreadUnit(&r.Belief.Quantity.Declaration))
	}
	p.basis(r.Belief.Quantity.Revision, r.Belief.Position, r.Belief.Rebuilding)
	p.tests(c.Tests)
	p.WriteString(caution)
	return p.String()
}

// explanation writes three explanations of the last window's readings.
func (p *sheet) explanation(e *modelcheck.Explanation, unit string) {
	p.line("as declared", "log-likelihood %s", rounded(e.Declared))
	p.line("moving", "log-likelihood %s, if the value moves by %s in 1 d",
		rounded(e.Moving.LogLikelihood), within(uncertainDigits(dailyWalk(&e.Moving)), unit))
	if e.Correlated.SD > 0 {
		p.line("correlated", "log-likelihood %s, if a noise of %s is correlated over %s", rounded(e.Correlated.LogLikelihood),
			within(uncertainDigits(e.Correlated.SD), unit), elapsed(float64(durationOfSeconds(e.Correlated.Seconds))))
	} else {
		p.line("correlated", "no correlated noise is likelier")
	}
}

func (p *sheet) tests(tests []modelcheck.Test) {
	if len(tests) == 0 {
		return
	}
	w := p.table("OBJECTION", "RAISED", "STATISTIC", "PROBABILITY", "LEVEL", "TEST")
	for _, t := range tests {
		raised := "no"
		if t.Objects() {
			raised = "yes"
		}
		w.row(t.Objection.String(), raised, rounded(t.Statistic), probabilityText(t.Probability), probabilityText(t.Level), t.Name)
	}
	_ = w.Flush() // into memory
}

// rounded writes a number to three decimals, or if it is small to three digits.
func rounded(x float64) string {
	if a := math.Abs(x); a > 0 && a < 0.1 || a >= maxPlainValue {
		return significant(x)
	}
	return roundTo(x, -3)
}

// uncertainDigits writes a standard deviation with two significant digits.
func uncertainDigits(sd float64) string {
	last, ok := uncertaintyPlace(sd)
	if !ok {
		return shortest(sd)
	}
	return roundTo(sd, last)
}

// stepsText renders steps, a line each.
func stepsText(steps []engine.RecordedStep) string {
	p := new(sheet)
	if len(steps) == 0 {
		p.WriteString("No steps.\n")
		return p.String()
	}
	w := p.table("FOUND AT", "SINCE", "DIRECTION", "WIDENED BY", "RECORDED")
	for i := range steps {
		s := &steps[i]
		direction, widened := "DOWN", "-"
		if s.Up {
			direction = "UP"
		}
		if s.Widen > 0 {
			widened = shortest(s.Widen)
		}
		w.row(s.Time.String(), s.Since.String(), direction, widened, s.CreateTime.String())
	}
	_ = w.Flush() // into memory
	return p.String()
}

// assessmentsText renders how readings agreed with the belief, a line each.
func assessmentsText(assessments []engine.Assessment, nextPage string) string {
	p := new(sheet)
	if len(assessments) == 0 {
		p.WriteString("No readings.\n")
		return p.String()
	}
	w := p.table("TIME", "VALUE", "INSTRUMENT", "READING ID", "TAIL PROBABILITY", "OUTLIER", "IN HINDSIGHT")
	for i := range assessments {
		a := &assessments[i]
		tail, outlier, hindsight := "-", "-", "-"
		if a.HasTail {
			tail = probabilityText(a.TailProbability)
		}
		if a.Outlying {
			tail += " outlying"
		}
		if a.HasOutlier {
			outlier = probabilityText(a.Outlier)
		}
		if a.HasHindsight {
			hindsight = probabilityText(a.Hindsight)
		}
		r := &a.Reading
		w.row(timeText(r.Time), indicationText(&r.Reading), string(r.Instrument), string(r.ID), tail, outlier, hindsight)
	}
	_ = w.Flush() // into memory
	p.more(nextPage)
	return p.String()
}
