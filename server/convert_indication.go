package server

import (
	"fmt"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// setIndication reads what was indicated: exactly one of value, above, below and
// between. That the limits of between are in order is the engine's to check.
func setIndication(r *engine.Reading, m *leadlinev1.Reading) *engine.Error {
	found := ""
	for _, form := range [...]struct {
		name  string
		given bool
	}{{"value", m.Value != nil}, {"above", m.Above != nil}, {"below", m.Below != nil}, {"between", m.GetBetween() != nil}} {
		switch {
		case !form.given:
		case found != "":
			return refuse(engine.InvalidField, form.name, form.name+" stands beside "+found+"; give only one of value, above, below and between")
		default:
			found = form.name
		}
	}
	switch found {
	case "value":
		r.Value = m.GetValue()
	case "above":
		r.Extent, r.Value = engine.ExtentAbove, m.GetAbove()
	case "below":
		r.Extent, r.Value = engine.ExtentBelow, m.GetBelow()
	case "between":
		r.Extent, r.Value, r.Upper = engine.ExtentBetween, m.GetBetween().GetLower(), m.GetBetween().GetUpper()
		return checkBetween(m.GetBetween())
	default:
		return refuse(engine.MissingField, "value", "value is missing; give the indication as a number, or what is known of it as above, below or between")
	}
	return nil
}

func checkBetween(m *leadlinev1.Reading_Between) *engine.Error {
	field := "between.lower"
	switch {
	case m.Lower == nil:
	case m.Upper == nil:
		field = "between.upper"
	default:
		return nil
	}
	return refuse(engine.MissingField, field, field+" is missing; give it too, or above or below in place of between")
}

// setSamples reads how many indications a reading is the mean of; 0, the engine's
// word for absent, can't be given.
func setSamples(r *engine.Reading, count *uint32) *engine.Error {
	if count == nil {
		return nil
	}
	if r.Samples = *count; r.Samples == 0 {
		return refuse(engine.InvalidField, "sample_count", "sample_count is 0; give how many indications the reading is the mean of, or leave it out")
	}
	return nil
}

// setRecordedIndication writes what was indicated, without what JSON has no number
// for.
func setRecordedIndication(m *leadlinev1.RecordedReading, r *engine.Reading) {
	value := ifFinite(r.Value)
	switch r.Extent {
	case engine.ExtentAbove:
		m.Above = value
	case engine.ExtentBelow:
		m.Below = value
	case engine.ExtentBetween:
		m.Between = &leadlinev1.Reading_Between{Lower: value, Upper: ifFinite(r.Upper)}
	default:
		m.Value = value
	}
	if r.Samples != 0 {
		m.SampleCount = &r.Samples
	}
}

func ifFinite(x float64) *float64 {
	if !finite(x) {
		return nil
	}
	return &x
}

// unwritten names the numbers of an indication that setRecordedIndication leaves out.
func unwritten(r *engine.Reading) string {
	lower := [...]string{
		engine.ExtentValue: "value", engine.ExtentAbove: "above", engine.ExtentBelow: "below", engine.ExtentBetween: "between.lower",
	}[r.Extent]
	text := ""
	if !finite(r.Value) {
		text = fmt.Sprintf("; its %s is %v", lower, r.Value)
	}
	if !finite(r.Upper) {
		text += fmt.Sprintf("; its between.upper is %v", r.Upper)
	}
	return text
}

// indicationText writes "18.2 mm", "above 40 mm" or "18 to 20 mm".
func indicationText(r *engine.Reading) string {
	value := within(shortest(r.Value), r.Unit)
	switch r.Extent {
	case engine.ExtentAbove:
		return "above " + value
	case engine.ExtentBelow:
		return "below " + value
	case engine.ExtentBetween:
		return shortest(r.Value) + " to " + within(shortest(r.Upper), r.Unit)
	}
	return value
}
