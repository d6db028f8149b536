package server

import (
	"testing"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// instrumentBodies are declarations that are accepted; between them they use every field.
var instrumentBodies = []string{
	`{"unit":"mm"}`,
	`{"unit":"mm","description":"calliper of the workshop","repeatability":{"standard_deviation":0.01,"relative":0.002,
	 "correlated":{"standard_deviation":0.005,"correlation_time":"90s"},"between_occasions":0.02},
	 "resolution":0.01,"measuring_interval":{"lower":0,"upper":150},
	 "calibrations":[{"valid_from":"2025-01-10T00:00:00Z","bias":0.012,"expanded_uncertainty":0.02,"coverage_factor":2,
	  "relative_bias_standard_uncertainty":0.001,"drift_standard_deviation":0.01,"drift_per":"31536000s",
	  "reference":"gauge blocks 4","common_standard_uncertainty":0.004,"certificate":"K 25/117","due":"2026-01-10T00:00:00Z"},
	 {"valid_from":"2026-01-12T00:00:00.5Z","bias_standard_uncertainty":0.01}]}`,
	`{"repeatability":{"between_occasions":0.02},"measuring_interval":{"upper":40}}`,
	`{"repeatability":{"correlated":{"standard_deviation":0.3,"correlation_time":"0.5s"}},"measuring_interval":{"lower":-40}}`,
	`{"repeatability":{"learned":{"guess":0.02,"worth":4,"floor":0.005},"between_occasions":0.02}}`,
	`{"repeatability":{"learned":{"floor":0.1}},"resolution":0.1}`,
	`{"calibrations":[{"valid_from":"1700-01-01T00:00:00Z","bias":-3,"bias_standard_uncertainty":1e-9}]}`,
}

func checkInstrumentBody(t *testing.T, body []byte) (accepted bool) {
	t.Helper()
	message := new(leadlinev1.Instrument)
	err := decodeStrict(body, message, false)
	var declared engine.InstrumentDeclaration
	if err == nil {
		declared, err = instrumentDeclarationOf(message)
	}
	if err == nil {
		err = declared.Check()
	}
	if err != nil {
		if reason, _ := problemOf(err); reason == "" {
			t.Fatalf("%v has no reason", err)
		}
		return false
	}
	written, err := marshalJSON(instrumentMessage(&engine.InstrumentView{Instrument: engine.Instrument{ID: "calliper-7", Declaration: declared}}))
	if err != nil {
		t.Fatal(err)
	}
	again := new(leadlinev1.Instrument)
	if err := decodeStrict(written, again, false); err != nil {
		t.Fatalf("%v in %s", err, written)
	}
	redeclared, err := instrumentDeclarationOf(again)
	if err != nil {
		t.Fatalf("%v in %s", err, written)
	}
	if !redeclared.Equal(&declared) {
		t.Fatalf("%+v became %+v by way of %s", declared, redeclared, written)
	}
	return true
}

// What is answered declares the same again.
func TestAnswersOfInstrumentsDeclareTheSame(t *testing.T) {
	for _, body := range instrumentBodies {
		if !checkInstrumentBody(t, []byte(body)) {
			t.Errorf("refused: %s", body)
		}
	}
}

func FuzzDeclareInstrument(f *testing.F) {
	for _, body := range instrumentBodies {
		f.Add([]byte(body))
	}
	f.Add([]byte(`{"resolution":0,"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","coverage_factor":2}]}`))
	f.Fuzz(func(t *testing.T, body []byte) { checkInstrumentBody(t, body) })
}

// The lists of words are kept apart in the engine and in the interface.
func TestEveryWordOfTheEngineIsOneOfTheInterface(t *testing.T) {
	for _, s := range engine.BudgetSources {
		if got := sourceMessage(s).String(); got != s.String() || sourceMessage(s) == leadlinev1.Budget_UNSPECIFIED {
			t.Errorf("source %s is written %s", s, got)
		}
	}
	if n := len(leadlinev1.Budget_Source_name) - 1; n != len(engine.BudgetSources) {
		t.Errorf("the interface has %d sources, the engine %d", n, len(engine.BudgetSources))
	}
	for _, s := range engine.CalibrationStates {
		if got := calibrationStateMessage(s).String(); got != s.String() {
			t.Errorf("calibration %s is written %s", s, got)
		}
	}
	if n := len(leadlinev1.RecordedReading_CalibrationState_name) - 1; n != len(engine.CalibrationStates) {
		t.Errorf("the interface has %d states of calibration, the engine %d", n, len(engine.CalibrationStates))
	}
}
