package server

import (
	"testing"

	"github.com/google/go-cmp/cmp"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// declaredIn reads a declaration and checks it, as a request does.
func declaredIn(body string) (engine.Declaration, error) {
	m := new(leadlinev1.Quantity)
	if err := decodeStrict([]byte(body), m, false); err != nil {
		return engine.Declaration{}, err
	}
	d, err := declarationOf(m)
	if err == nil {
		err = d.Check()
	}
	return d, err
}

func TestDeclarationOfAModelIsRead(t *testing.T) {
	got, err := declaredIn(`{"unit":"mg/l","prior":{"mean":2,"standard_deviation":1},"repeatability":{"standard_deviation":0.1},"scale":"LOG",
		"outliers":{"probability":0.02,"inflation":8},"model_check":{"window":100,"objections_per_year":0.01},
		"step_detection":{"false_alarm_interval":1e4,"on_step":{"widen":0.5}}}`)
	want := engine.Declaration{
		Unit: "mg/l", Scale: engine.ScaleLog,
		Prior:         engine.Prior{Form: engine.PriorNormal, Mean: 2, StandardDeviation: 1},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.1},
		Outliers:      engine.Outliers{Probability: 0.02, Inflation: 8},
		ModelCheck:    engine.ModelCheck{Window: 100, ObjectionsPerYear: 0.01},
		StepDetection: engine.StepDetection{FalseAlarmInterval: 1e4, Widen: 0.5},
	}
	if diff := cmp.Diff(want, got); err != nil || diff != "" {
		t.Errorf("%v (-want +got)\n%s", err, diff)
	}
}

func TestDefaultsOfAModelAreAbsence(t *testing.T) {
	plain, err := declaredIn(`{"unit":"mm"}`)
	if err != nil {
		t.Fatal(err)
	}
	for _, body := range []string{
		`{"unit":"mm","scale":"LINEAR"}`, `{"unit":"mm","scale":null}`,
		`{"unit":"mm","model_check":{},"step_detection":{},"outliers":null}`,
	} {
		if got, err := declaredIn(body); err != nil || got != plain {
			t.Errorf("%s is %+v, %v", body, got, err)
		}
	}
}

func TestDeclarationOfAModelIsRefused(t *testing.T) {
	for _, test := range []struct {
		body   string
		reason engine.Reason
		field  string
	}{
		{`{"outliers":{}}`, engine.MissingField, "outliers.probability"},
		{`{"outliers":{"probability":0.01}}`, engine.MissingField, "outliers.inflation"},
		{`{"outliers":{"probability":0,"inflation":0}}`, engine.InvalidField, "outliers.probability"},
		{`{"outliers":{"probability":0.01,"inflation":0}}`, engine.InvalidField, "outliers.inflation"},
		{`{"outliers":{"probability":0.01,"inflation":1}}`, engine.InvalidField, "outliers.inflation"},
		{`{"scale":"UNSPECIFIED"}`, engine.InvalidField, "scale"},
		{`{"scale":"log"}`, engine.InvalidField, "scale"},
		{`{"scale":2}`, engine.InvalidField, "scale"},
		{`{"scale":"LOG","tolerance":{"lower":0}}`, engine.InvalidField, "tolerance.lower"},
		{`{"model_check":{"window":0}}`, engine.InvalidField, "model_check.window"},
		{`{"model_check":{"window":-64}}`, engine.InvalidField, "model_check.window"},
		{`{"model_check":{"window":1}}`, engine.InvalidField, "model_check.window"},
		{`{"model_check":{"objections_per_year":0}}`, engine.InvalidField, "model_check.objections_per_year"},
		{`{"model_check":{"objections_per_year":-1}}`, engine.InvalidField, "model_check.objections_per_year"},
		{`{"step_detection":{"false_alarm_interval":0}}`, engine.InvalidField, "step_detection.false_alarm_interval"},
		{`{"step_detection":{"on_step":{}}}`, engine.MissingField, "step_detection.on_step.widen"},
		{`{"step_detection":{"on_step":{"widen":0}}}`, engine.InvalidField, "step_detection.on_step.widen"},
		{`{"repeatability":{"learned":{"floor":0}}}`, engine.InvalidField, "repeatability.learned.floor"},
		{`{"repeatability":{"learned":{"guess":0.1,"floor":0.01}}}`, engine.MissingField, "repeatability.learned.worth"},
	} {
		_, err := declaredIn(test.body)
		if reason, field := problemOf(err); reason != test.reason || field != test.field {
			t.Errorf("%s: %s of %q, want %s of %q (%v)", test.body, reason, field, test.reason, test.field, err)
		}
	}
}

// JSON can't name the value that is never sent; gRPC can.
func TestUnspecifiedScaleIsRefused(t *testing.T) {
	for _, s := range []leadlinev1.Quantity_Scale{leadlinev1.Quantity_UNSPECIFIED, 7} {
		_, err := declarationOf(&leadlinev1.Quantity{Unit: "mm", Scale: &s})
		if reason, field := problemOf(err); reason != engine.InvalidField || field != "scale" {
			t.Errorf("scale %v: %v", s, err)
		}
	}
}

func TestRepeatabilityOfAnInstrumentIsOneOrLearned(t *testing.T) {
	for _, test := range []struct {
		body   string
		reason engine.Reason
		field  string
	}{
		{`{"learned":{}}`, "", ""},
		{`{"learned":{"guess":0.1,"worth":3}}`, "", ""},
		{`{"learned":{"floor":0.1}}`, "", ""},
		{`{"learned":{"guess":0.1}}`, engine.MissingField, "repeatability.learned.worth"},
		{`{"learned":{"floor":0}}`, engine.InvalidField, "repeatability.learned.floor"},
		{`{"standard_deviation":0.1,"learned":{}}`, engine.InvalidField, "repeatability.learned"},
		{`{"standard_deviation":0.1,"relative":0.01,"learned":{}}`, engine.InvalidField, "repeatability.learned"},
	} {
		m := new(leadlinev1.Instrument)
		err := decodeStrict([]byte(`{"unit":"mm","repeatability":`+test.body+`}`), m, false)
		var d engine.InstrumentDeclaration
		if err == nil {
			d, err = instrumentDeclarationOf(m)
		}
		if err == nil {
			err = d.Check()
		}
		if reason, field := problemOf(err); reason != test.reason || field != test.field {
			t.Errorf("%s: %s of %q, want %s of %q (%v)", test.body, reason, field, test.reason, test.field, err)
		}
	}
}
