package server_test

import (
	"encoding/json"
	"math"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/testing/protocmp"
	"google.golang.org/protobuf/types/known/durationpb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// roomWalk is a store room that warms or cools by 1 K in an hour.
const roomWalk = `{"unit":"Cel","prior":{"mean":-20,"standard_deviation":0.5,"time":"2026-03-01T12:00:00Z"},
 "repeatability":{"standard_deviation":0.3},"dynamics":{"random_walk":{"standard_deviation":1,"per":"3600s"}},
 "tolerance":{"upper":-18},"breach_horizon":"14400s"}`

// crossedByWalk integrates the reflection principle over the belief at the start by
// the midpoint rule: from x below the limit a random walk of standard deviation s
// at the end has crossed with probability erfc((limit-x)/(s √2)) (Bachelier 1900,
// from memory).
func crossedByWalk(mean, sd, limit, s float64) float64 {
	const n = 200_000
	step := 20 * sd / n
	sum := 0.0
	for i := range n {
		x := mean - 10*sd + (float64(i)+0.5)*step
		crossed := 1.0
		if x < limit {
			crossed = math.Erfc((limit - x) / (s * math.Sqrt2))
		}
		z := (x - mean) / sd
		sum += crossed * math.Exp(-z*z/2)
	}
	return sum * step / (sd * math.Sqrt(2*math.Pi))
}

func number(t *testing.T, v any) float64 {
	t.Helper()
	n, _ := v.(json.Number)
	x, err := n.Float64()
	if err != nil {
		t.Fatalf("%v is no number", v)
	}
	return x
}

func TestForecastFollowsTheWalk(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/room-2", roomWalk).want(200)
	f := r.call("GET", "/v1/quantities/room-2/forecast?steps=4&coverage_probability=0.9", "").want(200)
	if f.json("horizon") != "14400s" || f.json("time") != "2026-03-01T12:00:00Z" || f.json("unit") != "Cel" || f.json("revision") != json.Number("1") {
		t.Errorf("%s", f.body)
	}
	steps := f.json("steps").([]any)
	if len(steps) != 4 {
		t.Fatalf("%d steps", len(steps))
	}
	for i, step := range steps {
		s := step.(map[string]any)
		hours := float64(i + 1)
		sd := math.Sqrt(0.25 + hours)
		wantNumber(t, s["mean"], -20)
		wantNumber(t, s["standard_deviation"], sd)
		interval, breach, crossed := s["interval"].(map[string]any), s["breach"].(map[string]any), s["crossed"].(map[string]any)
		// The quantile of 0.95 is 1.6448536269514722 (Abramowitz and Stegun 1964, table 26.5).
		wantNumber(t, interval["upper"], -20+1.6448536269514722*sd)
		wantNumber(t, interval["coverage_probability"], 0.9)
		wantNumber(t, breach["above"], math.Erfc(2/(sd*math.Sqrt2))/2)
		want := crossedByWalk(-20, 0.5, -18, math.Sqrt(hours))
		if got := number(t, crossed["either"]); math.Abs(got-want) > 1e-6 {
			t.Errorf("crossed by hour %v with %v, want %v", hours, got, want)
		}
		if got := s["time"]; got != noon.Add(time.Duration(i+1)*time.Hour).Format(time.RFC3339) {
			t.Errorf("step %d at %v", i, got)
		}
	}
	last := steps[3].(map[string]any)["crossed"].(map[string]any)["either"]
	if got := f.json("time_to_breach", "probability"); got != last {
		t.Errorf("crossed within the horizon with %v, at its end with %v", got, last)
	}
	// Half is not reached within four hours, as crossedByWalk gives 0.332 there.
	if f.json("time_to_breach", "median") != nil || f.json("time_to_breach", "upper_decile") != nil {
		t.Errorf("%s", f.json("time_to_breach"))
	}
	decile, err := time.ParseDuration(f.json("time_to_breach", "lower_decile").(string))
	if err != nil {
		t.Fatal(err)
	}
	if got := crossedByWalk(-20, 0.5, -18, math.Sqrt(decile.Hours())); math.Abs(got-0.1) > 1e-4 {
		t.Errorf("crossed with %v by the lower decile %v", got, decile)
	}
}

func TestForecastOfWhatDoesNotMove(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", `{"unit":"mm","prior":{"mean":0.8,"standard_deviation":0.05},"tolerance":{"upper":0.85}}`).want(200)
	f := r.call("GET", "/v1/quantities/gap/forecast?horizon=60.5s", "").want(200)
	steps := f.json("steps").([]any)
	if len(steps) != 10 || f.json("horizon") != "60.500s" {
		t.Errorf("%d steps up to %v", len(steps), f.json("horizon"))
	}
	// One standard deviation above the mean: 0.15865525393145705.
	wantNumber(t, f.json("time_to_breach", "probability"), 0.15865525393145705)
	if f.json("time_to_breach", "lower_decile") != "0s" || f.json("time_to_breach", "median") != nil {
		t.Errorf("%v", f.json("time_to_breach"))
	}
	text := string(r.call("GET", "/v1/quantities/gap/forecast?horizon=60s&steps=1", "", "Accept", "text/plain").want(200).body)
	if !strings.Contains(text, "crossed       with probability 0.1 at once, 0.5 not within the horizon, 0.9 not within the horizon") {
		t.Errorf("the page reads\n%s", text)
	}
}

func TestForecastNamesWhatItLacks(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/vague", `{"unit":"mm","tolerance":{"upper":1},"breach_horizon":"3600s"}`).want(200)
	f := r.call("GET", "/v1/quantities/vague/forecast?steps=1", "").want(200)
	if diff := cmp.Diff([]any{"steps", "time_to_breach"}, f.json("undetermined")); diff != "" || f.json("time_to_breach") != nil {
		t.Errorf("%s", f.body)
	}
	step := f.json("steps").([]any)[0].(map[string]any)
	if len(step) != 1 || step["time"] != "2026-03-01T13:00:00Z" {
		t.Errorf("step %v", step)
	}
	r.call("PUT", "/v1/quantities/free", `{"unit":"mm","prior":{"mean":0,"standard_deviation":1}}`).want(200)
	f = r.call("GET", "/v1/quantities/free/forecast?horizon=1s&steps=1", "").want(200)
	if got := f.json("undetermined").([]any); len(got) != 0 || f.json("time_to_breach") != nil || f.json("steps").([]any)[0].(map[string]any)["breach"] != nil {
		t.Errorf("without a tolerance: %s", f.body)
	}
}

func TestRefusedOutlooksSayWhy(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/room-2", roomWalk).want(200)
	r.call("PUT", "/v1/quantities/gap", flatDeclaration).want(200)
	r.call("PUT", "/v1/quantities/learned", `{"repeatability":{"learned":{}}}`).want(200)
	for _, test := range []struct {
		path   string
		code   int
		reason engine.Reason
		field  string
	}{
		{"none/forecast", 404, engine.NotFound, "quantity"},
		{"none/belief:budget", 404, engine.NotFound, "quantity"},
		{"a%20b/forecast", 400, engine.InvalidID, "quantity"},
		{"gap/forecast", 400, engine.MissingField, "horizon"},
		{"room-2/forecast?horizon=0s", 400, engine.InvalidField, "horizon"},
		{"room-2/forecast?horizon=-5s", 400, engine.InvalidField, "horizon"},
		{"room-2/forecast?horizon=4h", 400, engine.InvalidField, "horizon"},
		{"room-2/forecast?horizon=14400", 400, engine.InvalidField, "horizon"},
		{"room-2/forecast?horizon=9467280000s", 400, engine.InvalidField, "horizon"},
		{"room-2/forecast?horizon=8000000000s", 400, engine.InvalidField, "horizon"},
		{"room-2/forecast?horizon.seconds=5", 400, engine.UnknownParameter, "horizon.seconds"},
		{"room-2/forecast?steps=0", 400, engine.InvalidField, "steps"},
		{"room-2/forecast?steps=-1", 400, engine.InvalidField, "steps"},
		{"room-2/forecast?steps=1001", 400, engine.InvalidField, "steps"},
		{"room-2/forecast?steps=1.5", 400, engine.InvalidField, "steps"},
		{"room-2/forecast?coverage_probability=1", 400, engine.InvalidField, "coverage_probability"},
		{"room-2/forecast?time=2026-03-01T12:00:00Z", 400, engine.UnknownParameter, "time"},
		{"room-2/belief:budget?time=noon", 400, engine.InvalidField, "time"},
		{"room-2/belief:budget?time=1500-01-01T00:00:00Z", 400, engine.InvalidField, "time"},
		{"room-2/belief:budget?threshold=1", 400, engine.UnknownParameter, "threshold"},
		{"learned/belief:budget", 501, engine.NotSupported, "quantity"},
		{"room-2/belief:budgets", 404, engine.NotFound, ""},
	} {
		t.Run(test.path, func(t *testing.T) {
			r.t = t
			a := r.call("GET", "/v1/quantities/"+test.path, "").wantProblem(test.code, test.reason, test.field)
			if message, _ := a.json("message").(string); !strings.Contains(message, ";") || strings.HasSuffix(message, ".") {
				t.Errorf("message %q is not one sentence with a remedy", message)
			}
		})
	}
}

// One reading under a vague prior: its variance is that of the bias, 0.03^2, of
// which 0.02^2 are common, and of the noise, 0.02^2.
func TestBudgetSplitsTheVariance(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/instruments/calliper-7", calliperDeclaration).want(200)
	r.call("PUT", "/v1/quantities/a%2Fgap", flatDeclaration).want(200)
	const path = "/v1/quantities/a%2Fgap/belief:budget"
	if got := r.call("GET", path, "").want(200); got.json("variance") != nil || len(got.json("parts").([]any)) != 0 || len(got.json("undetermined").([]any)) == 0 {
		t.Errorf("of nothing: %s", got.body)
	}
	r.call("POST", "/v1/quantities/a%2Fgap/readings", `{"value":0.83,"instrument":"calliper-7"}`).want(200)
	b := r.call("GET", path, "").want(200)
	wantNumber(t, b.json("variance"), 0.0013)
	wantNumber(t, b.json("standard_deviation"), math.Sqrt(0.0013))
	parts := b.json("parts").([]any)
	want := []struct {
		source, instrument, reference string
		variance                      float64
	}{{"BIAS", "calliper-7", "", 0.0005}, {"REFERENCE", "", "gauge blocks 4", 0.0004}, {"REPEATABILITY", "calliper-7", "", 0.0004}}
	if len(parts) != len(want) {
		t.Fatalf("%s", b.body)
	}
	for i, w := range want {
		p := parts[i].(map[string]any)
		if p["source"] != w.source || p["instrument"] != w.instrument || p["reference"] != w.reference {
			t.Errorf("part %v, want %v", p, w)
		}
		wantNumber(t, p["variance"], w.variance)
		wantNumber(t, p["standard_deviation"], math.Sqrt(w.variance))
		wantNumber(t, p["share"], w.variance/0.0013)
	}
	text := string(r.call("GET", path, "", "Accept", "text/plain").want(200).body)
	if !strings.Contains(text, "38.5 %") || !strings.Contains(text, "100.0 %") {
		t.Errorf("the page reads\n%s", text)
	}
}

func TestOutlooksAreTheSameOverBothProtocols(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/room-2", roomWalk).want(200)
	r.call("POST", "/v1/quantities/room-2/readings", `{"value":-19.5}`).want(200)
	forecast, err := r.beliefs.ForecastBelief(t.Context(), &leadlinev1.ForecastBeliefRequest{
		Quantity: "room-2", Horizon: durationpb.New(90 * time.Minute), Steps: proto.Int32(3)})
	if err != nil {
		t.Fatal(err)
	}
	overHTTP := new(leadlinev1.Forecast)
	unmarshal(t, r.call("GET", "/v1/quantities/room-2/forecast?horizon=5400s&steps=3", "").want(200), overHTTP)
	if diff := cmp.Diff(forecast, overHTTP, protocmp.Transform()); diff != "" {
		t.Errorf("forecast (-gRPC +HTTP):\n%s", diff)
	}
	budget, err := r.beliefs.GetBudget(t.Context(), &leadlinev1.GetBudgetRequest{Quantity: "room-2"})
	if err != nil {
		t.Fatal(err)
	}
	budgetOverHTTP := new(leadlinev1.Budget)
	unmarshal(t, r.call("GET", "/v1/quantities/room-2/belief:budget", "").want(200), budgetOverHTTP)
	if diff := cmp.Diff(budget, budgetOverHTTP, protocmp.Transform()); diff != "" {
		t.Errorf("budget (-gRPC +HTTP):\n%s", diff)
	}
}
