package published_test

import (
	"net/http"
	"strings"
	"testing"
	"time"

	"google.golang.org/genproto/googleapis/rpc/status"
	"google.golang.org/grpc/codes"
	grpcstatus "google.golang.org/grpc/status"
	"google.golang.org/protobuf/encoding/protojson"
	"google.golang.org/protobuf/proto"
	"google.golang.org/protobuf/types/known/durationpb"
	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// probe is where a refused declaration goes; probe-1 has readings, under both of its
// calibrations, in Cel and without own uncertainty.
const (
	probe      = "/v1/instruments/probe-1"
	newProbe   = "/v1/instruments/probe-9"
	calibrated = `{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":0.1`
)

// withCalibrations is the body of an instrument with the calibrations given.
func withCalibrations(all ...string) string {
	return `{"unit":"Cel","repeatability":{"standard_deviation":0.1},"calibrations":[` + strings.Join(all, ",") + `]}`
}

// refusedInstruments are declarations of instruments and renewals to be refused as a
// whole, over HTTP as they stand, over gRPC as messages where they make one.
var refusedInstruments = []refusedRequest{
	// Calibrations that overlap, also where the zones hide it.
	{name: "the same valid_from", path: newProbe, body: withCalibrations(calibrated+`}`, calibrated+`}`), reason: engine.InvalidField, field: "calibrations[1].valid_from"},
	{name: "the same valid_from in two zones", path: newProbe, body: withCalibrations(calibrated+`}`, `{"valid_from":"2026-01-01T03:30:00+03:30","bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[1].valid_from"},
	{name: "later by the clock, earlier by the zone", path: newProbe, body: withCalibrations(calibrated+`}`, `{"valid_from":"2026-01-01T05:00:00+06:00","bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[1].valid_from"},
	{name: "out of order", path: newProbe, body: withCalibrations(calibrated+`}`, `{"valid_from":"2025-12-31T23:59:59.999999999Z","bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[1].valid_from"},

	// Uncertainties.
	{name: "negative uncertainty of a bias", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":-0.1}`), reason: engine.InvalidField, field: "calibrations[0].bias_standard_uncertainty"},
	{name: "no uncertainty of a bias", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00Z","bias":0.1}`), reason: engine.MissingField, field: "calibrations[0].bias_standard_uncertainty"},
	{name: "negative expanded uncertainty", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00Z","expanded_uncertainty":-0.2,"coverage_factor":2}`), reason: engine.InvalidField, field: "calibrations[0].expanded_uncertainty"},
	{name: "negative coverage factor", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00Z","expanded_uncertainty":0.2,"coverage_factor":-2}`), reason: engine.InvalidField, field: "calibrations[0].coverage_factor"},
	{name: "expanded uncertainty alone", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00Z","expanded_uncertainty":0.2}`), reason: engine.MissingField, field: "calibrations[0].coverage_factor"},
	{name: "negative drift", path: newProbe, body: withCalibrations(calibrated + `,"drift_standard_deviation":-0.1,"drift_per":"86400s"}`), reason: engine.InvalidField, field: "calibrations[0].drift_standard_deviation"},
	{name: "drift in negative time", path: newProbe, body: withCalibrations(calibrated + `,"drift_standard_deviation":0.1,"drift_per":"-86400s"}`), reason: engine.InvalidField, field: "calibrations[0].drift_per"},
	{name: "negative repeatability", path: newProbe, body: `{"unit":"Cel","repeatability":{"standard_deviation":-0.1}}`, reason: engine.InvalidField, field: "repeatability.standard_deviation"},
	{name: "negative correlated noise", path: newProbe, body: `{"unit":"Cel","repeatability":{"correlated":{"standard_deviation":-0.1,"correlation_time":"60s"}}}`, reason: engine.InvalidField, field: "repeatability.correlated.standard_deviation"},
	{name: "negative correlation time", path: newProbe, body: `{"unit":"Cel","repeatability":{"correlated":{"standard_deviation":0.1,"correlation_time":"-60s"}}}`, reason: engine.InvalidField, field: "repeatability.correlated.correlation_time"},
	{name: "negative error of an occasion", path: newProbe, body: `{"unit":"Cel","repeatability":{"between_occasions":-0.1}}`, reason: engine.InvalidField, field: "repeatability.between_occasions"},
	{name: "negative resolution", path: newProbe, body: `{"unit":"Cel","resolution":-0.1}`, reason: engine.InvalidField, field: "resolution"},
	{name: "uncertainty as text", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00Z","bias_standard_uncertainty":"0.1 K"}`), reason: engine.InvalidField, field: "calibrations[0].bias_standard_uncertainty"},

	// References and relative parts.
	{name: "reference without its uncertainty", path: newProbe, body: withCalibrations(calibrated + `,"reference":"ice point"}`), reason: engine.MissingField, field: "calibrations[0].common_standard_uncertainty"},
	{name: "negative common part", path: newProbe, body: withCalibrations(calibrated + `,"reference":"ice point","common_standard_uncertainty":-0.05}`), reason: engine.InvalidField, field: "calibrations[0].common_standard_uncertainty"},
	{name: "common part above the whole", path: newProbe, body: withCalibrations(calibrated + `,"reference":"ice point","common_standard_uncertainty":0.11}`), reason: engine.InvalidField, field: "calibrations[0].common_standard_uncertainty"},
	{name: "common part of nothing", path: newProbe, body: withCalibrations(calibrated + `,"common_standard_uncertainty":0.05}`), reason: engine.MissingField, field: "calibrations[0].reference"},
	{name: "relative part alone, for values around zero", path: newProbe, body: `{"unit":"Cel","repeatability":{"relative":0.01}}`, reason: engine.MissingField, field: "repeatability.standard_deviation"},
	{name: "negative relative part", path: newProbe, body: `{"unit":"Cel","repeatability":{"standard_deviation":0.1,"relative":-0.01}}`, reason: engine.InvalidField, field: "repeatability.relative"},
	{name: "relative bias in percent", path: newProbe, body: withCalibrations(calibrated + `,"relative_bias_standard_uncertainty":2}`), reason: engine.InvalidField, field: "calibrations[0].relative_bias_standard_uncertainty"},

	// Times: without a zone, as a date, of another age, the wrong way round.
	{name: "valid_from without a zone", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00","bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[0].valid_from"},
	{name: "valid_from as a date", path: newProbe, body: withCalibrations(`{"valid_from":"2026-01-01","bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[0].valid_from"},
	{name: "valid_from in seconds since 1970", path: newProbe, body: withCalibrations(`{"valid_from":1767225600,"bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[0].valid_from"},
	{name: "valid_from on 30 February", path: newProbe, body: withCalibrations(`{"valid_from":"2026-02-30T00:00:00Z","bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[0].valid_from"},
	{name: "valid_from in year 1", path: newProbe, body: withCalibrations(`{"valid_from":"0001-01-01T00:00:00Z","bias_standard_uncertainty":0.1}`), reason: engine.InvalidField, field: "calibrations[0].valid_from"},
	{name: "due at valid_from, in another zone", path: newProbe, body: withCalibrations(calibrated + `,"due":"2026-01-01T01:00:00+01:00"}`), reason: engine.InvalidField, field: "calibrations[0].due"},
	{name: "due before valid_from", path: newProbe, body: withCalibrations(calibrated + `,"due":"2025-01-01T00:00:00Z"}`), reason: engine.InvalidField, field: "calibrations[0].due"},
	{name: "due in year 9999", path: newProbe, body: withCalibrations(calibrated + `,"due":"9999-12-31T00:00:00Z"}`), reason: engine.InvalidField, field: "calibrations[0].due"},

	// What readings rest on.
	{name: "all calibrations removed", path: probe, body: withCalibrations(), reason: engine.InvalidField, field: "calibrations"},
	{name: "a calibration removed", path: probe, body: withCalibrations(`{"valid_from":"2026-01-01T00:00:00Z","bias":0.1,"bias_standard_uncertainty":0.2}`), reason: engine.InvalidField, field: "calibrations"},
	{name: "another unit", path: probe, body: strings.Replace(thermometers[0].declaration, `"Cel"`, `"K"`, 1), reason: engine.UnitFixed, field: "unit"},
	{name: "repeatability removed", path: probe, body: strings.Replace(thermometers[0].declaration, `"standard_deviation":0.1,"correlated"`, `"correlated"`, 1), reason: engine.InvalidField, field: "repeatability.standard_deviation"},
}

// startRefusingInstruments has readings by every thermometer, of which the last is
// then retired.
func startRefusingInstruments(t *testing.T) *service {
	s := startMoving(t)
	s.postAll(movingReadings(5))
	s.call("DELETE", "/v1/instruments/probe-3", "").ok()
	return s
}

// instrumentTexts are the instruments as listed.
func (s *service) instrumentTexts() string {
	s.t.Helper()
	return s.call("GET", "/v1/instruments?show_retired=true&page_size=100", "").ok().body
}

func TestRefusedInstrumentsChangeNothing(t *testing.T) {
	s := startRefusingInstruments(t)
	at := s.clock.Now()
	before, instruments, position := s.snapshotAll(at), s.instrumentTexts(), s.scrape().number(t, "leadline_ledger_position")
	overGRPC := 0
	for _, r := range refusedInstruments {
		t.Run(r.name, func(t *testing.T) {
			r.method, r.code = "PUT", bad
			r.check(t, s)
			m := new(leadlinev1.Instrument)
			if protojson.Unmarshal([]byte(r.body), m) != nil {
				return // no message can say that
			}
			overGRPC++
			_, err := s.instruments.DeclareInstrument(t.Context(), &leadlinev1.DeclareInstrumentRequest{Id: strings.TrimPrefix(r.path, "/v1/instruments/"), Instrument: m})
			s.under(t).wantSameProblem(&r, err)
		})
	}
	if least := len(refusedInstruments) - 6; overGRPC < least {
		t.Errorf("%d refused over gRPC, want at least %d", overGRPC, least)
	}
	wantSameSnapshot(t, "after the refused instruments", s.snapshotAll(at), before)
	if got := s.instrumentTexts(); got != instruments {
		t.Errorf("instruments %s\nwere %s", got, instruments)
	}
	if got := s.scrape().number(t, "leadline_ledger_position"); got != position {
		t.Errorf("ledger position %v, was %v: a refused declaration was recorded", got, position)
	}
}

// wantSameProblem insists that an error over gRPC has the code that belongs to the
// reason, and says what HTTP does.
func (s *service) wantSameProblem(r *refusedRequest, err error) {
	s.t.Helper()
	got := grpcstatus.Convert(err)
	want := codes.InvalidArgument
	if r.reason == engine.UnitFixed {
		want = codes.FailedPrecondition
	}
	if got.Code() != want {
		s.t.Fatalf("code %v, want %v: %v", got.Code(), want, got)
	}
	overHTTP := new(status.Status)
	answer{s.t, http.StatusOK, nil, s.call(r.method, r.path, r.body, r.header...).body}.into(overHTTP)
	if p := checkProblem(s.t, got.Proto()); p.reason != r.reason || p.field != r.field || p.message != overHTTP.GetMessage() {
		s.t.Errorf("over gRPC %s of field %q: %q; over HTTP %s of %q: %q", p.reason, p.field, p.message, r.reason, r.field, overHTTP.GetMessage())
	}
}

// declareUnsupported declares quantities and instruments each of which can be believed, but not
// all of them together.
func (s *service) declareUnsupported() {
	s.t.Helper()
	s.declareInstrument("display", `{"unit":"Cel","resolution":0.1}`)
	s.declareInstrument("calibrated-display", `{"unit":"Cel","resolution":0.1,"calibrations":[`+calibrated+`}]}`)
	s.declareInstrument("drifting-display", `{"unit":"Cel","resolution":0.5,"calibrations":[`+calibrated+`,"drift_standard_deviation":0.1,"drift_per":"86400s"}]}`)
	s.declareInstrument("own-repeatability", `{"unit":"Cel","repeatability":{"learned":{"guess":0.1,"worth":4}}}`)
	const guessed = `"repeatability":{"learned":{"guess":0.1,"worth":4}}`
	s.declare("learned", `{"unit":"Cel","repeatability":{"learned":{}}}`)
	s.declare("walk", `{"unit":"Cel",`+guessed+`,"dynamics":{"random_walk":{"standard_deviation":1,"per":"3600s"}}}`)
	s.declare("guessed", `{"unit":"Cel",`+guessed+`}`)
	s.declare("fine", `{"unit":"Cel","repeatability":{"standard_deviation":0.05}}`)
	s.postAll([]posted{{Quantity: "guessed", Value: 0.4}, {Quantity: "guessed", Value: 0.6}})
}

// Readings, renewals and questions that instruments and time forbid, by every way.
func TestRefusedByInstrumentsOrTime(t *testing.T) {
	s := startRefusingInstruments(t)
	now := s.clock.Now()
	s.declareInstrument("depth-gauge", `{"unit":"mm","repeatability":{"standard_deviation":0.1}}`)
	s.declareInstrument("bare-probe", `{"unit":"Cel"}`)
	s.declareUnsupported()
	before := s.snapshotAll(now)
	by := func(quantity, instrument string, after time.Duration) posted {
		return posted{Quantity: quantity, Value: 0.5, Instrument: instrument, Time: rfc3339(now.Add(after))}
	}
	for _, tt := range []struct {
		name    string
		reading posted
		reason  engine.Reason
		says    string
	}{
		{"a retired instrument", by("store-1/air", "probe-3", 0), engine.InstrumentRetired, "retired"},
		{"a retired instrument, late", by("store-1/air", "probe-3", -time.Hour), engine.InstrumentRetired, "retired"},
		{"an unknown instrument", by("store-1/air", "probe-8", 0), engine.UnknownInstrument, "probe-8"},
		{"an instrument of another unit", by("store-1/air", "depth-gauge", 0), engine.UnitMismatch, `"mm"`},
		{"nobody's repeatability", by("compressor-2/bearing", "bare-probe", 0), engine.NoRepeatability, "repeatability"},
		{"a repeatability learned from a display alone", by("learned", "display", 0), engine.NotSupported, "the display alone"},
		{"a walk that learns its repeatability from a calibrated display", by("walk", "calibrated-display", 0), engine.NotSupported, "repeatability.learned.floor of at least the resolution"},
		{"a second learned repeatability", by("guessed", "own-repeatability", 0), engine.NotSupported, "one learned repeatability"},
		{"a coarse display that drifts", by("fine", "drifting-display", 0), engine.NotSupported, "one instrument whose calibrations state bias and uncertainty alone"},
		{"an hour ahead, as by local time", by("store-1/air", "probe-1", time.Hour), engine.TimeInFuture, "time"},
		{"before the prior", by("compressor-2/bearing", "probe-1", -5*time.Hour), engine.BeforePrior, "prior"},
	} {
		t.Run(tt.name, func(t *testing.T) {
			u := s.under(t)
			for _, response := range []*leadlinev1.PostReadingsResponse{u.postHTTP([]posted{tt.reading}), u.postGRPC([]posted{tt.reading})} {
				r := response.GetResults()[0]
				if r.GetStatus() != leadlinev1.Reading_REFUSED || r.GetReason() != string(tt.reason) {
					t.Errorf("%v, want %s", r, tt.reason)
				}
				checkSentence(t, r.GetDetail(), "")
				if !strings.Contains(r.GetDetail(), tt.says) {
					t.Errorf("%q doesn't speak of %s", r.GetDetail(), tt.says)
				}
			}
		})
	}
	wantSameSnapshot(t, "after the refused readings", s.snapshotAll(now), before)
	s.checkRefusedRenewals(now)
	wantSameSnapshot(t, "after the refused renewals", s.snapshotAll(now), before)
}

// checkRefusedRenewals asks for renewals and forecasts that can't be, over both
// protocols.
func (s *service) checkRefusedRenewals(now time.Time) {
	s.t.Helper()
	const bearing = "/v1/quantities/compressor-2%2Fbearing"
	ctx := s.t.Context()
	renew := func(change func(*leadlinev1.RenewQuantityRequest)) error {
		m := &leadlinev1.RenewQuantityRequest{Id: "compressor-2/bearing", Prior: &leadlinev1.Prior{Mean: proto.Float64(0), StandardDeviation: proto.Float64(1)}}
		change(m)
		return second(s.quantities.RenewQuantity(ctx, m))
	}
	for _, tt := range []struct {
		r   refusedRequest
		err error
	}{
		{
			refusedRequest{method: "POST", path: bearing + ":renew", body: `{"time":"` + rfc3339(now.Add(time.Hour)) + `","prior":{"mean":0,"standard_deviation":1}}`, reason: engine.InvalidField, field: "time"},
			renew(func(m *leadlinev1.RenewQuantityRequest) { m.Time = timestamppb.New(now.Add(time.Hour)) }),
		}, {
			refusedRequest{method: "POST", path: bearing + ":renew", body: `{"time":"2026-03-01T07:00:00Z","prior":{"mean":0,"standard_deviation":1}}`, reason: engine.InvalidField, field: "prior.time"},
			renew(func(m *leadlinev1.RenewQuantityRequest) { m.Time = timestamppb.New(now.Add(-5 * time.Hour)) }),
		}, {
			refusedRequest{method: "POST", path: bearing + ":renew", body: `{"prior":{"mean":0,"standard_deviation":-1}}`, reason: engine.InvalidField, field: "prior.standard_deviation"},
			renew(func(m *leadlinev1.RenewQuantityRequest) { m.Prior.StandardDeviation = proto.Float64(-1) }),
		}, {
			refusedRequest{method: "GET", path: bearing + "/forecast?horizon=-1s", reason: engine.InvalidField, field: "horizon"},
			second(s.beliefs.ForecastBelief(ctx, &leadlinev1.ForecastBeliefRequest{Quantity: "compressor-2/bearing", Horizon: durationpb.New(-time.Second)})),
		}, {
			refusedRequest{method: "GET", path: bearing + "/forecast?horizon=8000000000s", reason: engine.InvalidField, field: "horizon"},
			second(s.beliefs.ForecastBelief(ctx, &leadlinev1.ForecastBeliefRequest{Quantity: "compressor-2/bearing", Horizon: &durationpb.Duration{Seconds: 8000000000}})),
		},
	} {
		tt.r.code = bad
		tt.r.check(s.t.(*testing.T), s)
		s.wantSameProblem(&tt.r, tt.err)
	}
}
