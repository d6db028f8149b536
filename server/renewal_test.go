package server_test

import (
	"encoding/json"
	"net/url"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"google.golang.org/protobuf/testing/protocmp"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

const (
	liningDeclaration = `{"unit":"mm","prior":{"mean":8,"standard_deviation":0.5},"repeatability":{"standard_deviation":0.1},
	 "dynamics":{"linear_trend":{"slope":{"mean":-0.01,"standard_deviation":0.01,"per":"86400s"}}},"tolerance":{"lower":3}}`
	newLining = `"time":"2026-03-01T11:30:00Z","reason":"lining replaced","prior":{"mean":10,"standard_deviation":0.2}`
)

func TestRenewalStartsAnewAndCanBeWithdrawn(t *testing.T) {
	r := startServer(t)
	const path = "/v1/quantities/winch.lining"
	r.call("PUT", path, liningDeclaration).want(200)
	r.call("POST", path+"/readings", `{"value":7.5,"time":"2026-03-01T11:00:00Z"}`).want(200)
	const belief = path + "/belief?time=2026-03-01T11:30:00Z"
	before := r.call("GET", belief, "").want(200)

	done := r.call("POST", path+":renew", `{`+newLining+`,"request_id":"job 4711"}`).want(200)
	for name, want := range map[string]any{
		"request_id": "job 4711", "time": "2026-03-01T11:30:00Z", "reason": "lining replaced", "create_time": "2026-03-01T12:00:00Z", "ledger_position": "3",
	} {
		if got := done.json(name); got != want {
			t.Errorf("%s %v, want %v", name, got, want)
		}
	}
	if done.json("slope") != nil || done.json("withdraw_time") != nil {
		t.Errorf("more than was given: %s", done.body)
	}
	after := r.call("GET", belief, "").want(200)
	wantNumber(t, after.json("mean"), 10)
	wantNumber(t, after.json("standard_deviation"), 0.2)
	wantNumber(t, after.json("slope", "mean"), -0.01)
	wantNumber(t, after.json("slope", "standard_deviation"), 0.01)

	r.clock.Advance(time.Hour)
	again := r.call("POST", path+":renew", `{`+newLining+`,"request_id":"job 4711"}`).want(200)
	if string(again.body) != string(done.body) {
		t.Errorf("sent again: %s, first %s", again.body, done.body)
	}
	r.call("POST", path+":renew", `{"prior":{"vague":{}},"request_id":"job 4711"}`).wantProblem(400, engine.InvalidField, "request_id")

	r.call("POST", path+":withdraw_renewal", `{"request_id":"job 4712"}`).wantProblem(404, engine.NotFound, "request_id")
	withdrawn := r.call("POST", path+":withdraw_renewal", `{"request_id":"job 4711"}`).want(200)
	if got := withdrawn.json("withdraw_time"); got != "2026-03-01T13:00:00Z" {
		t.Errorf("withdraw_time %v", got)
	}
	r.clock.Advance(time.Hour)
	if got := r.call("POST", path+":withdraw_renewal", `{"request_id":"job 4711"}`).want(200); string(got.body) != string(withdrawn.body) {
		t.Errorf("withdrawn again: %s", got.body)
	}
	undone := r.call("GET", belief, "").want(200)
	for _, name := range []string{"mean", "standard_deviation", "slope", "reading_count"} {
		if diff := cmp.Diff(before.json(name), undone.json(name)); diff != "" {
			t.Errorf("%s (-before +withdrawn):\n%s", name, diff)
		}
	}
	list := r.call("GET", path+"/renewals", "").want(200).json("renewals").([]any)
	if len(list) != 1 || list[0].(map[string]any)["withdraw_time"] == nil {
		t.Errorf("renewals %v", list)
	}
}

// A renewal without a time is given that of its receipt; so a retry, which comes
// later, has to be known by its request ID alone.
func TestRenewalWithoutATimeIsRetried(t *testing.T) {
	r := startServer(t)
	const path, body = "/v1/quantities/lining", `{"prior":{"vague":{}},"request_id":"job 4711"}`
	r.call("PUT", path, liningDeclaration).want(200)
	first := r.call("POST", path+":renew", body).want(200)
	r.clock.Advance(time.Minute)
	if again := r.call("POST", path+":renew", body).want(200); string(again.body) != string(first.body) {
		t.Errorf("retried: %s, first %s", again.body, first.body)
	}
	r.call("POST", path+":renew", `{"prior":{"mean":9,"standard_deviation":1},"request_id":"job 4711"}`).wantProblem(400, engine.InvalidField, "request_id")
	r.call("POST", path+":renew", `{"prior":{"vague":{}},"request_id":"a\nb"}`).wantProblem(400, engine.InvalidField, "request_id")

	nameless := r.call("POST", path+":renew", `{"prior":{"vague":{}},"slope":{"mean":0,"standard_deviation":1,"per":"3600s"}}`).want(200)
	id, _ := nameless.json("request_id").(string)
	if id == "" || nameless.json("slope", "per") != "3600s" {
		t.Errorf("%s", nameless.body)
	}
	if got := r.call("GET", path+"/renewals", "").want(200).json("renewals").([]any); len(got) != 2 {
		t.Errorf("renewals %v", got)
	}
	r.call("POST", path+":withdraw_renewal", `{"request_id":"`+id+`"}`).want(200)
}

func TestRenewalsReachEveryID(t *testing.T) {
	r := startServer(t)
	for _, id := range append([]string{"x:withdraw_renewal", "renew"}, awkwardIDs...) {
		plain := url.PathEscape(id)
		r.call("PUT", "/v1/quantities/"+plain, liningDeclaration).want(200)
		for i, path := range []string{"/v1/quantities/" + plain + ":renew", strings.ReplaceAll("/v1/quantities/"+plain+":renew", ":", "%3A")} {
			r.call("POST", path, `{`+newLining+`,"request_id":"job 4711"}`).want(200)
			list := r.call("GET", "/v1/quantities/"+plain+"/renewals", "").want(200).json("renewals").([]any)
			if len(list) != 1 {
				t.Errorf("%s, way %d: %v", id, i, list)
			}
		}
		r.call("POST", "/v1/quantities/"+plain+":withdraw_renewal", `{"id":"`+id+`","request_id":"job 4711"}`).want(200)
		overHTTP := new(leadlinev1.ListRenewalsResponse)
		unmarshal(t, r.call("GET", "/v1/quantities/"+plain+"/renewals", ""), overHTTP)
		overGRPC, err := r.quantities.ListRenewals(t.Context(), &leadlinev1.ListRenewalsRequest{Id: id})
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(overGRPC, overHTTP, protocmp.Transform()); diff != "" {
			t.Errorf("(-gRPC +HTTP):\n%s", diff)
		}
		if got := r.call("GET", "/v1/quantities/"+plain, "").want(200).json("revision"); got != json.Number("1") {
			t.Errorf("%s: a renewal made revision %v", id, got)
		}
	}
}

func TestRefusedRenewalsSayWhy(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/lining", liningDeclaration).want(200)
	r.call("PUT", "/v1/quantities/gap", flatDeclaration).want(200)
	for _, test := range []struct {
		name, path, body string
		code             int
		reason           engine.Reason
		field            string
	}{
		{"unknown quantity", "none:renew", `{` + newLining + `}`, 404, engine.NotFound, "id"},
		{"no ID", ":renew", `{` + newLining + `}`, 405, engine.NotSupported, ""},
		{"unknown verb", "lining:replace", `{}`, 405, engine.NotSupported, ""},
		{"no body", "lining:renew", ``, 400, engine.MalformedBody, ""},
		{"no prior", "lining:renew", `{"reason":"lining replaced"}`, 400, engine.MissingField, "prior"},
		{"half a prior", "lining:renew", `{"prior":{"mean":1}}`, 400, engine.MissingField, "prior.standard_deviation"},
		{"prior of another time", "lining:renew", `{"prior":{"vague":{},"time":"2026-01-01T00:00:00Z"}}`, 400, engine.InvalidField, "prior.time"},
		{"renewal to come", "lining:renew", `{"prior":{"vague":{}},"time":"2026-04-01T00:00:00Z"}`, 400, engine.InvalidField, "time"},
		{"renewal of another age", "lining:renew", `{"prior":{"vague":{}},"time":"1500-04-01T00:00:00Z"}`, 400, engine.InvalidField, "time"},
		{"another ID in the body", "lining:renew", `{"id":"gap","prior":{"vague":{}}}`, 400, engine.InvalidField, "id"},
		{"unknown field", "lining:renew", `{"prior":{"vague":{}},"why":"worn"}`, 400, engine.UnknownField, "why"},
		{"unknown parameter", "lining:renew?reason=worn", `{"prior":{"vague":{}}}`, 400, engine.UnknownParameter, "reason"},
		{"half a slope", "lining:renew", `{"prior":{"vague":{}},"slope":{"mean":1,"standard_deviation":1}}`, 400, engine.MissingField, "slope.per"},
		{"negative slope's uncertainty", "lining:renew", `{"prior":{"vague":{}},"slope":{"mean":1,"standard_deviation":-1,"per":"1s"}}`, 400, engine.InvalidField, "slope.standard_deviation"},
		{"slope without a trend", "gap:renew", `{"prior":{"vague":{}},"slope":{"mean":1,"standard_deviation":1,"per":"1s"}}`, 400, engine.InvalidField, "slope"},
		{"reason too long", "lining:renew", `{"prior":{"vague":{}},"reason":"` + strings.Repeat("x", 513) + `"}`, 400, engine.InvalidField, "reason"},
		{"request ID too long", "lining:renew", `{"prior":{"vague":{}},"request_id":"` + strings.Repeat("x", 129) + `"}`, 400, engine.InvalidField, "request_id"},
		{"withdrawing what", "lining:withdraw_renewal", `{}`, 400, engine.MissingField, "request_id"},
	} {
		t.Run(test.name, func(t *testing.T) {
			r.t = t
			a := r.call("POST", "/v1/quantities/"+test.path, test.body).wantProblem(test.code, test.reason, test.field)
			if message, _ := a.json("message").(string); !strings.Contains(message, ";") || strings.HasSuffix(message, ".") {
				t.Errorf("message %q is not one sentence with a remedy", message)
			}
		})
	}
}
