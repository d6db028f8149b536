package server

import (
	"cmp"
	"fmt"
	"strings"

	"leadline.example/engine"
)

// instrumentText renders an instrument in words, its calibrations as a table.
func instrumentText(v *engine.InstrumentView) string {
	i := &v.Instrument
	d := &i.Declaration
	p := new(sheet)
	fmt.Fprintf(p, "%s, revision %d\n", i.ID, i.Revision)
	if d.Description != "" {
		p.line("what", "%s", d.Description)
	}
	p.line("unit", "%s", d.Unit)
	p.line("repeatability", "%s", instrumentRepeatabilityText(&d.Repeatability, d.Unit))
	if d.Resolution > 0 {
		p.line("resolution", "%s", within(shortest(d.Resolution), d.Unit))
	}
	if d.MeasuringInterval != (engine.MeasuringInterval{}) {
		p.line("indicates", "%s", toleranceText(engine.Tolerance(d.MeasuringInterval), d.Unit))
	}
	p.line("rest on it", "%s", restText(v))
	p.line("created", "%s", i.CreateTime)
	p.line("updated", "%s", i.UpdateTime)
	if i.Retired {
		p.line("retired", "%s", i.RetireTime)
	}
	p.calibrations(d)
	return p.String()
}

func instrumentRepeatabilityText(r *engine.InstrumentRepeatability, unit string) string {
	var parts []string
	switch {
	case r.StandardDeviation > 0:
		parts = append(parts, within(shortest(r.StandardDeviation), unit))
	case r.Learned.Learned():
		parts = append(parts, repeatabilityText(r.Learned, unit))
	default:
		parts = append(parts, "that of the quantity")
	}
	if r.Relative > 0 {
		parts = append(parts, shortest(r.Relative)+" of the value")
	}
	if c := r.Correlated; c.StandardDeviation > 0 {
		parts = append(parts, fmt.Sprintf("%s correlated over %s", within(shortest(c.StandardDeviation), unit), elapsedOrShort(c.Time)))
	}
	if r.BetweenOccasions > 0 {
		parts = append(parts, within(shortest(r.BetweenOccasions), unit)+" between occasions")
	}
	return strings.Join(parts, "; ")
}

// restText says how many beliefs rest on an instrument.
func restText(v *engine.InstrumentView) string {
	text := fmt.Sprintf("%d quantities", v.Quantities)
	if v.Quantities == 1 {
		text = "1 quantity"
	}
	if v.Rebuilding > 0 {
		text += fmt.Sprintf(", %d still being rebuilt", v.Rebuilding)
	}
	return text
}

func (p *sheet) calibrations(d *engine.InstrumentDeclaration) {
	if len(d.Calibrations) == 0 {
		p.WriteString("No calibrations: its bias is taken to be 0.\n")
		return
	}
	w := p.table("VALID FROM", "BIAS", "u", "DRIFT", "REFERENCE", "CERTIFICATE", "DUE")
	for i := range d.Calibrations {
		c := &d.Calibrations[i]
		drift, due := "-", "-"
		if c.DriftPer > 0 {
			drift = fmt.Sprintf("%s in %s", within(shortest(c.DriftStandardDeviation), d.Unit), elapsedOrShort(c.DriftPer))
		}
		if c.HasDue {
			due = c.Due.String()
		}
		w.row(c.ValidFrom.String(), within(shortest(c.Bias), d.Unit), biasUncertaintyText(c, d.Unit), drift,
			referenceText(c, d.Unit), cmp.Or(c.Certificate, "-"), due)
	}
	_ = w.Flush() // into memory
}

func biasUncertaintyText(c *engine.Calibration, unit string) string {
	text := within(shortest(c.StandardUncertainty()), unit)
	if c.RelativeBiasStandardUncertainty > 0 {
		text += " and " + shortest(c.RelativeBiasStandardUncertainty) + " of the value"
	}
	return text
}

// referenceText names a calibration's reference and what it shares with others.
func referenceText(c *engine.Calibration, unit string) string {
	if c.Reference == "" {
		return "-"
	}
	return fmt.Sprintf("%s, u = %s", c.Reference, within(shortest(c.CommonStandardUncertainty), unit))
}

// instrumentsText renders a list of instruments, a line each.
func instrumentsText(instruments []engine.InstrumentView, nextPage string) string {
	p := new(sheet)
	if len(instruments) == 0 {
		p.WriteString("No instruments.\n")
		return p.String()
	}
	w := p.table("INSTRUMENT", "UNIT", "REPEATABILITY", "CALIBRATIONS", "DUE", "REST ON IT", "DESCRIPTION")
	for n := range instruments {
		v := &instruments[n]
		d := &v.Instrument.Declaration
		what, due := d.Description, "-"
		if v.Instrument.Retired {
			what = "(retired " + v.Instrument.RetireTime.String() + ") " + what
		}
		if last := len(d.Calibrations) - 1; last >= 0 && d.Calibrations[last].HasDue {
			due = d.Calibrations[last].Due.String()
		}
		w.row(string(v.Instrument.ID), d.Unit, instrumentRepeatabilityText(&d.Repeatability, d.Unit),
			fmt.Sprint(len(d.Calibrations)), due, restText(v), what)
	}
	_ = w.Flush() // into memory
	p.more(nextPage)
	return p.String()
}

// instruments writes what a belief says of the instruments behind it.
func (p *sheet) instruments(b *engine.Belief) {
	unit := b.Quantity.Declaration.Unit
	for i := range b.Biases {
		x := &b.Biases[i]
		p.line("bias", "%s: %s (calibration of %s)", x.Instrument, estimateText(x.Mean, x.StandardDeviation, unit), x.ValidFrom)
	}
	for _, x := range b.References {
		p.line("reference", "%s: off by %s times its standard uncertainty", x.Reference, estimateText(x.Mean, x.StandardDeviation, ""))
	}
	if m := flaggedMessage(b); m != nil {
		p.line("flagged", "%d overdue, %d before the calibration was valid, %d uncalibrated", m.GetOverdue(), m.GetNotYetValid(), m.GetUncalibrated())
	}
	if b.Linearised {
		p.line("note", "readings with a relative part entered by a linearisation about what was predicted")
	}
	if b.ResolutionAsVariance {
		p.line("note", "the displays' resolution entered as a variance, resolution^2/12 for each reading")
	}
}

// estimateText writes "0.8123 mm, u = 0.0071 mm".
func estimateText(mean, sd float64, unit string) string {
	last, ok := uncertaintyPlace(sd)
	if !ok {
		return fmt.Sprintf("%s, u = %s", within(shortest(mean), unit), within(shortest(sd), unit))
	}
	return fmt.Sprintf("%s, u = %s", within(roundTo(mean, last), unit), within(roundTo(sd, last), unit))
}
