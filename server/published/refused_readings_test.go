package published_test

import (
	"math"
	"testing"
	"time"

	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// refusedReading is a reading that decodes, and is refused with a status.
type refusedReading struct {
	name    string
	reading *leadlinev1.Reading
	json    string // the same over HTTP; empty where JSON has no way to say it
	reason  engine.Reason
	detail  string // what the detail has to name
}

func reading(quantity string, value float64) *leadlinev1.Reading {
	return &leadlinev1.Reading{Quantity: quantity, Value: &value}
}

func at(r *leadlinev1.Reading, t time.Time) *leadlinev1.Reading {
	r.Time = timestamppb.New(t)
	return r
}

func with(r *leadlinev1.Reading, change func(*leadlinev1.Reading)) *leadlinev1.Reading {
	change(r)
	return r
}

// refusedReadings are for the service of startRefusals, whose clock shows
// refusalTime.
func refusedReadings(now time.Time) []refusedReading {
	const id = "pump-3/gap"
	uncertain := func(u float64) *leadlinev1.Reading {
		return with(reading(id, 0.8), func(r *leadlinev1.Reading) { r.RandomStandardUncertainty = &u })
	}
	named := func(value float64, t time.Time) *leadlinev1.Reading {
		return with(at(reading(id, value), t), func(r *leadlinev1.Reading) { r.ReadingId = "taken" })
	}
	year9999 := time.Date(9999, 12, 31, 23, 59, 59, 0, time.UTC)
	return []refusedReading{
		{name: "unknown quantity", reading: reading("nobody", 0.8), json: `{"quantity":"nobody","value":0.8}`, reason: engine.UnknownQuantity, detail: `"nobody"`},
		{name: "quantity that is no ID", reading: reading("no ID", 0.8), json: `{"quantity":"no ID","value":0.8}`, reason: engine.UnknownQuantity, detail: `"no ID"`},
		{name: "retired", reading: reading("old", 0.8), json: `{"quantity":"old","value":0.8}`, reason: engine.QuantityRetired, detail: "retired"},
		{
			name: "unknown instrument", reading: with(reading(id, 0.8), func(r *leadlinev1.Reading) { r.Instrument = "calliper-7" }),
			json: `{"quantity":"pump-3/gap","value":0.8,"instrument":"calliper-7"}`, reason: engine.UnknownInstrument, detail: `instrument "calliper-7"`,
		},
		{
			name: "retired instrument", reading: with(reading(id, 0.8), func(r *leadlinev1.Reading) { r.Instrument = "worn-feeler" }),
			json: `{"quantity":"pump-3/gap","value":0.8,"instrument":"worn-feeler"}`, reason: engine.InstrumentRetired, detail: `instrument "worn-feeler"`,
		},
		{
			name: "instrument in another unit", reading: with(reading(id, 0.8), func(r *leadlinev1.Reading) { r.Instrument = "thermometer" }),
			json: `{"quantity":"pump-3/gap","value":0.8,"instrument":"thermometer"}`, reason: engine.UnitMismatch, detail: `instrument "thermometer"`,
		},
		{
			name: "occasion of no instrument", reading: with(reading(id, 0.8), func(r *leadlinev1.Reading) { r.Occasion = "round 3" }),
			json: `{"quantity":"pump-3/gap","value":0.8,"occasion":"round 3"}`, reason: engine.NotSupported, detail: "occasion",
		},
		{
			name: "other unit", reading: with(reading(id, 0.8), func(r *leadlinev1.Reading) { r.Unit = "µm" }),
			json: `{"quantity":"pump-3/gap","value":0.8,"unit":"µm"}`, reason: engine.UnitMismatch, detail: `unit is "µm"`,
		},
		{name: "1e308", reading: reading(id, 1e308), json: `{"quantity":"pump-3/gap","value":1e308}`, reason: engine.ValueOutOfRange, detail: "value is 1e+308"},
		{name: "-1e101", reading: reading(id, -1e101), json: `{"quantity":"pump-3/gap","value":-1e101}`, reason: engine.ValueOutOfRange, detail: "value is -1e+101"},
		{name: "1e-101", reading: reading(id, 1e-101), json: `{"quantity":"pump-3/gap","value":1e-101}`, reason: engine.ValueOutOfRange, detail: "value is 1e-101"},
		{name: "subnormal", reading: reading(id, 5e-324), json: `{"quantity":"pump-3/gap","value":5e-324}`, reason: engine.ValueOutOfRange, detail: "value is 5e-324"},
		{name: "NaN", reading: reading(id, math.NaN()), reason: engine.ValueOutOfRange, detail: "value is NaN"},
		{name: "infinity", reading: reading(id, math.Inf(1)), reason: engine.ValueOutOfRange, detail: "value is +Inf"},
		{name: "minus infinity", reading: reading(id, math.Inf(-1)), reason: engine.ValueOutOfRange, detail: "value is -Inf"},
		{
			name: "square overflows in units of r", reading: with(reading(id, 1e99), func(r *leadlinev1.Reading) { r.RandomStandardUncertainty = new(1e-99) }),
			json: `{"quantity":"pump-3/gap","value":1e99,"random_standard_uncertainty":1e-99}`, reason: engine.ValueOutOfRange, detail: "value 1e+99",
		},
		{name: "year 9999", reading: at(reading(id, 0.8), year9999), json: `{"quantity":"pump-3/gap","value":0.8,"time":"9999-12-31T23:59:59Z"}`, reason: engine.TimeOutOfRange, detail: "time"},
		{
			name: "year 1", reading: at(reading(id, 0.8), time.Date(1, 1, 1, 0, 0, 0, 0, time.UTC)),
			json: `{"quantity":"pump-3/gap","value":0.8,"time":"0001-01-01T00:00:00Z"}`, reason: engine.TimeOutOfRange, detail: "time",
		},
		{
			name: "1677", reading: at(reading(id, 0.8), time.Date(1677, 12, 31, 23, 59, 59, 0, time.UTC)),
			json: `{"quantity":"pump-3/gap","value":0.8,"time":"1677-12-31T23:59:59Z"}`, reason: engine.TimeOutOfRange, detail: "time",
		},
		{
			name: "ahead of the clock", reading: at(reading(id, 0.8), now.Add(5*time.Minute+1)),
			json: `{"quantity":"pump-3/gap","value":0.8,"time":"` + rfc3339(now.Add(5*time.Minute+1)) + `"}`, reason: engine.TimeInFuture, detail: "time",
		},
		{
			name: "2262", reading: at(reading(id, 0.8), time.Date(2262, 1, 1, 0, 0, 0, 0, time.UTC)),
			json: `{"quantity":"pump-3/gap","value":0.8,"time":"2262-01-01T00:00:00Z"}`, reason: engine.TimeInFuture, detail: "time",
		},
		{
			name: "before the prior", reading: at(reading("timed", 1), noon.Add(-1)),
			json: `{"quantity":"timed","value":1,"time":"` + rfc3339(noon.Add(-1)) + `"}`, reason: engine.BeforePrior, detail: "time",
		},
		{name: "no repeatability", reading: reading("winch.wall", 8), json: `{"quantity":"winch.wall","value":8}`, reason: engine.NoRepeatability, detail: "random_standard_uncertainty"},
		{name: "uncertainty 0", reading: uncertain(0), json: `{"quantity":"pump-3/gap","value":0.8,"random_standard_uncertainty":0}`, reason: engine.RandomUncertaintyInvalid, detail: "random_standard_uncertainty is 0"},
		{name: "uncertainty -1", reading: uncertain(-1), json: `{"quantity":"pump-3/gap","value":0.8,"random_standard_uncertainty":-1}`, reason: engine.RandomUncertaintyInvalid, detail: "random_standard_uncertainty is -1"},
		{name: "uncertainty 1e-101", reading: uncertain(1e-101), json: `{"quantity":"pump-3/gap","value":0.8,"random_standard_uncertainty":1e-101}`, reason: engine.RandomUncertaintyInvalid, detail: "random_standard_uncertainty is 1e-101"},
		{name: "uncertainty 1e308", reading: uncertain(1e308), json: `{"quantity":"pump-3/gap","value":0.8,"random_standard_uncertainty":1e308}`, reason: engine.RandomUncertaintyInvalid, detail: "random_standard_uncertainty is 1e+308"},
		{name: "uncertainty NaN", reading: uncertain(math.NaN()), reason: engine.RandomUncertaintyInvalid, detail: "random_standard_uncertainty is NaN"},
		{name: "uncertainty infinite", reading: uncertain(math.Inf(1)), reason: engine.RandomUncertaintyInvalid, detail: "random_standard_uncertainty is +Inf"},
		{
			name: "ID taken, another value", reading: named(0.9, now), reason: engine.ReadingIDConflict, detail: `reading_id "taken"`,
			json: `{"quantity":"pump-3/gap","value":0.9,"time":"` + rfc3339(now) + `","reading_id":"taken"}`,
		},
		{
			name: "ID taken, another time", reading: named(0.8, now.Add(-time.Hour)), reason: engine.ReadingIDConflict, detail: `reading_id "taken"`,
			json: `{"quantity":"pump-3/gap","value":0.8,"time":"` + rfc3339(now.Add(-time.Hour)) + `","reading_id":"taken"}`,
		},
	}
}

// startRefusals starts a service with something of every kind to be refused at.
func startRefusals(t *testing.T) *service {
	s := startAgreement(t)
	s.declare("old", `{"unit":"mm","prior":{"mean":1,"standard_deviation":1},"repeatability":{"standard_deviation":0.1}}`)
	s.postAll(readingsOf("old", []float64{1.1, 0.9}))
	s.call("DELETE", quantityPath("old"), "").ok()
	s.call("PUT", "/v1/instruments/thermometer", `{"unit":"Cel"}`).ok()
	s.call("PUT", "/v1/instruments/worn-feeler", `{"unit":"mm"}`).ok()
	s.call("DELETE", "/v1/instruments/worn-feeler", "").ok()
	s.declare("timed", `{"unit":"mm","prior":{"mean":1,"standard_deviation":1,"time":"`+rfc3339(noon)+`"},"repeatability":{"standard_deviation":0.1}}`)
	s.postAll(readingsOf("timed", []float64{1.1, 0.9}))
	s.postAll([]posted{{Quantity: "pump-3/gap", Value: 0.8, Time: rfc3339(s.clock.Now()), ID: "taken"}})
	return s
}

func TestRefusedReadingsChangeNothingAndAreKept(t *testing.T) {
	s := startRefusals(t)
	now := s.clock.Now()
	before, page := s.snapshotAll(now), s.scrape()
	want := map[engine.Reason]int{}
	for _, tt := range refusedReadings(now) {
		t.Run(tt.name, func(t *testing.T) {
			for _, result := range s.under(t).refuse(tt) {
				want[tt.reason]++
				if result.GetStatus() != leadlinev1.Reading_REFUSED || result.GetReason() != string(tt.reason) {
					t.Errorf("%v %s (%s), want %s", result.GetStatus(), result.GetReason(), result.GetDetail(), tt.reason)
				}
				checkSentence(t, result.GetDetail(), tt.detail)
			}
		})
	}
	wantSameSnapshot(t, "after the refused readings", s.snapshotAll(now), before)
	after := s.scrape()
	for _, reason := range engine.ReadingReasons {
		name := `leadline_readings_total{reason="` + string(reason) + `",status="REFUSED"}`
		if got := int(after.number(t, name) - page.number(t, name)); got != want[reason] {
			t.Errorf("%d readings counted as refused with %s, want %d", got, reason, want[reason])
		}
		if want[reason] == 0 {
			t.Errorf("no reading here is refused with %s", reason)
		}
	}
	s.checkRefusedLog(want)
	s = s.restart()
	wantSameSnapshot(t, "after the refused readings and a restart", s.snapshotAll(now), before)
	s.checkRefusedLog(want)
}

// refuse sends a reading by every way in, alone and among others.
func (s *service) refuse(tt refusedReading) []*leadlinev1.ReadingResult {
	s.t.Helper()
	single, err := s.readings.PostReading(s.t.Context(), &leadlinev1.PostReadingRequest{Quantity: "pump-3/gap", Reading: tt.reading})
	var results []*leadlinev1.ReadingResult
	if tt.reading.GetQuantity() == "pump-3/gap" {
		if err != nil {
			s.t.Fatal(err)
		}
		results = append(results, single.GetResult())
	} else if err == nil {
		s.t.Errorf("a reading of %s was taken under another quantity", tt.reading.GetQuantity())
	}
	batch, err := s.readings.PostReadings(s.t.Context(), &leadlinev1.PostReadingsRequest{Readings: []*leadlinev1.Reading{tt.reading, tt.reading}})
	if err != nil {
		s.t.Fatal(err)
	}
	results = append(results, batch.GetResults()...)
	if tt.json == "" {
		return results
	}
	overHTTP := new(leadlinev1.PostReadingsResponse)
	s.call("POST", "/v1/readings", `{"readings":[`+tt.json+`]}`).into(overHTTP)
	if overHTTP.GetRefusedCount() != 1 || batch.GetRefusedCount() != 2 {
		s.t.Errorf("refused_count %d and %d, want 1 and 2", overHTTP.GetRefusedCount(), batch.GetRefusedCount())
	}
	return append(results, overHTTP.GetResults()...)
}

// checkRefusedLog compares the log of refused readings with what was refused.
func (s *service) checkRefusedLog(want map[engine.Reason]int) {
	s.t.Helper()
	list := new(leadlinev1.ListReadingsResponse)
	s.call("GET", "/v1/readings?status=REFUSED&page_size=1000", "").into(list)
	got := map[engine.Reason]int{}
	for _, r := range list.GetReadings() {
		got[engine.Reason(r.GetReason())]++
		checkSentence(s.t, r.GetDetail(), "")
		if r.GetReceiveTime() == nil || r.GetLedgerPosition() == 0 {
			s.t.Errorf("kept without receive time or position: %v", r)
		}
	}
	for _, reason := range engine.ReadingReasons {
		if got[reason] != want[reason] {
			s.t.Errorf("%d readings in the log with %s, want %d", got[reason], reason, want[reason])
		}
	}
}
