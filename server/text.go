package server

import (
	"cmp"
	"fmt"
	"strconv"
	"strings"
	"text/tabwriter"
	"unicode"

	"leadline.example/engine"
	"leadline.example/engine/decide"
	"leadline.example/engine/posterior"
)

// caution ends every page with a judgement on it.
const caution = "This informs people; it is not a safety system and replaces no protection of the plant.\n"

// sheet is text/plain for a person: a heading and lines of label and text.
type sheet struct{ strings.Builder }

func (p *sheet) line(label, format string, args ...any) {
	fmt.Fprintf(p, "  %-14s%s\n", label, cell(fmt.Sprintf(format, args...)))
}

// table is a writer of aligned columns.
type table struct{ *tabwriter.Writer }

// table begins a table; the caller flushes it.
func (p *sheet) table(headings ...string) table {
	t := table{tabwriter.NewWriter(p, 0, 8, 2, ' ', 0)}
	t.row(headings...)
	return t
}

// row writes one line of a table.
func (t table) row(cells ...string) {
	for i, c := range cells {
		cells[i] = cell(c)
	}
	fmt.Fprintln(t, strings.Join(cells, "\t"))
}

// more ends a page of a list.
func (p *sheet) more(token string) {
	if token != "" {
		fmt.Fprintf(p, "More: page_token=%s\n", token)
	}
}

// cell keeps what clients sent from breaking a page's lines and columns and from
// reaching the terminal as anything but visible text: refused readings hold any
// bytes. All that a page says of such values goes through it. What can't be
// printed becomes a blank, what isn't UTF-8 the replacement character.
func cell(s string) string {
	return strings.Map(func(r rune) rune {
		if !unicode.IsPrint(r) {
			return ' '
		}
		return r
	}, s)
}

// beliefText renders a belief in a few lines.
func beliefText(b *engine.Belief) string {
	p := new(sheet)
	p.belief(b)
	p.WriteString(caution)
	return p.String()
}

func (p *sheet) belief(b *engine.Belief) {
	d := &b.Quantity.Declaration
	fmt.Fprintf(p, "%s at %s\n", b.Quantity.ID, b.Time)
	if d.Description != "" {
		p.line("what", "%s", d.Description)
	}
	if b.Quantity.Retired {
		p.line("retired", "%s; it takes no readings and has left lists and metrics", b.Quantity.RetireTime)
	}
	p.level(b)
	p.judgement(b)
	p.prediction(b)
	p.repeatability(b)
	p.instruments(b)
	if b.HasRenewal {
		p.line("renewed", "%s; what was read before tells of instruments only", b.RenewalTime)
	}
	if b.HasLast {
		p.line("readings", "%d, the last %s before (%s)", b.ReadingCount, elapsed(b.Time.Sub(b.LastTime)), b.LastTime)
	} else {
		p.line("readings", "none yet")
	}
	p.lastReading(b)
	p.modelCheck(&b.Check)
	p.basis(b.Quantity.Revision, b.Position, b.Rebuilding)
}

// level writes the result with its standard uncertainty, the interval and
// where the threshold asked for lies.
func (p *sheet) level(b *engine.Belief) {
	unit, spread := b.Quantity.Declaration.Unit, spreadUnit(&b.Quantity.Declaration)
	if b.Level.Form() == posterior.FormNone {
		p.line("result", "nothing is known yet")
		return
	}
	p.line("result", "%s", resultText(b.Level, b.Lower, b.Upper, unit))
	last, ok := levelPlace(b.Level, b.Lower, b.Upper)
	lower, upper := shortest(b.Lower), shortest(b.Upper)
	if ok {
		lower, upper = roundTo(b.Lower, last), roundTo(b.Upper, last)
	}
	p.line("interval", "%s to %s (coverage probability %s)", lower, within(upper, unit), shortest(b.Coverage))
	if mean, ok := b.Level.GeometricMean(); ok {
		sd, _ := b.Level.GeometricStandardDeviation()
		p.line("geometric", "mean %s, standard deviation a factor of %s", within(fourDigits(mean), unit), fourDigits(sd))
	}
	if b.HasSlope {
		p.line("slope", "%s in %s", estimateText(b.SlopeMean, b.SlopeStandardDeviation, spread), elapsedOrShort(b.SlopePer))
	}
	if b.HasThreshold {
		p.line("threshold", "below %s with probability %s", within(shortest(b.Threshold), unit), probabilityText(b.ProbabilityBelow))
	}
}

// levelPlace is the place to which a level is rounded: that of its standard
// uncertainty, or where none exists that of the interval's half width.
func levelPlace(l posterior.Posterior, lower, upper float64) (place, bool) {
	if u, ok := l.StandardDeviation(); ok {
		return uncertaintyPlace(u)
	}
	return uncertaintyPlace(upper/2 - lower/2)
}

// resultText writes "0.8123 mm, u = 0.0071 mm", or says why there is no u.
func resultText(l posterior.Posterior, lower, upper float64, unit string) string {
	centre, name := centreOf(l)
	value := shortest(centre)
	last, ok := levelPlace(l, lower, upper)
	if ok {
		value = roundTo(centre, last)
	}
	if u, exists := l.StandardDeviation(); exists && ok {
		return fmt.Sprintf("%s, u = %s", within(value, unit), within(roundTo(u, last), unit))
	}
	if l.Logarithmic() {
		return fmt.Sprintf("%s (%s; there is no standard uncertainty)", within(value, unit), name)
	}
	return fmt.Sprintf("%s (%s; too few readings for a standard uncertainty)", within(value, unit), name)
}

// centreOf returns what stands for a distribution, and its name: the mean, or the
// median where there is none.
func centreOf(l posterior.Posterior) (centre float64, name string) {
	if mean, ok := l.Mean(); ok {
		return mean, "mean"
	}
	return l.Quantile(0.5), "median"
}

// fourDigits writes a number with four significant digits.
func fourDigits(x float64) string { return strconv.FormatFloat(x, 'g', 4, 64) }

// judgement writes tolerance, breach probabilities and verdict.
func (p *sheet) judgement(b *engine.Belief) {
	d := &b.Quantity.Declaration
	if !d.Tolerance.Declared() {
		p.line("verdict", "none, as no tolerance is declared")
		return
	}
	p.line("tolerance", "%s", toleranceText(d.Tolerance, d.Unit))
	if b.HasBreach {
		p.line("breach", "%s", breachText(b))
	}
	p.line("verdict", "%s", verdictText(b))
}

func toleranceText(t engine.Tolerance, unit string) string {
	switch {
	case t.HasLower && t.HasUpper:
		return shortest(t.Lower) + " to " + within(shortest(t.Upper), unit)
	case t.HasLower:
		return "at least " + within(shortest(t.Lower), unit)
	case t.HasUpper:
		return "at most " + within(shortest(t.Upper), unit)
	}
	return "none"
}

func breachText(b *engine.Belief) string {
	t := b.Quantity.Declaration.Tolerance
	switch {
	case t.HasLower && t.HasUpper:
		return fmt.Sprintf("probability %s (below %s, above %s)",
			probabilityText(b.Either), probabilityText(b.Below), probabilityText(b.Above))
	case t.HasLower:
		return "probability " + probabilityText(b.Below) + " (below)"
	}
	return "probability " + probabilityText(b.Above) + " (above)"
}

// verdictText gives the verdict with the rule that led to it.
func verdictText(b *engine.Belief) string {
	rule := b.Quantity.Declaration.DecisionRule()
	conform, breach := shortest(rule.ConformProbability), shortest(rule.BreachProbability)
	switch {
	case b.Verdict == decide.Conforms:
		return fmt.Sprintf("CONFORMS: inside with probability %s (rule: at least %s)", probabilityText(b.Conformance), conform)
	case b.Verdict == decide.Breaches:
		return fmt.Sprintf("BREACHES: outside with probability %s (rule: at least %s)", probabilityText(b.Either), breach)
	case !b.HasBreach:
		return "INCONCLUSIVE: too little is known"
	}
	return fmt.Sprintf("INCONCLUSIVE: inside with probability %s (rule: at least %s), outside %s (at least %s)",
		probabilityText(b.Conformance), conform, probabilityText(b.Either), breach)
}

func (p *sheet) prediction(b *engine.Belief) {
	if b.Predictive.Form() == posterior.FormNone {
		return
	}
	unit := b.Quantity.Declaration.Unit
	by := ""
	if b.PredictiveInstrument != "" {
		by = " (" + string(b.PredictiveInstrument) + ")"
	}
	p.line("next reading", "%s%s", resultText(b.Predictive, b.PredictiveLower, b.PredictiveUpper, unit), by)
}

func (p *sheet) repeatability(b *engine.Belief) {
	r, unit := b.Repeatability, spreadUnit(&b.Quantity.Declaration)
	switch {
	case r.Known:
		p.line("repeatability", "%s (declared)", within(shortest(r.StandardDeviation), unit))
	case r.HasMedian:
		last, ok := uncertaintyPlace(r.Median)
		text := [...]string{shortest(r.Median), shortest(r.Lower), shortest(r.Upper)}
		if ok {
			text = [...]string{roundTo(r.Median, last), roundTo(r.Lower, last), roundTo(r.Upper, last)}
		}
		p.line("repeatability", "%s (learned; %s to %s)", within(text[0], unit), text[1], within(text[2], unit))
	}
}

// beliefsText renders a list of beliefs, a line each.
func beliefsText(beliefs []engine.Belief, nextPage string) string {
	p := new(sheet)
	if len(beliefs) == 0 {
		p.WriteString("No quantities.\n")
		return p.String()
	}
	w := p.table("QUANTITY", "RESULT", "BREACH", "VERDICT", "LAST READING")
	for i := range beliefs {
		b := &beliefs[i]
		result, breach, verdict, last := "nothing known", "-", "-", "none"
		if b.Level.Form() != posterior.FormNone {
			result = resultText(b.Level, b.Lower, b.Upper, b.Quantity.Declaration.Unit)
		}
		if b.HasBreach {
			breach = probabilityText(b.Either)
		}
		if b.Verdict != 0 {
			verdict = b.Verdict.String()
		}
		if b.HasLast {
			last = elapsed(b.Time.Sub(b.LastTime)) + " before"
		}
		w.row(string(b.Quantity.ID), result, breach, verdict, last)
	}
	_ = w.Flush() // into memory
	fmt.Fprintf(p, "At %s.\n", beliefs[0].Time)
	p.more(nextPage)
	p.WriteString(caution)
	return p.String()
}

// elapsed writes a duration in nanoseconds with its two greatest units.
func elapsed(nanos float64) string {
	seconds := int64(nanos / 1e9)
	if seconds < 1 {
		return "less than 1 s"
	}
	for _, u := range [...]struct {
		size, part int64
		name, sub  string
	}{{86400, 3600, "d", "h"}, {3600, 60, "h", "min"}, {60, 1, "min", "s"}} {
		whole, rest := seconds/u.size, seconds%u.size/u.part
		switch {
		case whole > 0 && rest > 0:
			return fmt.Sprintf("%d %s %d %s", whole, u.name, rest, u.sub)
		case whole > 0:
			return fmt.Sprintf("%d %s", whole, u.name)
		}
	}
	return fmt.Sprintf("%d s", seconds)
}

// errorText renders a refused request.
func errorText(e *engine.Error) string {
	p := new(sheet)
	p.WriteString(cell(e.Message) + "\n")
	p.line("reason", "%s", e.Reason)
	p.line("field", "%s", cmp.Or(e.Field, "-"))
	return p.String()
}
