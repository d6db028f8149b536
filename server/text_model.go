package server

import (
	"fmt"
	"strings"

	"leadline.example/engine"
)

// model writes what was declared of the model beyond its defaults.
func (p *sheet) model(d *engine.Declaration) {
	if d.Scale == engine.ScaleLog {
		p.line("scale", "LOG: standard deviations of readings and dynamics are of the logarithm")
	}
	if d.Outliers != (engine.Outliers{}) {
		p.line("outliers", "%s", outliersText(d.Outliers))
	}
	if d.ModelCheck != (engine.ModelCheck{}) {
		p.line("model check", "%s", modelCheckWords(d.ModelCheck))
	}
	if d.StepDetection != (engine.StepDetection{}) {
		p.line("steps", "%s", stepsWords(d.StepDetection, spreadUnit(d)))
	}
}

// spreadUnit is the unit of the standard deviations of readings and dynamics: none on
// the scale LOG, where they are of the logarithm.
func spreadUnit(d *engine.Declaration) string {
	if d.Scale == engine.ScaleLog {
		return ""
	}
	return d.Unit
}

func outliersText(o engine.Outliers) string {
	return fmt.Sprintf("each reading with probability %s, %s times as far off", shortest(o.Probability), shortest(o.Inflation))
}

func modelCheckWords(c engine.ModelCheck) string {
	var words []string
	if c.Window != 0 {
		words = append(words, fmt.Sprintf("%d scored readings at a time", c.Window))
	}
	if c.ObjectionsPerYear != 0 {
		words = append(words, shortest(c.ObjectionsPerYear)+" false objections in a year")
	}
	return strings.Join(words, ", ")
}

func stepsWords(s engine.StepDetection, unit string) string {
	var words []string
	if s.FalseAlarmInterval != 0 {
		words = append(words, fmt.Sprintf("a false one in %s readings", shortest(s.FalseAlarmInterval)))
	}
	if s.Widen != 0 {
		words = append(words, "each widens the belief by "+within(shortest(s.Widen), unit))
	}
	return strings.Join(words, "; ")
}

func floorText(floor float64, unit string) string {
	if floor == 0 {
		return ""
	}
	return ", at least " + within(shortest(floor), unit)
}
