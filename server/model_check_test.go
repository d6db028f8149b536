package server_test

import (
	"encoding/json"
	"math"
	"net/url"
	"strings"
	"testing"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

const (
	ropeDeclaration = `{"unit":"mm","prior":{"mean":10,"standard_deviation":3},"repeatability":{"standard_deviation":4}}`
	ropePath        = "/v1/quantities/winch.rope"
)

// bothTails is the probability that a standard normal variable is at least as far out as
// z on either side (DLMF 7.2.2).
func bothTails(z float64) float64 { return math.Erfc(math.Abs(z) / math.Sqrt2) }

// ropeReadings posts 22.5 and 40 to a level that is N(10, 3^2) at first, with
// noise of 4, and returns the tail probabilities of the two. The first is
// predicted by N(10, 9 + 16). By Bayes' rule the level is then N(14.5, 144/25), so the
// second is predicted by N(14.5, 5.76 + 16).
func ropeReadings(r *running) [2]float64 {
	r.t.Helper()
	r.call("PUT", ropePath, ropeDeclaration).want(200)
	for _, body := range []string{
		`{"value":22.5,"time":"2026-03-01T11:00:00Z","reading_id":"rope-1"}`, `{"value":40,"time":"2026-03-01T11:30:00Z","reading_id":"rope-2"}`,
	} {
		if got := r.call("POST", ropePath+"/readings", body).want(200).json("result", "status"); got != "APPLIED" {
			r.t.Fatalf("status %v", got)
		}
	}
	return [2]float64{bothTails(12.5 / 5), bothTails(25.5 / math.Sqrt(21.76))}
}

func wantClose(t testing.TB, name string, got any, want float64) {
	t.Helper()
	number, _ := got.(json.Number)
	x, err := number.Float64()
	if err != nil || !(math.Abs(x/want-1) < 1e-9) {
		t.Errorf("%s is %v, want %v", name, got, want)
	}
}

func TestReadingsAreAssessed(t *testing.T) {
	r := startServer(t)
	tails := ropeReadings(r)
	all := r.call("GET", ropePath+"/assessments", "").want(200)
	list, _ := all.json("assessments").([]any)
	if len(list) != 2 || all.json("next_page_token") != "" {
		t.Fatalf("assessments %s", all.body)
	}
	for i, id := range []string{"rope-1", "rope-2"} {
		a := list[i].(map[string]any)
		if got := a["reading"].(map[string]any)["reading_id"]; got != id {
			t.Errorf("reading %v, want %s", got, id)
		}
		wantClose(t, id, a["tail_probability"], tails[i])
		if a["outlying"] != (i == 1) || a["outlier_probability"] != nil || a["outlier_probability_in_hindsight"] != nil {
			t.Errorf("%s: %v", id, a)
		}
	}

	first := r.call("GET", ropePath+"/assessments?page_size=1", "").want(200)
	token, _ := first.json("next_page_token").(string)
	second := r.call("GET", ropePath+"/assessments?page_size=1&page_token="+url.QueryEscape(token), "").want(200)
	if list, _ := second.json("assessments").([]any); len(list) != 1 || !strings.Contains(string(second.body), "rope-2") || second.json("next_page_token") != "" {
		t.Errorf("second page %s", second.body)
	}
	r.call("GET", ropePath+"/assessments?hindsight=yes", "").wantProblem(400, engine.InvalidField, "hindsight")
	r.call("GET", "/v1/quantities/unknown/assessments", "").wantProblem(404, engine.NotFound, "quantity")

	page := r.call("GET", ropePath+"/assessments", "", "Accept", "text/plain").want(200)
	if !strings.Contains(string(page.body), "4.6e-08 outlying") {
		t.Errorf("the page reads\n%s", page.body)
	}
	rpc, err := r.readings.AssessReadings(t.Context(), &leadlinev1.AssessReadingsRequest{Quantity: "winch.rope"})
	if err != nil || len(rpc.GetAssessments()) != 2 || !rpc.GetAssessments()[1].GetOutlying() {
		t.Errorf("over gRPC: %v, %v", rpc, err)
	}
}

func TestBeliefTellsOfTheModel(t *testing.T) {
	r := startServer(t)
	tails := ropeReadings(r)
	b := r.call("GET", ropePath+"/belief", "").want(200)
	wantClose(t, "the last reading", b.json("last_reading", "tail_probability"), tails[1])
	for _, test := range []struct {
		path []string
		want any
	}{
		{[]string{"last_reading", "time"}, "2026-03-01T11:30:00Z"},
		{[]string{"last_reading", "outlying"}, true},
		{[]string{"last_reading", "outlier_probability"}, nil},
		{[]string{"method"}, "SUMS"},
		{[]string{"scale"}, nil},
		{[]string{"geometric_mean"}, nil},
		{[]string{"model_check", "scored_count"}, json.Number("2")},
		{[]string{"model_check", "outlying_count"}, json.Number("1")},
		{[]string{"model_check", "coverage_95"}, json.Number("0")}, // z is 2.5 and 5.5
		{[]string{"model_check", "window"}, nil},
		{[]string{"model_check", "quantity"}, nil},
	} {
		if got := b.json(test.path...); got != test.want {
			t.Errorf("%s is %v, want %v", strings.Join(test.path, "."), got, test.want)
		}
	}
	z1, z2 := 2.5, 25.5/math.Sqrt(21.76)
	wantClose(t, "mean square", b.json("model_check", "mean_squared_normal_score"), (z1*z1+z2*z2)/2)

	check := r.call("GET", ropePath+"/model_check", "").want(200)
	for name, want := range map[string]any{
		"quantity": "winch.rope", "window": json.Number("64"), "scored_count": json.Number("2"), "explanation": nil, "lag_1": nil,
		"result": b.json("model_check", "result"),
	} {
		if got := check.json(name); got != want {
			t.Errorf("%s is %v, want %v", name, got, want)
		}
	}
	if page := r.call("GET", ropePath+"/model_check", "", "Accept", "text/plain").want(200); !strings.Contains(string(page.body), "model check") {
		t.Errorf("the page reads\n%s", page.body)
	}
	r.call("GET", "/v1/quantities/unknown/model_check", "").wantProblem(404, engine.NotFound, "quantity")
}

// TestStepIsListed: readings 3 standard deviations above a level that is all but known.
func TestStepIsListed(t *testing.T) {
	r := startServer(t)
	r.call("PUT", ropePath, `{"unit":"mm","prior":{"mean":10,"standard_deviation":0.001},"repeatability":{"standard_deviation":1},
	 "step_detection":{"false_alarm_interval":1000}}`).want(200)
	if got := string(r.call("GET", ropePath+"/steps", "").want(200).body); got != "{\"steps\":[]}\n" {
		t.Errorf("steps before any reading: %s", got)
	}
	r.call("POST", ropePath+"/readings", `{"value":9.5,"time":"2026-03-01T10:59:00Z"}`).want(200)
	for _, minute := range []string{"00", "01", "02", "03", "04", "05"} {
		r.call("POST", ropePath+"/readings", `{"value":13,"time":"2026-03-01T11:`+minute+`:00Z"}`).want(200)
	}
	answer := r.call("GET", ropePath+"/steps", "").want(200)
	list, _ := answer.json("steps").([]any)
	if len(list) == 0 {
		t.Fatal("no step is listed")
	}
	step := list[0].(map[string]any)
	if step["direction"] != "UP" || step["since"] != "2026-03-01T10:59:00Z" || step["create_time"] != "2026-03-01T12:00:00Z" {
		t.Errorf("step %v", step)
	}
	b := r.call("GET", ropePath+"/belief", "").want(200)
	if got := b.json("model_check", "last_step", "direction"); got != "UP" {
		t.Errorf("the belief's last step is %v", b.json("model_check", "last_step"))
	}
	if page := r.call("GET", ropePath+"/steps", "", "Accept", "text/plain").want(200); !strings.Contains(string(page.body), "UP") {
		t.Errorf("the page reads\n%s", page.body)
	}
	r.call("GET", "/v1/quantities/unknown/steps", "").wantProblem(404, engine.NotFound, "quantity")
}

// TestIndicationsAreListedAsSent: what was indicated is shown as it was sent, applied or not.
func TestIndicationsAreListedAsSent(t *testing.T) {
	r := startServer(t)
	const path = "/v1/quantities/undeclared/readings"
	for _, body := range []string{
		`{"above":40,"time":"2026-03-01T11:00:00Z"}`, `{"below":-3,"time":"2026-03-01T11:01:00Z"}`,
		`{"between":{"lower":18,"upper":20},"time":"2026-03-01T11:02:00Z","unit":"mm"}`, `{"value":7,"sample_count":60,"time":"2026-03-01T11:03:00Z"}`,
	} {
		r.call("POST", path, body).want(200)
	}
	list := r.call("GET", "/v1/readings?status=REFUSED", "").want(200)
	for _, want := range []string{`"above":40`, `"below":-3`, `"between":{"lower":18,"upper":20}`, `"value":7`, `"sample_count":60`} {
		if n := strings.Count(string(list.body), want); n != 1 {
			t.Errorf("%s is there %d times: %s", want, n, list.body)
		}
	}
	page := r.call("GET", "/v1/readings?status=REFUSED", "", "Accept", "text/plain").want(200)
	for _, want := range []string{" above 40 ", " below -3 ", " 18 to 20 mm ", " 7, mean of 60 "} {
		if !strings.Contains(string(page.body), want) {
			t.Errorf("%q isn't on the page\n%s", want, page.body)
		}
	}
}
