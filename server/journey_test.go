package server_test

import (
	"encoding/json"
	"math"
	"net/url"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/testing/protocmp"
	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

func TestDeclarePostAskRetire(t *testing.T) {
	r := startServer(t)
	const path = "/v1/quantities/pump3.coupling-gap"

	declared := r.call("PUT", path, gapDeclaration).want(200)
	if got := declared.json("revision"); got != json.Number("1") {
		t.Errorf("revision %v", got)
	}
	if got := declared.header.Get("ETag"); got != `"1"` {
		t.Errorf("ETag header %s", got)
	}

	// Precisions add (prior 1/0.05^2 = 400, reading 1/0.02^2 = 2500): the mean is
	// (400*0.80 + 2500*0.83)/2900 = 0.8258620..., the standard deviation
	// 2900^-1/2 = 0.0185695... (Gauss's weighting; computed by hand).
	posted := r.call("POST", path+"/readings", `{"value":0.83,"reading_id":"r1"}`).want(200)
	if got := posted.json("result", "status"); got != "APPLIED" {
		t.Errorf("status %v in %s", got, posted.body)
	}
	wantNumber(t, posted.json("belief", "mean"), 0.825862068965517)
	wantNumber(t, posted.json("belief", "standard_deviation"), 0.0185695338177052)

	r.clock.Advance(time.Hour)
	batch := r.call("POST", "/v1/readings", `{"readings":[
		{"quantity":"pump3.coupling-gap","value":0.83,"reading_id":"r1","time":"2026-03-01T12:00:00Z"},
		{"quantity":"pump3.coupling-gap","value":0.82,"unit":"mm"},
		{"quantity":"pump4.coupling-gap","value":0.81}]}`).want(200)
	for name, want := range map[string]string{"applied_count": "1", "duplicate_count": "1", "refused_count": "1"} {
		if got := batch.json(name); got != json.Number(want) {
			t.Errorf("%s %v in %s", name, got, batch.body)
		}
	}
	belief := r.call("GET", path+"/belief?threshold=0.8&coverage_probability=0.9", "").want(200)
	for _, name := range []string{"mean", "standard_deviation", "interval", "breach", "conformance_probability", "threshold",
		"predictive", "distribution", "repeatability", "reading_count", "last_reading_time", "verdict", "revision", "ledger_position"} {
		if belief.json(name) == nil {
			t.Errorf("%s is absent from %s", name, belief.body)
		}
	}
	if strings.Contains(string(belief.body), "null") {
		t.Errorf("null in %s", belief.body)
	}

	retired := r.call("DELETE", path, "").want(200)
	if retired.json("retire_time") == nil {
		t.Errorf("no retire_time in %s", retired.body)
	}
	again := r.call("DELETE", path, "").want(200)
	if string(again.body) != string(retired.body) {
		t.Errorf("second DELETE %s, first %s", again.body, retired.body)
	}
	refused := r.call("POST", path+"/readings", `{"value":0.83}`).want(200)
	if got := refused.json("result", "reason"); got != "QUANTITY_RETIRED" {
		t.Errorf("reason %v", got)
	}
	if got := r.call("GET", "/v1/quantities", "").want(200).json("quantities").([]any); len(got) != 0 {
		t.Errorf("retired quantity is listed: %v", got)
	}
	if got := r.call("GET", "/v1/quantities?show_retired=true", "").want(200).json("quantities").([]any); len(got) != 1 {
		t.Errorf("retired quantity is not listed when asked for: %v", got)
	}
	revived := r.call("PUT", path, gapDeclaration).want(200)
	if revived.json("retire_time") != nil || revived.json("revision") != json.Number("2") {
		t.Errorf("revived: %s", revived.body)
	}
}

func wantNumber(t testing.TB, got any, want float64) {
	t.Helper()
	number, _ := got.(json.Number)
	x, err := number.Float64()
	if err != nil || x < want-1e-12 || x > want+1e-12 {
		t.Errorf("%v, want %v", got, want)
	}
}

// Every form of ID that a naive router would trip over.
var awkwardIDs = []string{"a/b", "a/readings", "a/b/belief", "urn:dev:ow:1", "x:renew", "a.b", "a/b/readings:apply_refused", "beliefs:watch", "x_Y-9"}

func TestEveryIDReachesEveryPath(t *testing.T) {
	r := startServer(t)
	for _, id := range awkwardIDs {
		plain := url.PathEscape(id)
		for _, escaped := range []string{plain, strings.ReplaceAll(plain, ":", "%3A"), strings.ReplaceAll(plain, ":", "%3a")} {
			path := "/v1/quantities/" + escaped
			r.call("PUT", path, gapDeclaration).want(200)
			for _, get := range []string{path, path + "/belief", path + "/readings", path + "/renewals", path + "/belief:budget", path + "/forecast?horizon=60s"} {
				r.call("GET", get, "").want(200)
			}
			if got := r.call("GET", path, "").json("id"); got != id {
				t.Errorf("%s gives id %v", path, got)
			}
			posted := r.call("POST", path+"/readings", `{"value":0.8}`).want(200)
			if got := posted.json("belief", "quantity"); got != id {
				t.Errorf("%s/readings gives the belief of %v", path, got)
			}
			if got := posted.json("result", "status"); got != "APPLIED" {
				t.Errorf("%s/readings: %s", path, posted.body)
			}
			r.call("POST", path+"/readings:apply_refused", "").want(200)
			listed := r.call("GET", "/v1/readings?status=REFUSED&quantity="+url.QueryEscape(id), "").want(200)
			if got := listed.json("readings").([]any); len(got) != 0 {
				t.Errorf("%s: %s", id, listed.body)
			}
		}
		batch := r.call("POST", "/v1/readings", `{"readings":[{"quantity":"`+id+`","value":0.8}]}`).want(200)
		if got := batch.json("applied_count"); got != json.Number("1") {
			t.Errorf("%s in a batch: %s", id, batch.body)
		}
		prefixed := r.call("GET", "/v1/beliefs?prefix="+url.QueryEscape(id), "").want(200)
		if got := prefixed.json("beliefs").([]any); len(got) < 1 {
			t.Errorf("%s by prefix: %s", id, prefixed.body)
		}
		if _, err := r.quantities.GetQuantity(t.Context(), &leadlinev1.GetQuantityRequest{Id: id}); err != nil {
			t.Errorf("gRPC %s: %v", id, err)
		}
		r.call("DELETE", "/v1/quantities/"+plain, "").want(200)
	}
}

func TestBothProtocolsGiveTheSame(t *testing.T) {
	r := startServer(t)
	const id = "store2/air"
	r.call("PUT", "/v1/quantities/"+url.PathEscape(id), `{"unit":"°C","repeatability":{"learned":{"guess":0.2,"worth":4}},"tolerance":{"upper":-18}}`).want(200)
	for i, value := range []string{"-20.1", "-19.8", "-20.4"} {
		r.clock.Advance(time.Minute)
		r.call("POST", "/v1/quantities/"+url.PathEscape(id)+"/readings", `{"value":`+value+`,"reading_id":"r`+strconv.Itoa(i)+`"}`).want(200)
	}
	at := noon.Add(2 * time.Minute)

	overHTTP := new(leadlinev1.Belief)
	unmarshal(t, r.call("GET", "/v1/quantities/"+url.PathEscape(id)+"/belief?threshold=-20&time="+at.Format(time.RFC3339), "").want(200), overHTTP)
	overGRPC, err := r.beliefs.GetBelief(t.Context(), &leadlinev1.GetBeliefRequest{Quantity: id, Threshold: new(-20.0), Time: timestamppb.New(at)})
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(overGRPC, overHTTP, protocmp.Transform()); diff != "" {
		t.Errorf("belief (-gRPC +HTTP):\n%s", diff)
	}
	if overGRPC.GetReadingCount() != 2 {
		t.Errorf("%d readings up to %v", overGRPC.GetReadingCount(), at)
	}

	quantity := new(leadlinev1.Quantity)
	unmarshal(t, r.call("GET", "/v1/quantities/"+url.PathEscape(id), "").want(200), quantity)
	direct, err := r.quantities.GetQuantity(t.Context(), &leadlinev1.GetQuantityRequest{Id: id})
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(direct, quantity, protocmp.Transform()); diff != "" {
		t.Errorf("quantity (-gRPC +HTTP):\n%s", diff)
	}

	readings := new(leadlinev1.ListReadingsResponse)
	unmarshal(t, r.call("GET", "/v1/quantities/"+url.PathEscape(id)+"/readings?start=2026-03-01T12:02:00Z", "").want(200), readings)
	listed, err := r.readings.ListReadings(t.Context(), &leadlinev1.ListReadingsRequest{Quantity: id, Start: timestamppb.New(at)})
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(listed, readings, protocmp.Transform()); diff != "" || len(readings.GetReadings()) != 2 {
		t.Errorf("%d readings (-gRPC +HTTP):\n%s", len(readings.GetReadings()), diff)
	}
}

func unmarshal(t testing.TB, a answer, into proto.Message) {
	t.Helper()
	if err := protojson.Unmarshal(a.body, into); err != nil {
		t.Fatalf("%v in %s", err, a.body)
	}
}

func TestBeliefsSurviveARestart(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	for i := range 20 {
		r.call("POST", "/v1/quantities/gap/readings", `{"value":0.8`+strconv.Itoa(i%7)+`}`).want(200)
		r.clock.Advance(time.Minute)
	}
	const ask = "/v1/quantities/gap/belief?threshold=0.8"
	before := r.call("GET", ask, "").want(200)
	r.stop()
	after := startServerOn(t, r.file, r.clock).call("GET", ask, "").want(200)
	if diff := cmp.Diff(string(before.body), string(after.body)); diff != "" {
		t.Errorf("belief (-before +after):\n%s", diff)
	}
}

// gRPC can send what JSON has no number for. A list leaves it out, and says so.
func TestValuesWithoutANumberAreNamedInWords(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	nan, inf, one := math.NaN(), math.Inf(-1), 1.0
	for _, m := range []*leadlinev1.Reading{
		{Quantity: "gap", Value: &nan},
		{Quantity: "gap", Value: &one, RandomStandardUncertainty: &inf},
		{Quantity: "none", Value: &nan, RandomStandardUncertainty: &inf},
	} {
		if _, err := r.readings.PostReadings(t.Context(), &leadlinev1.PostReadingsRequest{Readings: []*leadlinev1.Reading{m}}); err != nil {
			t.Fatal(err)
		}
	}
	list := r.call("GET", "/v1/readings?status=REFUSED", "").want(200).json("readings").([]any)
	for i, want := range []struct {
		value, uncertainty bool
		detail             string
	}{
		{false, false, "value is NaN"},
		{true, false, "random_standard_uncertainty is -Inf"},
		{false, false, "; its value is NaN; its random_standard_uncertainty is -Inf"},
	} {
		got := list[i].(map[string]any)
		_, value := got["value"].(json.Number)
		_, uncertainty := got["random_standard_uncertainty"]
		if value != want.value || uncertainty != want.uncertainty || got["value"] != nil && !value || !strings.Contains(got["detail"].(string), want.detail) {
			t.Errorf("reading %d is listed as %v", i, got)
		}
	}
}

func TestRefusedReadingsAreListedAndPutThrough(t *testing.T) {
	r := startServer(t)
	r.call("POST", "/v1/quantities/gap/readings", `{"value":0.81,"reading_id":"early"}`).want(200)
	listed := r.call("GET", "/v1/readings?status=REFUSED", "").want(200)
	readings := listed.json("readings").([]any)
	if len(readings) != 1 || readings[0].(map[string]any)["reason"] != string(engine.UnknownQuantity) {
		t.Fatalf("log of refusals %s", listed.body)
	}
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	through := r.call("POST", "/v1/quantities/gap/readings:apply_refused", "{}").want(200)
	if through.json("applied_count") != json.Number("1") {
		t.Errorf("put through %s", through.body)
	}
	if got := r.call("GET", "/v1/quantities/gap/belief", "").json("reading_count"); got != json.Number("1") {
		t.Errorf("reading_count %v", got)
	}
}
