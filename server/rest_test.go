package server_test

import (
	"bufio"
	"encoding/json"
	"fmt"
	"io"
	"net"
	"net/http"
	"strings"
	"testing"

	"leadline.example/engine"
)

func TestRefusedRequestsSayWhy(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	declare := func(members string) []string { return []string{"PUT", "/v1/quantities/new", "{" + members + "}"} }
	for _, test := range []struct {
		name    string
		request []string // method, path, body
		code    int
		reason  engine.Reason
		field   string
	}{
		{"no such path", []string{"GET", "/v1/nothing", ""}, 404, engine.NotFound, ""},
		{"root", []string{"GET", "/", ""}, 404, engine.NotFound, ""},
		{"trailing slash", []string{"GET", "/v1/quantities/", ""}, 404, engine.NotFound, ""},
		{"double slash", []string{"GET", "/v1//quantities", ""}, 404, engine.NotFound, ""},
		{"unknown verb", []string{"POST", "/v1/quantities/gap/readings:renew", ""}, 404, engine.NotFound, ""},
		{"unknown quantity", []string{"GET", "/v1/quantities/none", ""}, 404, engine.NotFound, "id"},
		{"belief of an unknown quantity", []string{"GET", "/v1/quantities/none/belief", ""}, 404, engine.NotFound, "quantity"},
		{"ID with a blank", []string{"GET", "/v1/quantities/a%20b", ""}, 400, engine.InvalidID, "id"},
		{"ID with a dot segment", []string{"GET", "/v1/quantities/a%2F..%2Fb", ""}, 400, engine.InvalidID, "id"},
		{"ID with an encoded percent", []string{"GET", "/v1/quantities/a%252Fb", ""}, 400, engine.InvalidID, "id"},
		{"ID too long", []string{"GET", "/v1/quantities/" + strings.Repeat("x", 256), ""}, 400, engine.InvalidID, "id"},
		{"ID of a reading's quantity", []string{"POST", "/v1/quantities/-x/readings", `{"value":1}`}, 400, engine.InvalidID, "quantity"},
		{"wrong method", []string{"POST", "/v1/quantities/gap", ""}, 405, engine.NotSupported, ""},
		{"wrong method of a page", []string{"POST", "/healthz", ""}, 405, engine.NotSupported, ""},
		{"unknown parameter", []string{"GET", "/v1/quantities?prefx=a", ""}, 400, engine.UnknownParameter, "prefx"},
		{"camelCase parameter", []string{"GET", "/v1/quantities?pageSize=3", ""}, 400, engine.UnknownParameter, "pageSize"},
		{"path variable as parameter", []string{"GET", "/v1/quantities/gap?id=other", ""}, 400, engine.UnknownParameter, "id"},
		{"parameter of a PUT", []string{"PUT", "/v1/quantities/gap?unit=mm", "{}"}, 400, engine.UnknownParameter, "unit"},
		{"parameter of a batch", []string{"POST", "/v1/readings?dry=1", "{}"}, 400, engine.UnknownParameter, "dry"},
		{"nested parameter", []string{"GET", "/v1/quantities/gap/belief?time.seconds=1", ""}, 400, engine.UnknownParameter, "time.seconds"},
		{"repeated parameter", []string{"GET", "/v1/quantities?prefix=a&prefix=b", ""}, 400, engine.InvalidField, "prefix"},
		{"unreadable query", []string{"GET", "/v1/quantities?prefix=%zz", ""}, 400, engine.UnknownParameter, ""},
		{"negative page size", []string{"GET", "/v1/quantities?page_size=-1", ""}, 400, engine.InvalidField, "page_size"},
		{"page size no number", []string{"GET", "/v1/quantities?page_size=1e2", ""}, 400, engine.InvalidField, "page_size"},
		{"boolean as number", []string{"GET", "/v1/quantities?show_retired=1", ""}, 400, engine.InvalidField, "show_retired"},
		{"page token invented", []string{"GET", "/v1/quantities?page_token=abc", ""}, 400, engine.InvalidField, "page_token"},
		{"threshold no number", []string{"GET", "/v1/quantities/gap/belief?threshold=NaN", ""}, 400, engine.InvalidField, "threshold"},
		{"threshold hexadecimal", []string{"GET", "/v1/quantities/gap/belief?threshold=0x1p-2", ""}, 400, engine.InvalidField, "threshold"},
		{"coverage 1", []string{"GET", "/v1/quantities/gap/belief?coverage_probability=1", ""}, 400, engine.InvalidField, "coverage_probability"},
		{"coverage 0", []string{"GET", "/v1/quantities/gap/belief?coverage_probability=0", ""}, 400, engine.InvalidField, "coverage_probability"},
		{"time with a bare plus", []string{"GET", "/v1/quantities/gap/belief?time=2026-03-01T12:00:00+01:00", ""}, 400, engine.InvalidField, "time"},
		{"time out of range", []string{"GET", "/v1/quantities/gap/belief?time=1500-03-01T12:00:00Z", ""}, 400, engine.InvalidField, "time"},
		{"unknown instrument", []string{"GET", "/v1/quantities/gap/belief?instrument=calliper", ""}, 404, engine.NotFound, "instrument"},
		{"start out of range", []string{"GET", "/v1/quantities/gap/readings?start=1500-01-01T00:00:00Z", ""}, 400, engine.InvalidField, "start"},
		{"end out of range", []string{"GET", "/v1/quantities/gap/readings?end=2300-01-01T00:00:00Z", ""}, 400, engine.InvalidField, "end"},
		{"list at a time out of range", []string{"GET", "/v1/beliefs?time=2300-01-01T00:00:00Z", ""}, 400, engine.InvalidField, "time"},
		{"refusals of another quantity put through", []string{"POST", "/v1/quantities/gap/readings:apply_refused", `{"quantity":"z"}`}, 400, engine.InvalidField, "quantity"},
		{"status by number", []string{"GET", "/v1/quantities/gap/readings?status=1", ""}, 400, engine.InvalidField, "status"},
		{"status UNSPECIFIED", []string{"GET", "/v1/quantities/gap/readings?status=UNSPECIFIED", ""}, 400, engine.InvalidField, "status"},
		{"status DUPLICATE", []string{"GET", "/v1/quantities/gap/readings?status=DUPLICATE", ""}, 400, engine.InvalidField, "status"},
		{"all readings of all quantities", []string{"GET", "/v1/readings", ""}, 400, engine.MissingField, "status"},
		{"applied readings of all quantities", []string{"GET", "/v1/readings?status=APPLIED", ""}, 400, engine.InvalidField, "status"},
		{"prefix longer than an ID", []string{"GET", "/v1/beliefs:watch?prefix=" + strings.Repeat("x", 256), ""}, 400, engine.InvalidField, "prefix"},

		{"empty body", []string{"PUT", "/v1/quantities/new", ""}, 400, engine.MalformedBody, ""},
		{"unknown field", declare(`"unti":"mm"`), 400, engine.UnknownField, "unti"},
		{"camelCase field", declare(`"decisionRule":{}`), 400, engine.UnknownField, "decisionRule"},
		{"unknown nested field", declare(`"prior":{"mode":1}`), 400, engine.UnknownField, "prior.mode"},
		{"unknown field of an empty message", declare(`"prior":{"vague":{"really":true}}`), 400, engine.UnknownField, "prior.vague.really"},
		{"number as string", declare(`"prior":{"mean":"0.8","standard_deviation":1}`), 400, engine.InvalidField, "prior.mean"},
		{"half a prior", declare(`"prior":{"mean":0.8}`), 400, engine.MissingField, "prior.standard_deviation"},
		{"half an interval", declare(`"prior":{"low":0.8,"high":1}`), 400, engine.MissingField, "prior.probability"},
		{"two priors", declare(`"prior":{"mean":0.8,"standard_deviation":1,"vague":{}}`), 400, engine.InvalidField, "prior"},
		{"empty prior", declare(`"prior":{}`), 400, engine.MissingField, "prior"},
		{"negative standard deviation", declare(`"prior":{"mean":0.8,"standard_deviation":-0.05}`), 400, engine.InvalidField, "prior.standard_deviation"},
		{"crossed interval", declare(`"prior":{"low":1,"high":0,"probability":0.9}`), 400, engine.InvalidField, "prior.high"},
		{"empty repeatability", declare(`"repeatability":{}`), 400, engine.MissingField, "repeatability"},
		{"two repeatabilities", declare(`"repeatability":{"standard_deviation":1,"learned":{}}`), 400, engine.InvalidField, "repeatability"},
		{"guess without worth", declare(`"repeatability":{"learned":{"guess":1}}`), 400, engine.MissingField, "repeatability.learned.worth"},
		{"zero repeatability", declare(`"repeatability":{"standard_deviation":0}`), 400, engine.InvalidField, "repeatability.standard_deviation"},
		{"two dynamics", declare(`"dynamics":{"constant":{},"random_walk":{}}`), 400, engine.InvalidField, "dynamics.random_walk"},
		{"dynamics unknown here", declare(`"dynamics":{"seasonal":{}}`), 400, engine.UnknownField, "dynamics.seasonal"},
		{"walk without a time", declare(`"dynamics":{"random_walk":{"standard_deviation":1}}`), 400, engine.MissingField, "dynamics.random_walk.per"},
		{"walk with a bare number", declare(`"dynamics":{"random_walk":{"standard_deviation":1,"per":86400}}`), 400, engine.InvalidField, "dynamics.random_walk.per"},
		{"walk of a day in words", declare(`"dynamics":{"random_walk":{"standard_deviation":1,"per":"1d"}}`), 400, engine.InvalidField, "dynamics.random_walk.per"},
		{"walk in no time", declare(`"dynamics":{"random_walk":{"standard_deviation":1,"per":"0s"}}`), 400, engine.InvalidField, "dynamics.random_walk.per"},
		{"walk over 300 years", declare(`"dynamics":{"random_walk":{"standard_deviation":1,"per":"9467280000s"}}`), 400, engine.InvalidField, "dynamics.random_walk.per"},
		{"walk with learned repeatability", declare(`"dynamics":{"random_walk":{"standard_deviation":1,"per":"1s"}},"repeatability":{"learned":{}}`), 501, engine.NotSupported, "repeatability.learned"},
		{"trend without a slope", declare(`"dynamics":{"linear_trend":{}}`), 400, engine.MissingField, "dynamics.linear_trend.slope"},
		{"slope without a mean", declare(`"dynamics":{"linear_trend":{"slope":{"standard_deviation":1,"per":"1s"}}}`), 400, engine.MissingField, "dynamics.linear_trend.slope.mean"},
		{"slope without doubt", declare(`"dynamics":{"linear_trend":{"slope":{"mean":1,"per":"1s"}}}`), 400, engine.MissingField, "dynamics.linear_trend.slope.standard_deviation"},
		{"slope in no time", declare(`"dynamics":{"linear_trend":{"slope":{"mean":1,"standard_deviation":1,"per":"0s"}}}`), 400, engine.InvalidField, "dynamics.linear_trend.slope.per"},
		{"trend with half a walk", declare(`"dynamics":{"linear_trend":{"standard_deviation":1,"slope":{"mean":1,"standard_deviation":1,"per":"1s"}}}`), 400, engine.MissingField, "dynamics.linear_trend.per"},
		{"trend with a walk of zero", declare(`"dynamics":{"linear_trend":{"standard_deviation":0,"per":"1s","slope":{"mean":1,"standard_deviation":1,"per":"1s"}}}`), 400, engine.InvalidField, "dynamics.linear_trend.standard_deviation"},
		{"slope that wanders in no time", declare(`"dynamics":{"linear_trend":{"slope":{"mean":1,"standard_deviation":1,"per":"1s"},"slope_wander":{"standard_deviation":1}}}`), 400, engine.MissingField, "dynamics.linear_trend.slope_wander.per"},
		{"slope that wanders by zero", declare(`"dynamics":{"linear_trend":{"slope":{"mean":1,"standard_deviation":1,"per":"1s"},"slope_wander":{"standard_deviation":0,"per":"1s"}}}`), 400, engine.InvalidField, "dynamics.linear_trend.slope_wander.standard_deviation"},
		{"reverting to what", declare(`"dynamics":{"mean_reverting":{"standard_deviation":1,"half_life":"1s"}}`), 400, engine.MissingField, "dynamics.mean_reverting.mean"},
		{"reverting in what time", declare(`"dynamics":{"mean_reverting":{"mean":0,"standard_deviation":1}}`), 400, engine.MissingField, "dynamics.mean_reverting.half_life"},
		{"reverting at once", declare(`"dynamics":{"mean_reverting":{"mean":0,"standard_deviation":1,"half_life":"0s"}}`), 400, engine.InvalidField, "dynamics.mean_reverting.half_life"},
		{"reverting with learned repeatability", declare(`"dynamics":{"mean_reverting":{"mean":0,"standard_deviation":1,"half_life":"1s"}},"repeatability":{"learned":{}}`), 501, engine.NotSupported, "repeatability.learned"},
		{"looking nowhere", declare(`"tolerance":{"upper":1},"breach_horizon":"0s"`), 400, engine.InvalidField, "breach_horizon"},
		{"looking back", declare(`"tolerance":{"upper":1},"breach_horizon":"-1s"`), 400, engine.InvalidField, "breach_horizon"},
		{"looking for no limit", declare(`"breach_horizon":"60s"`), 400, engine.MissingField, "tolerance"},
		{"empty tolerance", declare(`"tolerance":{}`), 400, engine.MissingField, "tolerance"},
		{"crossed tolerance", declare(`"tolerance":{"lower":1,"upper":0}`), 400, engine.InvalidField, "tolerance.upper"},
		{"rule of zeros", declare(`"decision_rule":{"conform_probability":0,"breach_probability":0}`), 400, engine.InvalidField, "decision_rule.conform_probability"},
		{"rule of a half", declare(`"decision_rule":{"breach_probability":0.5}`), 400, engine.InvalidField, "decision_rule.breach_probability"},
		{"unit too long", declare(`"unit":"` + strings.Repeat("m", 33) + `"`), 400, engine.InvalidField, "unit"},
		{"description too long", declare(`"description":"` + strings.Repeat("m", 513) + `"`), 400, engine.InvalidField, "description"},
		{"another ID in the body", declare(`"id":"old"`), 400, engine.InvalidField, "id"},
		{"revision of what isn't there", declare(`"revision":1`), 400, engine.InvalidField, "revision"},
		{"ETag of what isn't there", declare(`"etag":"1"`), 409, engine.ETagMismatch, "etag"},
		{"another quantity in a reading", []string{"POST", "/v1/quantities/gap/readings", `{"quantity":"other","value":1}`}, 400, engine.InvalidField, "quantity"},
		{"apply_refused with a field", []string{"POST", "/v1/quantities/gap/readings:apply_refused", `{"all":true}`}, 400, engine.UnknownField, "all"},
		{"apply_refused of an unknown quantity", []string{"POST", "/v1/quantities/none/readings:apply_refused", ``}, 404, engine.NotFound, "quantity"},
	} {
		t.Run(test.name, func(t *testing.T) {
			r.t = t
			a := r.call(test.request[0], test.request[1], test.request[2]).wantProblem(test.code, test.reason, test.field)
			message, _ := a.json("message").(string)
			if !strings.Contains(message, ";") || strings.HasSuffix(message, ".") {
				t.Errorf("message %q is not one sentence with a remedy", message)
			}
			if got := a.header.Get("Content-Type"); got != "application/json" {
				t.Errorf("content type %s", got)
			}
		})
	}
	r.t = t
	r.call("GET", "/v1/quantities/new", "").want(404)
}

// The corpus goes through the decoders in decoder_test.go; here, over the wire.
func TestCorpusOverHTTP(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	for _, c := range corpus(t) {
		for _, route := range []struct{ path, body, prefix string }{
			{"/v1/quantities/gap/readings", strings.ReplaceAll(c.body, "<Q>", ""), ""},
			{"/v1/readings", `{"readings":[` + strings.ReplaceAll(c.body, "<Q>", `"quantity":"gap",`) + `]}`, "readings[0]."},
		} {
			a := r.call("POST", route.path, route.body, "Content-Type", "text/plain")
			if c.verdict == "OK" {
				a.want(200)
				continue
			}
			reason, field, _ := strings.Cut(c.verdict, " ")
			gotReason, gotField := a.want(400).problem()
			if gotReason != reason || reason != string(engine.MalformedBody) && gotField != route.prefix+field {
				t.Errorf("%s %s: %s of %q, want %s of %q", route.path, route.body, gotReason, gotField, reason, route.prefix+field)
			}
		}
	}
}

func TestWrongMethodNamesTheRightOnes(t *testing.T) {
	r := startServer(t)
	for _, test := range []struct{ path, method, allow string }{
		{"/v1/quantities/gap", "PATCH", "DELETE, GET, HEAD, PUT"},
		{"/v1/quantities", "DELETE", "GET, HEAD"},
		{"/v1/quantities/gap/readings", "PUT", "GET, HEAD, POST"},
		{"/v1/quantities/gap/readings:apply_refused", "GET", "POST"},
		{"/v1/readings", "OPTIONS", "GET, HEAD, POST"},
		{"/v1/beliefs:watch", "POST", "GET, HEAD"},
		{"/v1/instruments/calliper-7", "POST", "DELETE, GET, HEAD, PUT"},
		{"/v1/instruments", "POST", "GET, HEAD"},
		{"/v1/quantities/gap:renew", "PATCH", "DELETE, GET, HEAD, POST, PUT"},
		{"/v1/quantities/gap/renewals", "POST", "GET, HEAD"},
		{"/v1/quantities/gap/forecast", "POST", "GET, HEAD"},
		{"/v1/quantities/gap/belief:budget", "POST", "GET, HEAD"},
		{"/openapi.json", "PUT", "GET, HEAD"},
	} {
		a := r.call(test.method, test.path, "").want(405)
		if got := a.header.Get("Allow"); got != test.allow {
			t.Errorf("%s %s: Allow %q, want %q", test.method, test.path, got, test.allow)
		}
	}
}

func TestMethodCannotBeOverridden(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	r.call("POST", "/v1/quantities/gap", "", "X-HTTP-Method-Override", "DELETE").want(405)
	r.call("POST", "/v1/quantities", "prefix=gap", "Content-Type", "application/x-www-form-urlencoded").want(405)
	r.call("GET", "/v1/quantities/gap", "", "X-HTTP-Method-Override", "DELETE").want(200)
	if r.call("GET", "/v1/quantities/gap", "").json("retire_time") != nil {
		t.Error("a header retired the quantity")
	}
}

// The gateway would take a deadline, metadata and more from headers that are no
// part of the interface.
func TestForeignHeadersChangeNothing(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	for _, header := range [][2]string{
		{"Grpc-Timeout", "1n"}, {"Grpc-Timeout", "soon"}, {"Grpc-Metadata-If-Match", `"9"`}, {"Te", "trailers"},
		{"Authorization", "Bearer x"}, {"X-Forwarded-For", "ice"}, {"X-Http-Method-Override", "DELETE"},
	} {
		r.call("PUT", "/v1/quantities/gap", gapDeclaration, header[0], header[1]).want(200)
	}
	r.call("POST", "/v1/quantities/gap/readings:apply_refused", `{"quantity":"gap"}`).want(200)
}

func TestHeadIsGetWithoutABody(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	for _, path := range []string{"/v1/quantities/gap", "/v1/quantities/gap/belief", "/healthz", "/openapi.json", "/v1/beliefs:watch"} {
		if a := r.call("HEAD", path, "").want(200); len(a.body) != 0 {
			t.Errorf("%s: body %q", path, a.body)
		}
	}
}

func TestAcceptIsNegotiated(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/instruments/calliper-7", calliperDeclaration).want(200)
	r.call("PUT", "/v1/quantities/gap", gapDeclaration).want(200)
	const json, text = "application/json", "text/plain; charset=utf-8"
	for _, test := range []struct {
		accept string
		code   int
		media  string
	}{
		{"", 200, json},
		{"*/*", 200, json},
		{"application/*", 200, json},
		{"text/plain", 200, text},
		{"text/*", 200, text},
		{"TEXT/PLAIN", 200, text},
		{"text/html, text/plain;q=0.5, */*;q=0.1", 200, text},
		{"text/plain;q=0.5, application/json;q=0.6", 200, json},
		{"application/json;q=0.5, text/plain;q=0.6", 200, text},
		{"application/json;q=0, */*", 200, text},
		{"text/plain;q=0.5,*/*;q=0.5", 200, json},
		{"text/html", 406, json},
		{"application/json;q=0, text/plain;q=0", 406, json},
		{"application/json;q=x", 406, json},
	} {
		for _, path := range []string{"/v1/quantities/gap", "/v1/quantities/gap/belief", "/v1/beliefs", "/v1/quantities", "/v1/quantities/gap/readings",
			"/v1/quantities/gap/renewals", "/v1/quantities/gap/forecast?horizon=60s", "/v1/quantities/gap/belief:budget", "/v1/instruments", "/v1/instruments/calliper-7"} {
			a := r.call("GET", path, "", "Accept", test.accept).want(test.code)
			if got := a.header.Get("Content-Type"); got != test.media {
				t.Errorf("%s, Accept %q: %s, want %s", path, test.accept, got, test.media)
			}
			if strings.HasPrefix(string(a.body), "{") != (test.media == json) {
				t.Errorf("%s, Accept %q: %s", path, test.accept, a.body)
			}
		}
		for _, post := range [][2]string{{"/v1/readings", `{"readings":[{"quantity":"gap","value":0.8}]}`}, {"/v1/quantities/gap/readings", `{"value":0.8}`}} {
			a := r.call("POST", post[0], post[1], "Accept", test.accept).want(test.code)
			if got := a.header.Get("Content-Type"); got != test.media {
				t.Errorf("%s, Accept %q: %s, want %s", post[0], test.accept, got, test.media)
			}
		}
	}
	// Errors follow the same choice.
	a := r.call("GET", "/v1/quantities/none", "", "Accept", "text/plain").want(404)
	if got := a.header.Get("Content-Type"); got != text || !strings.Contains(string(a.body), "NOT_FOUND") {
		t.Errorf("%s: %s", got, a.body)
	}
}

func TestConditionsGuardAChange(t *testing.T) {
	r := startServer(t)
	const path = "/v1/quantities/gap"
	r.call("PUT", path, gapDeclaration, "If-Match", "*").wantProblem(409, engine.ETagMismatch, "etag")
	tag := r.call("PUT", path, gapDeclaration, "If-None-Match", "*").want(200).header.Get("ETag")
	r.call("PUT", path, gapDeclaration, "If-None-Match", "*").wantProblem(409, engine.AlreadyExists, "")
	r.call("PUT", path, gapDeclaration, "If-None-Match", `"7"`).wantProblem(400, engine.InvalidField, "if-none-match")

	other := strings.Replace(gapDeclaration, "0.90", "0.95", 1)
	r.call("PUT", path, other, "If-Match", `"99"`).wantProblem(409, engine.ETagMismatch, "etag")
	r.call("PUT", path, other, "If-Match", tag+`, "99"`).wantProblem(400, engine.InvalidField, "if-match")
	newTag := r.call("PUT", path, other, "If-Match", tag).want(200).header.Get("ETag")
	if newTag == tag {
		t.Errorf("ETag %s stayed though the declaration changed", tag)
	}
	r.call("PUT", path, other, "If-Match", "*").want(200)

	withTag := func(etag string) string { return strings.Replace(other, "{", `{"etag":"`+etag+`",`, 1) }
	r.call("PUT", path, withTag("1")).wantProblem(409, engine.ETagMismatch, "etag")
	r.call("PUT", path, withTag(strings.Trim(newTag, `"`))).want(200)
	r.call("PUT", path, withTag("1"), "If-Match", newTag).wantProblem(409, engine.ETagMismatch, "etag")
	r.call("DELETE", path+"?etag=1", "").wantProblem(409, engine.ETagMismatch, "etag")
	r.call("DELETE", path, "", "If-Match", tag).wantProblem(409, engine.ETagMismatch, "etag")
	r.call("DELETE", path, "", "If-Match", newTag).want(200)
}

func TestWhatWasReadCanBeSentBack(t *testing.T) {
	r := startServer(t)
	for id, declaration := range map[string]string{
		"gap":   gapDeclaration,
		"plain": "{}",
		"worn": `{"unit":"mm","dynamics":{"linear_trend":{"standard_deviation":0.1,"per":"60s","slope":{"mean":0,"standard_deviation":1,"per":"86400s"},
			"slope_wander":{"standard_deviation":0.1,"per":"0.001s"}}},"tolerance":{"upper":3},"breach_horizon":"2592000s"}`,
		"room": `{"unit":"Cel","dynamics":{"mean_reverting":{"mean":0,"standard_deviation":1.5,"half_life":"3600s"}}}`,
		"full": `{"unit":"K","prior":{"low":1,"high":2,"probability":0.5,"time":"2026-01-01T00:00:00.5Z"},
			"repeatability":{"learned":{"guess":1,"worth":3.5}},"tolerance":{"lower":0},"decision_rule":{"conform_probability":0.99}}`,
	} {
		path := "/v1/quantities/" + id
		r.call("PUT", path, declaration).want(200)
		read := r.call("GET", path, "").want(200)
		again := r.call("PUT", path, string(read.body)).want(200)
		if string(again.body) != string(read.body) {
			t.Errorf("sent back %s, got %s", read.body, again.body)
		}
	}
	read := string(r.call("GET", "/v1/quantities/gap", "").body)
	stale := strings.Replace(read, `"revision":1`, `"revision":7`, 1)
	r.call("PUT", "/v1/quantities/gap", stale).wantProblem(400, engine.InvalidField, "revision")
	stale = strings.Replace(read, `"create_time":"2026`, `"create_time":"2025`, 1)
	r.call("PUT", "/v1/quantities/gap", stale).wantProblem(400, engine.InvalidField, "create_time")
}

func TestStatingTheDefaultsIsNoOtherDeclaration(t *testing.T) {
	r := startServer(t)
	r.call("PUT", "/v1/quantities/q", `{}`).want(200)
	a := r.call("PUT", "/v1/quantities/q", `{"prior":{"vague":{}},"dynamics":{"constant":{}},"decision_rule":{"conform_probability":0.95,"breach_probability":0.95}}`)
	if got := a.want(200).json("revision"); got != json.Number("1") {
		t.Errorf("revision %v", got)
	}
}

func TestBodyOverTheLimit(t *testing.T) {
	r := startServer(t)
	pad := strings.Repeat(" ", 4<<20)
	for _, path := range []string{"/v1/readings", "/v1/quantities/gap/readings"} {
		r.call("POST", path, "{"+pad+"}").wantProblem(413, engine.BodyTooLarge, "")
	}
	r.call("PUT", "/v1/quantities/gap", "{"+pad+"}").wantProblem(413, engine.BodyTooLarge, "")

	request, err := http.NewRequestWithContext(t.Context(), "POST", r.url+"/v1/readings", io.MultiReader(strings.NewReader("{"+pad+"}")))
	if err != nil {
		t.Fatal(err)
	}
	response, err := http.DefaultClient.Do(request) // chunked, so of unannounced length
	if err != nil {
		t.Fatal(err)
	}
	defer response.Body.Close()
	if response.StatusCode != 413 {
		t.Errorf("chunked: status %d", response.StatusCode)
	}
}

// An announced length over the limit is refused before any of it is read.
func TestAnnouncedLengthIsRefusedAtOnce(t *testing.T) {
	r := startServer(t)
	conn, err := net.Dial("tcp", strings.TrimPrefix(r.url, "http://"))
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close()
	if _, err := fmt.Fprintf(conn, "POST /v1/readings HTTP/1.1\r\nHost: localhost\r\nContent-Length: 1000000000\r\n\r\n"); err != nil {
		t.Fatal(err)
	}
	response, err := http.ReadResponse(bufio.NewReader(conn), nil)
	if err != nil {
		t.Fatal(err)
	}
	defer response.Body.Close()
	if response.StatusCode != 413 {
		t.Errorf("status %d", response.StatusCode)
	}
}

func TestPagesBesideTheAPI(t *testing.T) {
	r := startServer(t)
	if got := r.call("GET", "/healthz", "").want(200).json("state"); got != "alive" {
		t.Errorf("healthz %v", got)
	}
	if got := string(r.call("GET", "/readyz", "", "Accept", "text/plain").want(200).body); got != "ready\n" {
		t.Errorf("readyz %q", got)
	}
	if got := r.call("GET", "/openapi.json", "").want(200).json("openapi"); got != "3.1.0" {
		t.Errorf("openapi %v", got)
	}
	r.call("GET", "/healthz", "", "Accept", "image/png").want(200)
}

// Every route that is served is described, in the names that are served.
func TestOpenAPIDescribesTheDialect(t *testing.T) {
	r := startServer(t)
	a := r.call("GET", "/openapi.json", "").want(200)
	for _, path := range []string{"/v1/quantities", "/v1/quantities/{id}", "/v1/readings", "/v1/beliefs", "/v1/beliefs:watch",
		"/v1/quantities/{quantity}/belief", "/v1/quantities/{quantity}/readings", "/v1/quantities/{quantity}/readings:apply_refused",
		"/v1/instruments", "/v1/instruments/{id}", "/v1/quantities/{id}:renew", "/v1/quantities/{id}:withdraw_renewal", "/v1/quantities/{id}/renewals",
		"/v1/quantities/{quantity}/forecast", "/v1/quantities/{quantity}/belief:budget"} {
		if a.json("paths", path) == nil {
			t.Errorf("%s is not described", path)
		}
	}
	if a.json("components", "schemas", "leadline.v1.Belief", "properties", "reading_count") == nil {
		t.Error("the belief has no reading_count")
	}
	if strings.Contains(string(a.body), "readingCount") || strings.Contains(string(a.body), "pageSize") {
		t.Error("camelCase names")
	}
}
