package published_test

import (
	"net/http"
	"strings"
	"testing"

	"google.golang.org/genproto/googleapis/rpc/errdetails"
	"google.golang.org/genproto/googleapis/rpc/status"

	"leadline.example/engine"
)

// refusedRequest is a request that has to be refused as a whole.
type refusedRequest struct {
	name, method, path, body string
	header                   []string // names and values in turn
	code                     int
	reason                   engine.Reason
	field                    string
}

const (
	bad       = http.StatusBadRequest
	gap       = "/v1/quantities/pump-3%2Fgap"
	readings  = gap + "/readings"
	manyPosts = "/v1/readings"
)

// batchOf is the body of a batch with the same reading n times.
func batchOf(n int, reading string) string {
	return `{"readings":[` + strings.TrimSuffix(strings.Repeat(reading+",", n), ",") + `]}`
}

var refusedRequests = []refusedRequest{
	// Bodies that are no JSON object, on each kind of route.
	{name: "empty body", method: "POST", path: readings, code: bad, reason: engine.MalformedBody},
	{name: "white space", method: "POST", path: manyPosts, body: " \n\t", code: bad, reason: engine.MalformedBody},
	{name: "no JSON", method: "POST", path: readings, body: "value=0.8", code: bad, reason: engine.MalformedBody},
	{name: "XML", method: "PUT", path: gap, body: "<quantity/>", code: bad, reason: engine.MalformedBody},
	{name: "a number", method: "POST", path: readings, body: "0.8", code: bad, reason: engine.MalformedBody},
	{name: "a string", method: "PUT", path: gap, body: `"mm"`, code: bad, reason: engine.MalformedBody},
	{name: "null", method: "POST", path: manyPosts, body: "null", code: bad, reason: engine.MalformedBody},
	{name: "an array", method: "POST", path: manyPosts, body: `[{"quantity":"pump-3/gap","value":0.8}]`, code: bad, reason: engine.MalformedBody},
	{name: "cut off", method: "POST", path: readings, body: `{"value":0.8`, code: bad, reason: engine.MalformedBody},
	{name: "cut off in a string", method: "PUT", path: gap, body: `{"unit":"m`, code: bad, reason: engine.MalformedBody, field: "unit"},
	{name: "trailing data", method: "POST", path: readings, body: `{"value":0.8} {"value":0.9}`, code: bad, reason: engine.MalformedBody},
	{name: "trailing brace", method: "PUT", path: gap, body: gapDeclaration + "}", code: bad, reason: engine.MalformedBody},
	{name: "trailing comma", method: "POST", path: readings, body: `{"value":0.8,}`, code: bad, reason: engine.MalformedBody},
	{name: "comment", method: "POST", path: readings, body: `{"value":0.8 /* mm */}`, code: bad, reason: engine.MalformedBody},
	{name: "single quotes", method: "POST", path: readings, body: `{'value':0.8}`, code: bad, reason: engine.MalformedBody},
	{name: "duplicate key", method: "POST", path: readings, body: `{"value":0.8,"value":0.9}`, code: bad, reason: engine.MalformedBody},
	{name: "duplicate key by escape", method: "POST", path: readings, body: `{"value":0.8,"v\u0061lue":0.9}`, code: bad, reason: engine.MalformedBody},
	{name: "duplicate key, nested", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"mean":1,"mean":2,"standard_deviation":1}}`, code: bad, reason: engine.MalformedBody, field: "prior"},
	{name: "NaN", method: "POST", path: readings, body: `{"value":NaN}`, code: bad, reason: engine.MalformedBody, field: "value"},
	{name: "Infinity", method: "POST", path: readings, body: `{"value":-Infinity}`, code: bad, reason: engine.MalformedBody, field: "value"},
	{name: "leading zero", method: "POST", path: readings, body: `{"value":00.8}`, code: bad, reason: engine.MalformedBody},
	{name: "invalid UTF-8", method: "POST", path: readings, body: "{\"value\":0.8,\"unit\":\"\xff\"}", code: bad, reason: engine.MalformedBody, field: "unit"},
	{name: "invalid UTF-8 in a batch", method: "POST", path: manyPosts, body: "{\"readings\":[{\"quantity\":\"pump-3/gap\",\"value\":0.8,\"reading_id\":\"a\xc3\"}]}", code: bad, reason: engine.MalformedBody, field: "readings[0].reading_id"},
	{name: "invalid UTF-8 in a declaration", method: "PUT", path: gap, body: "{\"unit\":\"mm\",\"description\":\"\xed\xa0\x80\"}", code: bad, reason: engine.MalformedBody, field: "description"},
	{name: "invalid UTF-8 in a name", method: "POST", path: readings, body: "{\"value\":0.8,\"un\xffit\":\"mm\"}", code: bad, reason: engine.MalformedBody},
	{name: "lone surrogate", method: "POST", path: readings, body: `{"value":0.8,"reading_id":"\ud83d"}`, code: bad, reason: engine.MalformedBody, field: "reading_id"},
	{name: "byte order mark", method: "POST", path: readings, body: "\xef\xbb\xbf{\"value\":0.8}", code: bad, reason: engine.MalformedBody},
	{name: "UTF-16", method: "POST", path: readings, body: "\xff\xfe{\x00\"\x00v\x00", code: bad, reason: engine.MalformedBody},
	{name: "NUL", method: "POST", path: readings, body: "{\"value\":0.8}\x00", code: bad, reason: engine.MalformedBody},
	{name: "deep arrays", method: "POST", path: manyPosts, body: `{"readings":` + strings.Repeat("[", 100_000), code: bad, reason: engine.InvalidField, field: "readings[0]"},
	{name: "deep objects", method: "POST", path: readings, body: strings.Repeat(`{"value":`, 100_000), code: bad, reason: engine.InvalidField, field: "value"},
	{name: "deep unknown field", method: "PUT", path: gap, body: `{"unit":"mm","extra":` + strings.Repeat("[", 100_000), code: bad, reason: engine.UnknownField, field: "extra"},

	// Fields.
	{name: "unknown field", method: "POST", path: readings, body: `{"value":0.8,"colour":"red"}`, code: bad, reason: engine.UnknownField, field: "colour"},
	{name: "unknown field in a batch", method: "POST", path: manyPosts, body: `{"readings":[{"quantity":"pump-3/gap","value":0.8},{"quantity":"pump-3/gap","value":0.8,"colour":1}]}`, code: bad, reason: engine.UnknownField, field: "readings[1].colour"},
	{name: "camelCase", method: "POST", path: readings, body: `{"value":0.8,"readingId":"r1"}`, code: bad, reason: engine.UnknownField, field: "readingId"},
	{name: "camelCase in a declaration", method: "PUT", path: gap, body: `{"unit":"mm","decisionRule":{}}`, code: bad, reason: engine.UnknownField, field: "decisionRule"},
	{name: "missing value", method: "POST", path: readings, body: `{"unit":"mm"}`, code: bad, reason: engine.MissingField, field: "value"},
	{name: "null value", method: "POST", path: readings, body: `{"value":null}`, code: bad, reason: engine.MissingField, field: "value"},
	{name: "missing value in a batch", method: "POST", path: manyPosts, body: `{"readings":[{"quantity":"pump-3/gap","value":0.8},{"quantity":"pump-3/gap"}]}`, code: bad, reason: engine.MissingField, field: "readings[1].value"},
	{name: "missing quantity in a batch", method: "POST", path: manyPosts, body: `{"readings":[{"value":0.8}]}`, code: bad, reason: engine.MissingField, field: "readings[0].quantity"},
	{name: "no readings", method: "POST", path: manyPosts, body: `{"readings":[]}`, code: bad, reason: engine.MissingField, field: "readings"},
	{name: "missing readings", method: "POST", path: manyPosts, body: `{}`, code: bad, reason: engine.MissingField, field: "readings"},
	{name: "value as a string", method: "POST", path: readings, body: `{"value":"0.8"}`, code: bad, reason: engine.InvalidField, field: "value"},
	{name: "value as NaN string", method: "POST", path: readings, body: `{"value":"NaN"}`, code: bad, reason: engine.InvalidField, field: "value"},
	{name: "value as a boolean", method: "POST", path: readings, body: `{"value":true}`, code: bad, reason: engine.InvalidField, field: "value"},
	{name: "value as an object", method: "POST", path: readings, body: `{"value":{}}`, code: bad, reason: engine.InvalidField, field: "value"},
	{name: "value beyond 64 bits", method: "POST", path: readings, body: `{"value":1e309}`, code: bad, reason: engine.InvalidField, field: "value"},
	{name: "value below 64 bits", method: "POST", path: readings, body: `{"value":1e-400}`, code: bad, reason: engine.InvalidField, field: "value"},
	{name: "readings as an object", method: "POST", path: manyPosts, body: `{"readings":{"value":1}}`, code: bad, reason: engine.InvalidField, field: "readings"},
	{name: "a reading as a number", method: "POST", path: manyPosts, body: `{"readings":[0.8]}`, code: bad, reason: engine.InvalidField, field: "readings[0]"},
	{name: "unit as a number", method: "POST", path: readings, body: `{"value":0.8,"unit":1}`, code: bad, reason: engine.InvalidField, field: "unit"},
	{name: "time as a number", method: "POST", path: readings, body: `{"value":0.8,"time":1772366400}`, code: bad, reason: engine.InvalidField, field: "time"},
	{name: "time without zone", method: "POST", path: readings, body: `{"value":0.8,"time":"2026-03-01T11:00:00"}`, code: bad, reason: engine.InvalidField, field: "time"},
	{name: "time of no calendar", method: "POST", path: readings, body: `{"value":0.8,"time":"2026-02-30T11:00:00Z"}`, code: bad, reason: engine.InvalidField, field: "time"},
	{name: "year 10000", method: "POST", path: readings, body: `{"value":0.8,"time":"10000-01-01T00:00:00Z"}`, code: bad, reason: engine.InvalidField, field: "time"},
	{name: "another quantity in the body", method: "POST", path: readings, body: `{"quantity":"store-1/air","value":0.8}`, code: bad, reason: engine.InvalidField, field: "quantity"},
	{name: "reading_id too long", method: "POST", path: readings, body: `{"value":0.8,"reading_id":"` + strings.Repeat("x", 129) + `"}`, code: bad, reason: engine.InvalidField, field: "reading_id"},
	{name: "unit of a reading too long", method: "POST", path: readings, body: `{"value":0.8,"unit":"` + strings.Repeat("x", 33) + `"}`, code: bad, reason: engine.InvalidField, field: "unit"},
	{name: "output field of a reading", method: "POST", path: readings, body: `{"value":0.8,"status":"APPLIED"}`, code: bad, reason: engine.UnknownField, field: "status"},

	// Sizes.
	{name: "batch over its limit", method: "POST", path: manyPosts, body: batchOf(10_001, `{"quantity":"pump-3/gap","value":0.8}`), code: bad, reason: engine.BatchTooLarge, field: "readings"},
	{name: "body over its limit", method: "POST", path: manyPosts, body: `{"readings":[]` + strings.Repeat(" ", 4<<20) + `}`, code: http.StatusRequestEntityTooLarge, reason: engine.BodyTooLarge},
	{name: "declaration over the limit", method: "PUT", path: gap, body: `{"unit":"mm"` + strings.Repeat(" ", 4<<20) + `}`, code: http.StatusRequestEntityTooLarge, reason: engine.BodyTooLarge},

	// Declarations: exclusions and ranges.
	{name: "negative standard deviation", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"mean":1,"standard_deviation":-0.05}}`, code: bad, reason: engine.InvalidField, field: "prior.standard_deviation"},
	{name: "zero standard deviation", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"mean":1,"standard_deviation":0}}`, code: bad, reason: engine.InvalidField, field: "prior.standard_deviation"},
	{name: "huge mean", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"mean":1e308,"standard_deviation":1}}`, code: bad, reason: engine.InvalidField, field: "prior.mean"},
	{name: "half a prior", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"mean":1}}`, code: bad, reason: engine.MissingField, field: "prior.standard_deviation"},
	{name: "half an interval", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"low":1,"high":2}}`, code: bad, reason: engine.MissingField, field: "prior.probability"},
	{name: "two priors", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"mean":1,"standard_deviation":1,"vague":{}}}`, code: bad, reason: engine.InvalidField, field: "prior"},
	{name: "empty prior", method: "PUT", path: gap, body: `{"unit":"mm","prior":{}}`, code: bad, reason: engine.MissingField, field: "prior"},
	{name: "interval upside down", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"low":2,"high":1,"probability":0.9}}`, code: bad, reason: engine.InvalidField, field: "prior.high"},
	{name: "probability of 1", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"low":1,"high":2,"probability":1}}`, code: bad, reason: engine.InvalidField, field: "prior.probability"},
	{name: "prior in year 9999", method: "PUT", path: gap, body: `{"unit":"mm","prior":{"vague":{},"time":"9999-01-01T00:00:00Z"}}`, code: bad, reason: engine.InvalidField, field: "prior.time"},
	{name: "prior after a reading", method: "PUT", path: gap, body: strings.Replace(gapDeclaration, `0.05}`, `0.05,"time":"2026-03-01T12:00:01Z"}`, 1), code: bad, reason: engine.InvalidField, field: "prior.time"},
	{name: "two repeatabilities", method: "PUT", path: gap, body: `{"unit":"mm","repeatability":{"standard_deviation":1,"learned":{}}}`, code: bad, reason: engine.InvalidField, field: "repeatability"},
	{name: "zero repeatability", method: "PUT", path: gap, body: `{"unit":"mm","repeatability":{"standard_deviation":0}}`, code: bad, reason: engine.InvalidField, field: "repeatability.standard_deviation"},
	{name: "half a guess", method: "PUT", path: gap, body: `{"unit":"mm","repeatability":{"learned":{"guess":1}}}`, code: bad, reason: engine.MissingField, field: "repeatability.learned.worth"},
	{name: "worth nothing", method: "PUT", path: gap, body: `{"unit":"mm","repeatability":{"learned":{"guess":1,"worth":0}}}`, code: bad, reason: engine.InvalidField, field: "repeatability.learned.worth"},
	{name: "repeatability taken away", method: "PUT", path: gap, body: `{"unit":"mm"}`, code: bad, reason: engine.InvalidField, field: "repeatability"},
	{name: "walk without per", method: "PUT", path: gap, body: `{"unit":"mm","dynamics":{"random_walk":{"standard_deviation":1}}}`, code: bad, reason: engine.MissingField, field: "dynamics.random_walk.per"},
	{name: "walk per nothing", method: "PUT", path: gap, body: `{"unit":"mm","dynamics":{"random_walk":{"standard_deviation":1,"per":"0s"}}}`, code: bad, reason: engine.InvalidField, field: "dynamics.random_walk.per"},
	{name: "duration in hours", method: "PUT", path: gap, body: `{"unit":"mm","dynamics":{"random_walk":{"standard_deviation":1,"per":"24h"}}}`, code: bad, reason: engine.InvalidField, field: "dynamics.random_walk.per"},
	{name: "duration of ten thousand years", method: "PUT", path: gap, body: `{"unit":"mm","dynamics":{"random_walk":{"standard_deviation":1,"per":"315576000000s"}}}`, code: bad, reason: engine.InvalidField, field: "dynamics.random_walk.per"},
	{name: "two dynamics", method: "PUT", path: gap, body: `{"unit":"mm","dynamics":{"constant":{},"random_walk":{"standard_deviation":1,"per":"1s"}}}`, code: bad, reason: engine.InvalidField, field: "dynamics.random_walk"},
	{name: "learned walk", method: "PUT", path: gap, body: `{"unit":"mm","repeatability":{"learned":{}},"dynamics":{"random_walk":{"standard_deviation":1,"per":"1s"}}}`, code: http.StatusNotImplemented, reason: engine.NotSupported, field: "repeatability.learned"},
	{name: "trend with outliers", method: "PUT", path: gap, body: `{"unit":"mm","repeatability":{"standard_deviation":1},"outliers":{"probability":0.05,"inflation":5},"dynamics":{"linear_trend":{"slope":{"mean":0,"standard_deviation":1,"per":"1s"}}}}`, code: http.StatusNotImplemented, reason: engine.NotSupported, field: "outliers"},
	{name: "empty tolerance", method: "PUT", path: gap, body: `{"unit":"mm","tolerance":{}}`, code: bad, reason: engine.MissingField, field: "tolerance"},
	{name: "tolerance upside down", method: "PUT", path: gap, body: `{"unit":"mm","tolerance":{"lower":2,"upper":1}}`, code: bad, reason: engine.InvalidField, field: "tolerance.upper"},
	{name: "rule that any belief meets", method: "PUT", path: gap, body: `{"unit":"mm","decision_rule":{"conform_probability":0.5}}`, code: bad, reason: engine.InvalidField, field: "decision_rule.conform_probability"},
	{name: "description too long", method: "PUT", path: gap, body: `{"unit":"mm","description":"` + strings.Repeat("x", 513) + `"}`, code: bad, reason: engine.InvalidField, field: "description"},
	{name: "unit too long", method: "PUT", path: gap, body: `{"unit":"` + strings.Repeat("m", 33) + `"}`, code: bad, reason: engine.InvalidField, field: "unit"},
	{name: "unit with a line feed", method: "PUT", path: gap, body: `{"unit":"m\nm"}`, code: bad, reason: engine.InvalidField, field: "unit"},
	{name: "another unit", method: "PUT", path: gap, body: strings.Replace(gapDeclaration, "mm", "cm", 1), code: bad, reason: engine.UnitFixed, field: "unit"},
	{name: "another id in the body", method: "PUT", path: gap, body: `{"id":"other","unit":"mm"}`, code: bad, reason: engine.InvalidField, field: "id"},

	// Conditions.
	{name: "old ETag", method: "PUT", path: gap, body: gapDeclaration, header: []string{"If-Match", `"77"`}, code: http.StatusConflict, reason: engine.ETagMismatch, field: "etag"},
	{name: "old etag in the body", method: "PUT", path: gap, body: `{"etag":"77",` + gapDeclaration[1:], code: http.StatusConflict, reason: engine.ETagMismatch, field: "etag"},
	{name: "old ETag of a retirement", method: "DELETE", path: gap, header: []string{"If-Match", `"77"`}, code: http.StatusConflict, reason: engine.ETagMismatch, field: "etag"},
	{name: "exists", method: "PUT", path: gap, body: gapDeclaration, header: []string{"If-None-Match", "*"}, code: http.StatusConflict, reason: engine.AlreadyExists},

	// Paths, methods, parameters.
	{name: "no such path", method: "GET", path: "/v2/quantities", code: http.StatusNotFound, reason: engine.NotFound},
	{name: "trailing slash", method: "GET", path: "/v1/quantities/", code: http.StatusNotFound, reason: engine.NotFound},
	{name: "quantity not declared", method: "GET", path: "/v1/quantities/nobody", code: http.StatusNotFound, reason: engine.NotFound, field: "id"},
	{name: "belief of nobody", method: "GET", path: "/v1/quantities/nobody/belief", code: http.StatusNotFound, reason: engine.NotFound, field: "quantity"},
	{name: "retire nobody", method: "DELETE", path: "/v1/quantities/nobody", code: http.StatusNotFound, reason: engine.NotFound, field: "id"},
	{name: "put through for nobody", method: "POST", path: "/v1/quantities/nobody/readings:apply_refused", code: http.StatusNotFound, reason: engine.NotFound, field: "quantity"},
	{name: "ID with a space", method: "PUT", path: "/v1/quantities/a%20b", body: gapDeclaration, code: bad, reason: engine.InvalidID, field: "id"},
	{name: "ID upwards", method: "PUT", path: "/v1/quantities/a%2F..%2Fb", body: gapDeclaration, code: bad, reason: engine.InvalidID, field: "id"},
	{name: "ID of 256 bytes", method: "PUT", path: "/v1/quantities/" + strings.Repeat("x", 256), body: gapDeclaration, code: bad, reason: engine.InvalidID, field: "id"},
	{name: "ID in invalid UTF-8", method: "PUT", path: "/v1/quantities/%ff", body: gapDeclaration, code: bad, reason: engine.InvalidID, field: "id"},
	{name: "ID with NUL", method: "GET", path: "/v1/quantities/a%00b/belief", code: bad, reason: engine.InvalidID, field: "quantity"},
	{name: "wrong method", method: "PATCH", path: gap, body: gapDeclaration, code: http.StatusMethodNotAllowed, reason: engine.NotSupported},
	{name: "POST on a belief", method: "POST", path: gap + "/belief", body: "{}", code: http.StatusMethodNotAllowed, reason: engine.NotSupported},
	{name: "method override", method: "POST", path: gap, body: "", header: []string{"X-HTTP-Method-Override", "DELETE", "Content-Type", "application/x-www-form-urlencoded"}, code: http.StatusMethodNotAllowed, reason: engine.NotSupported},
	{name: "no acceptable type", method: "GET", path: gap, header: []string{"Accept", "image/png"}, code: http.StatusNotAcceptable, reason: engine.NotSupported},
	{name: "unknown parameter", method: "GET", path: gap + "/belief?colour=red", code: bad, reason: engine.UnknownParameter, field: "colour"},
	{name: "parameter on a POST", method: "POST", path: readings + "?value=0.8", body: `{"value":0.8}`, code: bad, reason: engine.UnknownParameter, field: "value"},
	{name: "camelCase parameter", method: "GET", path: gap + "/belief?coverageProbability=0.9", code: bad, reason: engine.UnknownParameter, field: "coverageProbability"},
	{name: "parameter given twice", method: "GET", path: gap + "/belief?threshold=1&threshold=2", code: bad, reason: engine.InvalidField, field: "threshold"},
	{name: "query not escaped", method: "GET", path: gap + "/belief?threshold=%zz", code: bad, reason: engine.UnknownParameter},
	{name: "coverage of 1", method: "GET", path: gap + "/belief?coverage_probability=1", code: bad, reason: engine.InvalidField, field: "coverage_probability"},
	{name: "coverage NaN", method: "GET", path: gap + "/belief?coverage_probability=NaN", code: bad, reason: engine.InvalidField, field: "coverage_probability"},
	{name: "threshold 1e308", method: "GET", path: gap + "/belief?threshold=1e308", code: bad, reason: engine.InvalidField, field: "threshold"},
	{name: "belief in year 9999", method: "GET", path: gap + "/belief?time=9999-01-01T00:00:00Z", code: bad, reason: engine.InvalidField, field: "time"},
	{name: "belief for an unknown instrument", method: "GET", path: gap + "/belief?instrument=calliper-7", code: http.StatusNotFound, reason: engine.NotFound, field: "instrument"},
	{name: "negative page", method: "GET", path: "/v1/quantities?page_size=-1", code: bad, reason: engine.InvalidField, field: "page_size"},
	{name: "page of 1e2", method: "GET", path: "/v1/beliefs?page_size=1e2", code: bad, reason: engine.InvalidField, field: "page_size"},
	{name: "page token made up", method: "GET", path: "/v1/quantities?page_token=abc", code: bad, reason: engine.InvalidField, field: "page_token"},
	{name: "status by number", method: "GET", path: readings + "?status=1", code: bad, reason: engine.InvalidField, field: "status"},
	{name: "status zero", method: "GET", path: readings + "?status=UNSPECIFIED", code: bad, reason: engine.InvalidField, field: "status"},
	{name: "all readings of all", method: "GET", path: "/v1/readings", code: bad, reason: engine.MissingField, field: "status"},
	{name: "request ID too long", method: "POST", path: readings, body: `{"value":0.8}`, header: []string{"X-Request-Id", strings.Repeat("x", 129)}, code: bad, reason: engine.InvalidField, field: "x-request-id"},
}

// problem is what an error says.
type problem struct {
	reason  engine.Reason
	field   string
	message string
}

// problem reads the error in an answer and insists that it is complete: code,
// domain, and one sentence that names the field and what to do.
func (a answer) problem() problem {
	a.t.Helper()
	st := new(status.Status)
	ok := answer{a.t, http.StatusOK, a.header, a.body}
	ok.into(st)
	return checkProblem(a.t, st)
}

func checkProblem(t testing.TB, st *status.Status) problem {
	t.Helper()
	p := problem{message: st.GetMessage()}
	for _, detail := range st.GetDetails() {
		m, err := detail.UnmarshalNew()
		if err != nil {
			t.Fatal(err)
		}
		switch d := m.(type) {
		case *errdetails.ErrorInfo:
			p.reason = engine.Reason(d.GetReason())
			if d.GetDomain() != "leadline" {
				t.Errorf("domain %q", d.GetDomain())
			}
		case *errdetails.BadRequest:
			p.field = d.GetFieldViolations()[0].GetField()
		}
	}
	if p.reason == engine.MalformedBody { // which gives the byte
		checkSentence(t, p.message, "")
	} else {
		checkSentence(t, p.message, p.field)
	}
	return p
}

// checkSentence insists on one line that names the field, if one is to blame,
// and has a remedy after a semicolon. Of two fields of one object that need each
// other it may name the first with its path and the second without.
func checkSentence(t testing.TB, sentence, field string) {
	t.Helper()
	_, remedy, ok := strings.Cut(sentence, "; ")
	if !ok || remedy == "" || strings.ContainsAny(sentence, "\n\r") || len(sentence) > 400 {
		t.Errorf("sentence %q has no remedy, several lines or no end", sentence)
	}
	dot := strings.LastIndexByte(field, '.') + 1
	beside := dot > 0 && strings.Contains(sentence, field[:dot]) && strings.Contains(sentence, " "+field[dot:])
	if !strings.Contains(sentence, field) && !beside {
		t.Errorf("sentence %q does not name %s", sentence, field)
	}
}

func (r *refusedRequest) check(t *testing.T, s *service) {
	a := s.under(t).call(r.method, r.path, r.body, r.header...)
	if a.code != r.code {
		t.Fatalf("status %d, want %d; body %s", a.code, r.code, a.body)
	}
	if p := a.problem(); p.reason != r.reason || p.field != r.field {
		t.Errorf("reason %s of field %q, want %s of %q; %s", p.reason, p.field, r.reason, r.field, p.message)
	}
}
