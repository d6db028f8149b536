package server

import (
	"cmp"
	"fmt"
	"math"
	"strconv"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

// forecastText renders a forecast: when a limit is crossed, and the steps as a
// table.
func forecastText(f *engine.Forecast) string {
	d := &f.Quantity.Declaration
	p := new(sheet)
	fmt.Fprintf(p, "%s from %s\n", f.Quantity.ID, f.Time)
	if d.Description != "" {
		p.line("what", "%s", d.Description)
	}
	p.line("dynamics", "%s (declared)", dynamicsText(d.Dynamics, d.Unit, spreadUnit(d)))
	if f.HasSlope {
		p.line("slope", "%s in %s", estimateText(f.SlopeMean, f.SlopeStandardDeviation, spreadUnit(d)), elapsedOrShort(f.SlopePer))
	}
	p.line("tolerance", "%s", toleranceText(d.Tolerance, d.Unit))
	p.line("horizon", "%s", elapsedOrShort(f.Horizon))
	p.timeToBreach(f)
	p.basis(f.Quantity.Revision, f.Position, f.Rebuilding)
	w := p.table("TIME", "RESULT", "INTERVAL", "BREACH", "CROSSED BY THEN")
	for i := range f.Steps {
		w.row(stepCells(&f.Steps[i], d.Unit)...)
	}
	_ = w.Flush() // into memory
	p.WriteString(caution)
	return p.String()
}

func (p *sheet) timeToBreach(f *engine.Forecast) {
	switch {
	case f.HasCrossing:
		p.line("a limit", "is crossed within the horizon with probability %s", probabilityText(f.Probability))
		p.line("crossed", "with probability 0.1 %s, 0.5 %s, 0.9 %s",
			quantileText(f.LowerDecile), quantileText(f.Median), quantileText(f.UpperDecile))
	case f.Quantity.Declaration.Tolerance.Declared():
		p.line("a limit", "may be crossed at any time: too little is known")
	}
}

// quantileText writes a time after the forecast's.
func quantileText(after time.Duration) string {
	switch {
	case after < 0:
		return "not within the horizon"
	case after == 0:
		return "at once"
	}
	return "after " + elapsed(float64(after))
}

// basis writes what reproduces an answer.
func (p *sheet) basis(revision uint32, position engine.Position, rebuilding bool) {
	p.line("basis", "revision %d, ledger position %d", revision, position)
	if rebuilding {
		p.line("note", "the belief is being rebuilt; this is the one before")
	}
}

func stepCells(s *engine.ForecastStep, unit string) []string {
	if s.Level.Form() == posterior.FormNone {
		return []string{s.Time.String(), "nothing known", "-", "-", "-"}
	}
	last, ok := levelPlace(s.Level, s.Lower, s.Upper)
	lower, upper := shortest(s.Lower), shortest(s.Upper)
	if ok {
		lower, upper = roundTo(s.Lower, last), roundTo(s.Upper, last)
	}
	breach, crossed := "-", "-"
	if s.HasBreach {
		breach = probabilityText(s.Breach.Either)
	}
	if s.HasCrossed {
		crossed = probabilityText(s.Crossed.Either)
	}
	return []string{s.Time.String(), resultText(s.Level, s.Lower, s.Upper, unit), lower + " to " + within(upper, unit), breach, crossed}
}

// budgetText renders a budget as a table.
func budgetText(b *engine.Budget) string {
	unit := b.Quantity.Declaration.Unit
	p := new(sheet)
	fmt.Fprintf(p, "%s at %s\n", b.Quantity.ID, b.Time)
	if d := b.Quantity.Declaration.Description; d != "" {
		p.line("what", "%s", d)
	}
	if len(b.Undetermined) > 0 {
		p.line("budget", "none: nothing is known yet")
		p.basis(b.Quantity.Revision, b.Position, b.Rebuilding)
		p.WriteString(caution)
		return p.String()
	}
	p.basis(b.Quantity.Revision, b.Position, b.Rebuilding)
	w := p.table("SOURCE", "INSTRUMENT", "REFERENCE", "u", "SHARE", "VARIANCE")
	for i := range b.Parts {
		x := &b.Parts[i]
		w.row(x.Source.String(), cmp.Or(string(x.Instrument), "-"), cmp.Or(x.Reference, "-"),
			uncertaintyText(x.Variance, unit), percent(x.Variance/b.Variance), significant(x.Variance))
	}
	w.row("ALL", "-", "-", uncertaintyText(b.Variance, unit), percent(1), significant(b.Variance))
	_ = w.Flush() // into memory
	p.WriteString(caution)
	return p.String()
}

// uncertaintyText writes the root of a variance with two significant digits
// (JCGM 100:2008, 7.2.6).
func uncertaintyText(variance float64, unit string) string {
	u := math.Sqrt(variance)
	last, ok := uncertaintyPlace(u)
	if !ok {
		return within(shortest(u), unit)
	}
	return within(roundTo(u, last), unit)
}

func percent(share float64) string { return strconv.FormatFloat(100*share, 'f', 1, 64) + " %" }

func significant(x float64) string { return strconv.FormatFloat(x, 'e', 3, 64) }

// renewalsText renders renewals, a line each.
func renewalsText(renewals []engine.Renewal) string {
	p := new(sheet)
	if len(renewals) == 0 {
		p.WriteString("No renewals.\n")
		return p.String()
	}
	w := p.table("TIME", "REQUEST ID", "PRIOR", "SLOPE", "WITHDRAWN", "REASON")
	for i := range renewals {
		r := &renewals[i]
		slope, withdrawn := "as declared", "-"
		if r.HasSlope {
			slope = slopeText(&r.Slope, "")
		}
		if r.Withdrawn {
			withdrawn = r.WithdrawTime.String()
		}
		w.row(r.Time.String(), r.RequestID, priorText(&r.Prior, ""), slope, withdrawn, cmp.Or(r.Reason, "-"))
	}
	_ = w.Flush() // into memory
	return p.String()
}
