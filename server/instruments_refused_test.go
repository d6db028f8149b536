package server_test

import (
	"strings"
	"testing"

	"leadline.example/engine"
)

// calibrated is an instrument's body with one calibration that has the members.
func calibrated(members string) string {
	return `{"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":0.01` + members + `}]}`
}

func TestRefusedInstrumentsSayWhy(t *testing.T) {
	r := startServer(t)
	for _, test := range []struct {
		name, body string
		reason     engine.Reason
		field      string
	}{
		{"empty body", "", engine.MalformedBody, ""},
		{"unknown field", `{"units":"mm"}`, engine.UnknownField, "units"},
		{"camelCase field", `{"measuringInterval":{}}`, engine.UnknownField, "measuringInterval"},
		{"unknown field of a calibration", calibrated(`,"offset":1`), engine.UnknownField, "calibrations[0].offset"},
		{"number as string", calibrated(`,"bias":"0.1"`), engine.InvalidField, "calibrations[0].bias"},
		{"calibrations an object", `{"calibrations":{}}`, engine.InvalidField, "calibrations"},
		{"unit too long", `{"unit":"` + strings.Repeat("m", 33) + `"}`, engine.InvalidField, "unit"},
		{"another ID in the body", `{"id":"old"}`, engine.InvalidField, "id"},
		{"empty repeatability", `{"repeatability":{}}`, engine.MissingField, "repeatability"},
		{"zero repeatability", `{"repeatability":{"standard_deviation":0}}`, engine.InvalidField, "repeatability.standard_deviation"},
		{"negative repeatability", `{"repeatability":{"standard_deviation":-1}}`, engine.InvalidField, "repeatability.standard_deviation"},
		{"zero between occasions", `{"repeatability":{"between_occasions":-0.0}}`, engine.InvalidField, "repeatability.between_occasions"},
		{"relative around zero", `{"repeatability":{"relative":0.01}}`, engine.MissingField, "repeatability.standard_deviation"},
		{"relative in percent", `{"repeatability":{"standard_deviation":1,"relative":1}}`, engine.InvalidField, "repeatability.relative"},
		{"correlated without a time", `{"repeatability":{"correlated":{"standard_deviation":1}}}`, engine.MissingField, "repeatability.correlated.correlation_time"},
		{"correlated without a size", `{"repeatability":{"correlated":{"correlation_time":"1s"}}}`, engine.MissingField, "repeatability.correlated.standard_deviation"},
		{"correlated over no time", `{"repeatability":{"correlated":{"standard_deviation":1,"correlation_time":"0s"}}}`, engine.InvalidField, "repeatability.correlated.correlation_time"},
		{"zero resolution", `{"resolution":0}`, engine.InvalidField, "resolution"},
		{"negative resolution", `{"resolution":-0.1}`, engine.InvalidField, "resolution"},
		{"empty measuring interval", `{"measuring_interval":{}}`, engine.MissingField, "measuring_interval"},
		{"crossed measuring interval", `{"measuring_interval":{"lower":1,"upper":0}}`, engine.InvalidField, "measuring_interval.upper"},
		{"calibration without a time", `{"calibrations":[{"bias":1}]}`, engine.MissingField, "calibrations[0].valid_from"},
		{"calibration of a day", `{"calibrations":[{"valid_from":"2026-01-01"}]}`, engine.InvalidField, "calibrations[0].valid_from"},
		{"calibration without a zone", `{"calibrations":[{"valid_from":"2026-01-01T00:00:00"}]}`, engine.InvalidField, "calibrations[0].valid_from"},
		{"calibration of another age", `{"calibrations":[{"valid_from":"1500-01-01T00:00:00Z"}]}`, engine.InvalidField, "calibrations[0].valid_from"},
		{"bias without uncertainty", `{"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","bias":1}]}`, engine.MissingField, "calibrations[0].bias_standard_uncertainty"},
		{"bias without doubt", `{"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":0}]}`, engine.InvalidField, "calibrations[0].bias_standard_uncertainty"},
		{"negative uncertainty", `{"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":-0.1}]}`, engine.InvalidField, "calibrations[0].bias_standard_uncertainty"},
		{"two uncertainties", calibrated(`,"expanded_uncertainty":0.02,"coverage_factor":2`), engine.InvalidField, "calibrations[0].expanded_uncertainty"},
		{"expanded by what", `{"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","expanded_uncertainty":0.02}]}`, engine.MissingField, "calibrations[0].coverage_factor"},
		{"reference without its part", calibrated(`,"reference":"blocks"`), engine.MissingField, "calibrations[0].common_standard_uncertainty"},
		{"a part without reference", calibrated(`,"common_standard_uncertainty":0.001`), engine.MissingField, "calibrations[0].reference"},
		{"a part larger than the whole", calibrated(`,"reference":"blocks","common_standard_uncertainty":0.02`), engine.InvalidField, "calibrations[0].common_standard_uncertainty"},
		{"drift without a time", calibrated(`,"drift_standard_deviation":0.02`), engine.MissingField, "calibrations[0].drift_per"},
		{"drift in no time", calibrated(`,"drift_standard_deviation":0.02,"drift_per":"0s"`), engine.InvalidField, "calibrations[0].drift_per"},
		{"a time without drift", calibrated(`,"drift_per":"1s"`), engine.MissingField, "calibrations[0].drift_standard_deviation"},
		{"due before valid", calibrated(`,"due":"2025-01-01T00:00:00Z"`), engine.InvalidField, "calibrations[0].due"},
		{"relative bias in percent", calibrated(`,"relative_bias_standard_uncertainty":1`), engine.InvalidField, "calibrations[0].relative_bias_standard_uncertainty"},
		{"certificate of two lines", calibrated(`,"certificate":"a\nb"`), engine.InvalidField, "calibrations[0].certificate"},
		{"overlapping calibrations", `{"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":1},
			{"valid_from":"2026-01-01T01:00:00+01:00","bias_standard_uncertainty":1}]}`, engine.InvalidField, "calibrations[1].valid_from"},
		{"calibrations out of order", `{"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":1},
			{"valid_from":"2025-01-01T00:00:00Z","bias_standard_uncertainty":1}]}`, engine.InvalidField, "calibrations[1].valid_from"},
		{"too many calibrations", `{"calibrations":[` + strings.TrimSuffix(strings.Repeat(`{},`, 10_001), ",") + `]}`, engine.InvalidField, "calibrations"},
	} {
		t.Run(test.name, func(t *testing.T) {
			r.t = t
			a := r.call("PUT", "/v1/instruments/new", test.body).wantProblem(400, test.reason, test.field)
			message, _ := a.json("message").(string)
			if !strings.Contains(message, ";") || strings.HasSuffix(message, ".") {
				t.Errorf("message %q is not one sentence with a remedy", message)
			}
		})
	}
	r.t = t
	r.call("GET", "/v1/instruments/new", "").wantProblem(404, engine.NotFound, "id")
	r.call("DELETE", "/v1/instruments/new", "").wantProblem(404, engine.NotFound, "id")
	r.call("GET", "/v1/instruments/a%20b", "").wantProblem(400, engine.InvalidID, "id")
	r.call("GET", "/v1/instruments?page_size=-1", "").wantProblem(400, engine.InvalidField, "page_size")
	r.call("GET", "/v1/instruments?due=soon", "").wantProblem(400, engine.UnknownParameter, "due")
}

// Readings that rest on an instrument keep what they rest on.
func TestChangesThatReadingsForbid(t *testing.T) {
	r := startServer(t)
	const path = "/v1/instruments/calliper-7"
	r.call("PUT", path, calliperDeclaration).want(200)
	r.call("PUT", "/v1/quantities/gap", `{"unit":"mm"}`).want(200)
	r.call("POST", "/v1/quantities/gap/readings", `{"value":0.83,"instrument":"calliper-7"}`).want(200)
	r.call("PUT", path, strings.Replace(calliperDeclaration, `"mm"`, `"cm"`, 1)).wantProblem(400, engine.UnitFixed, "unit")
	r.call("PUT", path, `{"unit":"mm","repeatability":{"standard_deviation":0.02}}`).wantProblem(400, engine.InvalidField, "calibrations")
	r.call("PUT", path, strings.Replace(calliperDeclaration, `"repeatability":{"standard_deviation":0.02},`, ``, 1)).
		wantProblem(400, engine.InvalidField, "repeatability.standard_deviation")
	if reason, _ := r.call("PUT", "/v1/quantities/gap", `{"unit":"mm","scale":"LOG"}`).want(501).problem(); reason != string(engine.NotSupported) {
		t.Errorf("a logarithmic scale for readings with a bias: %s", reason)
	}
	r.call("PUT", "/v1/quantities/gap", `{"unit":"mm","repeatability":{"learned":{}}}`).want(200)
}

func TestReadingsThatTheirInstrumentForbids(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/instruments/thermometer", `{"unit":"Cel"}`).want(200)
	r.call("PUT", "/v1/instruments/feeler", `{"unit":"mm"}`).want(200)
	r.call("PUT", "/v1/quantities/gap", `{"unit":"mm"}`).want(200)
	r.call("PUT", "/v1/quantities/lining", liningDeclaration).want(200)
	for _, test := range []struct{ name, quantity, reading, reason string }{
		{"not declared", "gap", `{"value":1,"instrument":"calliper"}`, "UNKNOWN_INSTRUMENT"},
		{"not an ID", "gap", `{"value":1,"instrument":"a b"}`, "UNKNOWN_INSTRUMENT"},
		{"another unit", "gap", `{"value":1,"instrument":"thermometer"}`, "UNIT_MISMATCH"},
		{"nobody's repeatability", "gap", `{"value":1,"instrument":"feeler"}`, "NO_REPEATABILITY"},
		{"beyond a limit, of a trend", "lining", `{"above":1,"instrument":"feeler"}`, "NOT_SUPPORTED"},
		{"limits in disorder", "gap", `{"between":{"lower":2,"upper":1},"random_standard_uncertainty":1}`, "VALUE_OUT_OF_RANGE"},
		{"an occasion of no instrument", "lining", `{"value":1,"occasion":"round 3"}`, "NOT_SUPPORTED"},
	} {
		a := r.call("POST", "/v1/quantities/"+test.quantity+"/readings", test.reading).want(200)
		detail, _ := a.json("result", "detail").(string)
		if a.json("result", "reason") != test.reason || !strings.Contains(detail, ";") {
			t.Errorf("%s: %s", test.name, a.body)
		}
	}
}
