package server_test

import (
	"encoding/json"
	"fmt"
	"math"
	"net/url"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"
	"google.golang.org/protobuf/testing/protocmp"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

const calliperDeclaration = `{"unit":"mm","description":"calliper of the workshop",
 "repeatability":{"standard_deviation":0.02},
 "calibrations":[{"valid_from":"2026-01-10T00:00:00Z","bias":0.01,"bias_standard_uncertainty":0.03,
  "reference":"gauge blocks 4","common_standard_uncertainty":0.02,"due":"2026-02-10T00:00:00Z"}]}`

const flatDeclaration = `{"unit":"mm","repeatability":{"standard_deviation":0.05}}`

func TestInstrumentFromDeclarationToRetirement(t *testing.T) {
	r := startServer(t)
	const path = "/v1/instruments/calliper-7"
	declared := r.call("PUT", path, calliperDeclaration).want(200)
	if got := declared.header.Get("ETag"); got != `"1"` || declared.json("revision") != json.Number("1") {
		t.Errorf("ETag %s of %s", got, declared.body)
	}
	if got := r.call("PUT", path, calliperDeclaration).want(200); string(got.body) != string(declared.body) {
		t.Errorf("an equal declaration gave %s after %s", got.body, declared.body)
	}
	sentBack := r.call("PUT", path, string(r.call("GET", path, "").want(200).body)).want(200)
	if string(sentBack.body) != string(declared.body) {
		t.Errorf("what was read became %s", sentBack.body)
	}
	r.call("PUT", "/v1/quantities/gap", flatDeclaration).want(200)
	posted := r.call("POST", "/v1/quantities/gap/readings", `{"value":0.83,"instrument":"calliper-7"}`).want(200)
	if posted.json("result", "status") != "APPLIED" {
		t.Fatalf("%s", posted.body)
	}
	if got := r.call("GET", path, "").want(200); got.json("quantity_count") != json.Number("1") || got.json("rebuilding_count") != json.Number("0") {
		t.Errorf("counts of %s", got.body)
	}
	retired := r.call("DELETE", path, "").want(200)
	if retired.json("retire_time") == nil {
		t.Errorf("no retire_time in %s", retired.body)
	}
	if got := r.call("DELETE", path, "").want(200); string(got.body) != string(retired.body) {
		t.Errorf("second DELETE %s, first %s", got.body, retired.body)
	}
	refused := r.call("POST", "/v1/quantities/gap/readings", `{"value":0.83,"instrument":"calliper-7"}`).want(200)
	if got := refused.json("result", "reason"); got != "INSTRUMENT_RETIRED" {
		t.Errorf("reason %v", got)
	}
	for query, want := range map[string]int{"": 0, "?show_retired=true": 1} {
		if got := r.call("GET", "/v1/instruments"+query, "").want(200).json("instruments").([]any); len(got) != want {
			t.Errorf("%q lists %v", query, got)
		}
	}
	revived := r.call("PUT", path, calliperDeclaration).want(200)
	if revived.json("retire_time") != nil || revived.json("revision") != json.Number("2") {
		t.Errorf("revived: %s", revived.body)
	}
}

// A vague prior and one reading y under a bias b with uncertainty u and noise r:
// the mean is y - b and the variance u^2 + r^2 (sums of independent normals).
func TestBeliefKnowsWhatItsInstrumentMayBeOffBy(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/instruments/calliper-7", calliperDeclaration).want(200)
	r.call("PUT", "/v1/quantities/gap", flatDeclaration).want(200)
	b := r.call("POST", "/v1/quantities/gap/readings", `{"value":0.83,"instrument":"calliper-7","occasion":"morning round"}`).want(200)
	wantNumber(t, b.json("belief", "mean"), 0.82)
	wantNumber(t, b.json("belief", "standard_deviation"), math.Sqrt(0.03*0.03+0.02*0.02))

	bias := b.json("belief", "biases").([]any)[0].(map[string]any)
	wantNumber(t, bias["mean"], 0.01) // one reading alone tells nothing of it
	wantNumber(t, bias["standard_deviation"], 0.03)
	if bias["instrument"] != "calliper-7" || bias["reference"] != "gauge blocks 4" || bias["valid_from"] != "2026-01-10T00:00:00Z" {
		t.Errorf("bias %v", bias)
	}
	reference := b.json("belief", "references").([]any)[0].(map[string]any)
	wantNumber(t, reference["mean"], 0)
	wantNumber(t, reference["standard_deviation"], 1)
	// The reading of March is made after the calibration was due in February.
	if diff := cmp.Diff(any(map[string]any{"overdue": json.Number("1"), "not_yet_valid": json.Number("0"), "uncalibrated": json.Number("0")}), b.json("belief", "flagged")); diff != "" {
		t.Errorf("flagged (-want +got):\n%s", diff)
	}
	if b.json("belief", "linearised") != false || b.json("belief", "resolution_as_variance") != false {
		t.Errorf("%s", b.body)
	}
	if got := b.json("belief", "predictive", "instrument"); got != "calliper-7" {
		t.Errorf("predictive of instrument %v", got)
	}
	// By another instrument, without bias, the next indication has the level's
	// variance and that of its own noise.
	r.call("PUT", "/v1/instruments/feeler", `{"unit":"mm","repeatability":{"standard_deviation":0.05}}`).want(200)
	other := r.call("GET", "/v1/quantities/gap/belief?instrument=feeler", "").want(200)
	wantNumber(t, other.json("predictive", "mean"), 0.82)
	wantNumber(t, other.json("predictive", "standard_deviation"), math.Sqrt(0.0013+0.05*0.05))
	if got := other.json("predictive", "instrument"); got != "feeler" {
		t.Errorf("predictive of instrument %v", got)
	}
}

func TestReadingsAreListedWithTheirCalibration(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/instruments/calliper-7", calliperDeclaration).want(200)
	r.call("PUT", "/v1/instruments/feeler", `{"unit":"mm"}`).want(200)
	r.call("PUT", "/v1/quantities/gap", flatDeclaration).want(200)
	r.call("POST", "/v1/readings", `{"readings":[
		{"quantity":"gap","value":0.81,"time":"2026-01-01T00:00:00Z","instrument":"calliper-7"},
		{"quantity":"gap","value":0.82,"time":"2026-02-01T00:00:00Z","instrument":"calliper-7","occasion":"round 3"},
		{"quantity":"gap","value":0.83,"time":"2026-02-11T00:00:00Z","instrument":"calliper-7"},
		{"quantity":"gap","value":0.83,"time":"2026-02-12T00:00:00Z","instrument":"feeler"},
		{"quantity":"gap","value":0.83,"time":"2026-02-13T00:00:00Z"},
		{"quantity":"gap","value":0.83,"time":"2026-02-14T00:00:00Z","instrument":"none"}]}`).want(200)
	list := r.call("GET", "/v1/quantities/gap/readings", "").want(200).json("readings").([]any)
	for i, want := range []any{"NOT_YET_VALID", "IN_FORCE", "OVERDUE", "UNCALIBRATED", nil, nil} {
		if got := list[i].(map[string]any)["calibration"]; got != want {
			t.Errorf("reading %d: calibration %v, want %v", i, got, want)
		}
	}
	if got := list[1].(map[string]any)["occasion"]; got != "round 3" {
		t.Errorf("occasion %v", got)
	}
	if got := list[5].(map[string]any)["reason"]; got != "UNKNOWN_INSTRUMENT" {
		t.Errorf("reason %v", got)
	}
	text := string(r.call("GET", "/v1/quantities/gap/readings", "", "Accept", "text/plain").want(200).body)
	if !strings.Contains(text, "APPLIED OVERDUE") || strings.Contains(text, "IN_FORCE") {
		t.Errorf("the page reads\n%s", text)
	}
}

// Every way in gives the same belief, occasion and all.
func TestOccasionsArriveByEveryWay(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/instruments/gauge", `{"unit":"mm","repeatability":{"standard_deviation":0.01,"between_occasions":0.1},
		"calibrations":[{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":0.001}]}`).want(200)
	reading := func(quantity, minute, occasion string) string {
		return fmt.Sprintf(`{"quantity":%q,"value":0.8%s,"time":"2026-03-01T11:0%s:00Z","instrument":"gauge","occasion":%q}`, quantity, minute, minute, occasion)
	}
	var all []*leadlinev1.Reading
	for _, id := range []string{"single", "batch", "strict", "grpc", "stream"} {
		r.call("PUT", "/v1/quantities/"+id, flatDeclaration).want(200)
	}
	for i, occasion := range []string{"a", "a", "b"} {
		minute := fmt.Sprint(i)
		r.call("POST", "/v1/quantities/single/readings", reading("single", minute, occasion)).want(200)
		r.call("POST", "/v1/readings", `{"readings":[`+reading("batch", minute, occasion)+`]}`).want(200)
		// An escape sends the body through the strict decoder.
		r.call("POST", "/v1/readings", strings.Replace(`{"readings":[`+reading("strict", minute, occasion)+`]}`, "gauge", `gau\u0067e`, 1)).want(200)
		m := new(leadlinev1.Reading)
		unmarshal(t, answer{t: t, body: []byte(reading("grpc", minute, occasion))}, m)
		all = append(all, m)
	}
	if _, err := r.readings.PostReadings(t.Context(), &leadlinev1.PostReadingsRequest{Readings: all}); err != nil {
		t.Fatal(err)
	}
	for _, m := range all {
		m.Quantity = "stream"
	}
	streamOnce(t, r, all)
	// Two occasions of variance 0.1^2, the first read twice with noise of variance
	// 0.01^2: v1 = 0.01 + 0.0001/2 and v2 = 0.01 + 0.0001 combine to
	// v1 v2/(v1+v2), and the bias adds 1e-6 (by hand).
	v1, v2 := 0.01005, 0.0101
	want := math.Sqrt(v1*v2/(v1+v2) + 1e-6)
	for _, id := range []string{"single", "batch", "strict", "grpc", "stream"} {
		b := r.call("GET", "/v1/quantities/"+id+"/belief", "").want(200)
		if b.json("reading_count") != json.Number("3") {
			t.Errorf("%s: %s", id, b.body)
		}
		wantNumber(t, b.json("standard_deviation"), want)
	}
}

func streamOnce(t *testing.T, r *running, readings []*leadlinev1.Reading) {
	t.Helper()
	stream, err := r.readings.StreamReadings(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := stream.Send(&leadlinev1.StreamReadingsRequest{Sequence: 1, Readings: readings}); err != nil {
		t.Fatal(err)
	}
	a, err := stream.Recv()
	if err != nil || a.GetAppliedCount() != uint32(len(readings)) {
		t.Fatalf("%v, %v", a, err)
	}
	if err := stream.CloseSend(); err != nil {
		t.Fatal(err)
	}
}

// A changed instrument rebuilds what rests on it.
func TestCorrectedCalibrationMovesTheBelief(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/instruments/calliper-7", calliperDeclaration).want(200)
	r.call("PUT", "/v1/quantities/gap", flatDeclaration).want(200)
	r.call("POST", "/v1/quantities/gap/readings", `{"value":0.83,"instrument":"calliper-7"}`).want(200)
	r.call("PUT", "/v1/instruments/calliper-7", strings.Replace(calliperDeclaration, `"bias":0.01`, `"bias":0.03`, 1)).want(200)
	deadline := time.Now().Add(10 * time.Second)
	for r.call("GET", "/v1/instruments/calliper-7", "").want(200).json("rebuilding_count") != json.Number("0") {
		if time.Now().After(deadline) {
			t.Fatal("the rebuild does not end")
		}
	}
	wantNumber(t, r.call("GET", "/v1/quantities/gap/belief", "").want(200).json("mean"), 0.80)
}

func TestInstrumentsTakeEveryID(t *testing.T) {
	r := startServer(t)
	for _, id := range awkwardIDs {
		plain := url.PathEscape(id)
		for _, escaped := range []string{plain, strings.ReplaceAll(plain, ":", "%3A")} {
			path := "/v1/instruments/" + escaped
			r.call("PUT", path, calliperDeclaration).want(200)
			if got := r.call("GET", path, "").want(200).json("id"); got != id {
				t.Errorf("%s gives id %v", path, got)
			}
		}
		overGRPC, err := r.instruments.GetInstrument(t.Context(), &leadlinev1.GetInstrumentRequest{Id: id})
		if err != nil {
			t.Fatal(err)
		}
		overHTTP := new(leadlinev1.Instrument)
		unmarshal(t, r.call("GET", "/v1/instruments/"+plain, ""), overHTTP)
		if diff := cmp.Diff(overGRPC, overHTTP, protocmp.Transform()); diff != "" {
			t.Errorf("(-gRPC +HTTP):\n%s", diff)
		}
	}
	for _, size := range []int{1, 4, 100} {
		got, _ := r.pages(fmt.Sprintf("/v1/instruments?page_size=%d", size), "instruments", "id")
		if len(got) != len(awkwardIDs) {
			t.Errorf("by %d: %v", size, got)
		}
		if got, _ = r.pages(fmt.Sprintf("/v1/instruments?prefix=a%%2F&page_size=%d", size), "instruments", "id"); len(got) != 4 {
			t.Errorf("by %d below a/: %v", size, got)
		}
	}
	token := r.call("GET", "/v1/instruments?page_size=1", "").want(200).json("next_page_token").(string)
	r.call("GET", "/v1/quantities?page_token="+url.QueryEscape(token), "").wantProblem(400, engine.InvalidField, "page_token")
	_, err := r.instruments.RetireInstrument(t.Context(), &leadlinev1.RetireInstrumentRequest{Id: "none"})
	if status.Code(err) != codes.NotFound {
		t.Errorf("retiring what isn't there: %v", err)
	}
}

func TestConditionsGuardAnInstrument(t *testing.T) {
	r := startServer(t)
	const path = "/v1/instruments/calliper-7"
	r.call("PUT", path, calliperDeclaration, "If-Match", "*").wantProblem(409, engine.ETagMismatch, "etag")
	tag := r.call("PUT", path, calliperDeclaration, "If-None-Match", "*").want(200).header.Get("ETag")
	r.call("PUT", path, calliperDeclaration, "If-None-Match", "*").wantProblem(409, engine.AlreadyExists, "")
	other := strings.Replace(calliperDeclaration, `"bias":0.01`, `"bias":0.02`, 1)
	r.call("PUT", path, other, "If-Match", `"99"`).wantProblem(409, engine.ETagMismatch, "etag")
	newTag := r.call("PUT", path, other, "If-Match", tag).want(200).header.Get("ETag")
	if newTag == tag {
		t.Errorf("ETag %s stayed though the declaration changed", tag)
	}
	r.call("PUT", path, strings.Replace(other, "{", `{"etag":"1",`, 1)).wantProblem(409, engine.ETagMismatch, "etag")
	r.call("PUT", path, strings.Replace(other, "{", `{"revision":1,`, 1)).wantProblem(400, engine.InvalidField, "revision")
	r.call("PUT", path, strings.Replace(other, "{", `{"create_time":"2020-01-01T00:00:00Z",`, 1)).wantProblem(400, engine.InvalidField, "create_time")
	// What only counts may have changed since it was read.
	r.call("PUT", path, strings.Replace(other, "{", `{"quantity_count":7,"rebuilding_count":3,`, 1)).want(200)
	r.call("DELETE", path+"?etag=1", "").wantProblem(409, engine.ETagMismatch, "etag")
	r.call("DELETE", path, "", "If-Match", newTag).want(200)
}
