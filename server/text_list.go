package server

import (
	"fmt"
	"time"

	"leadline.example/engine"
)

// quantityText renders a declaration in words.
func quantityText(q *engine.Quantity) string {
	d := &q.Declaration
	p := new(sheet)
	fmt.Fprintf(p, "%s, revision %d\n", q.ID, q.Revision)
	if d.Description != "" {
		p.line("what", "%s", d.Description)
	}
	p.line("unit", "%s", d.Unit)
	p.line("prior", "%s", priorText(&d.Prior, d.Unit))
	p.line("repeatability", "%s", repeatabilityText(d.Repeatability, spreadUnit(d)))
	p.line("dynamics", "%s", dynamicsText(d.Dynamics, d.Unit, spreadUnit(d)))
	p.model(d)
	p.line("tolerance", "%s", toleranceText(d.Tolerance, d.Unit))
	if d.Tolerance.Declared() {
		r := d.DecisionRule()
		p.line("decision rule", "conforms from probability %s, breaches from %s",
			shortest(r.ConformProbability), shortest(r.BreachProbability))
	}
	if d.BreachHorizon != 0 {
		p.line("looks ahead", "%s", elapsedOrShort(d.BreachHorizon))
	}
	p.line("created", "%s", q.CreateTime)
	p.line("updated", "%s", q.UpdateTime)
	if q.Retired {
		p.line("retired", "%s", q.RetireTime)
	}
	return p.String()
}

func priorText(prior *engine.Prior, unit string) string {
	text := "vague: nothing was known"
	switch prior.Form {
	case engine.PriorNormal:
		text = fmt.Sprintf("mean %s, standard deviation %s", shortest(prior.Mean), within(shortest(prior.StandardDeviation), unit))
	case engine.PriorInterval:
		text = fmt.Sprintf("%s to %s with probability %s",
			shortest(prior.Low), within(shortest(prior.High), unit), shortest(prior.Probability))
	}
	if prior.HasTime {
		text += ", at " + prior.Time.String()
	}
	return text
}

func repeatabilityText(r engine.Repeatability, unit string) string {
	switch r.Form {
	case engine.RepeatabilityKnown:
		return within(shortest(r.StandardDeviation), unit)
	case engine.RepeatabilityLearned:
		return fmt.Sprintf("learned, from a guess of %s worth %s degrees of freedom%s", within(shortest(r.Guess), unit), shortest(r.Worth), floorText(r.Floor, unit))
	case engine.RepeatabilityLearnedReference:
		return "learned from the readings alone" + floorText(r.Floor, unit)
	}
	return "comes with each reading or its instrument"
}

// dynamicsText takes the unit of the value and that of movements.
func dynamicsText(d engine.Dynamics, unit, spread string) string {
	switch d.Form {
	case engine.DynamicsRandomWalk:
		return "random walk, " + movementText(d.StandardDeviation, d.Per, spread)
	case engine.DynamicsLinearTrend:
		text := "linear trend, slope " + slopeText(&d.Slope, spread)
		if d.Wander.Per != 0 {
			text += ", which changes by " + movementText(d.Wander.StandardDeviation, d.Wander.Per, spread)
		}
		if d.Per != 0 {
			text += "; random walk, " + movementText(d.StandardDeviation, d.Per, spread)
		}
		return text
	case engine.DynamicsMeanReverting:
		return fmt.Sprintf("reverting to %s, with standard deviation %s and half-life %s",
			within(shortest(d.Mean), unit), within(shortest(d.StandardDeviation), spread), elapsedOrShort(d.HalfLife))
	}
	return "constant"
}

func movementText(sd float64, per time.Duration, unit string) string {
	return within(shortest(sd), unit) + " in " + elapsedOrShort(per)
}

// slopeText writes a slope as it was declared.
func slopeText(s *engine.Slope, unit string) string {
	return fmt.Sprintf("%s (u = %s) in %s", within(shortest(s.Mean), unit), within(shortest(s.StandardDeviation), unit), elapsedOrShort(s.Per))
}

// elapsedOrShort writes a declared duration exactly.
func elapsedOrShort(d time.Duration) string {
	if d%time.Second != 0 || d <= 0 {
		return d.String()
	}
	s := int64(d / time.Second)
	for _, u := range [...]struct {
		size int64
		name string
	}{{86400, "d"}, {3600, "h"}, {60, "min"}} {
		if s%u.size == 0 {
			return fmt.Sprintf("%d %s", s/u.size, u.name)
		}
	}
	return fmt.Sprintf("%d s", s)
}

// quantitiesText renders a list of declarations, a line each.
func quantitiesText(quantities []engine.Quantity, nextPage string) string {
	p := new(sheet)
	if len(quantities) == 0 {
		p.WriteString("No quantities.\n")
		return p.String()
	}
	w := p.table("QUANTITY", "UNIT", "TOLERANCE", "DYNAMICS", "DESCRIPTION")
	for i := range quantities {
		q := &quantities[i]
		d := &q.Declaration
		what := d.Description
		if q.Retired {
			what = "(retired " + q.RetireTime.String() + ") " + what
		}
		w.row(string(q.ID), d.Unit, toleranceText(d.Tolerance, d.Unit), dynamicsText(d.Dynamics, d.Unit, spreadUnit(d)), what)
	}
	_ = w.Flush() // into memory
	p.more(nextPage)
	return p.String()
}

// readingsText renders stored readings, a line each.
func readingsText(readings []engine.StoredReading, nextPage string) string {
	p := new(sheet)
	if len(readings) == 0 {
		p.WriteString("No readings.\n")
		return p.String()
	}
	w := p.table("TIME", "QUANTITY", "VALUE", "INSTRUMENT", "READING ID", "STATUS", "DETAIL")
	for i := range readings {
		r := &readings[i]
		value := indicationText(&r.Reading)
		if r.Samples > 1 {
			value += fmt.Sprintf(", mean of %d", r.Samples)
		}
		if r.HasUncertainty {
			value += ", u = " + shortest(r.RandomStandardUncertainty)
		}
		outcome := outcomeText(r.Status, r.Reason)
		if r.HasCalibration && r.Calibration != engine.CalibrationInForce {
			outcome += " " + r.Calibration.String()
		}
		w.row(timeText(r.Time), string(r.Quantity), value, string(r.Instrument), string(r.ID), outcome, r.Detail)
	}
	_ = w.Flush() // into memory
	p.more(nextPage)
	return p.String()
}

// timeText writes a moment, or "-" for one that the service cannot hold; the
// detail of its reading names it.
func timeText(i engine.Instant) string {
	if !i.Valid() {
		return "-"
	}
	return i.String()
}

// resultsText renders what became of the readings of a request; those that
// were refused are listed with the remedy.
func resultsText(results []engine.Result) string {
	var applied, duplicate, refused int
	p := new(sheet)
	for i := range results {
		switch r := &results[i]; r.Status {
		case engine.Applied:
			applied++
		case engine.Duplicate:
			duplicate++
		default:
			refused++
			fmt.Fprintf(p, "readings[%d] %s: %s\n", i, outcomeText(r.Status, r.Reason), cell(r.Detail))
		}
	}
	fmt.Fprintf(p, "%d applied, %d duplicate, %d refused\n", applied, duplicate, refused)
	return p.String()
}

func outcomeText(s engine.Status, r engine.Reason) string {
	if r == "" {
		return s.String()
	}
	return s.String() + " " + string(r)
}
