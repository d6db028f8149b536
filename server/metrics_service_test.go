package server

import (
	"context"
	"errors"
	"testing"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/codes"
	"google.golang.org/grpc/status"

	"leadline.example/engine"
)

func TestServiceMetricsFollowTheKeeper(t *testing.T) {
	f := plantFixture(t, func(o *MetricsOptions) {
		o.LedgerBytes = func() int64 { return 4096 }
		o.Ready = func() error { return errors.New("draining") }
	})
	if _, err := f.keeper.Post(context.Background(), engine.Batch{
		Receive:  engine.InstantOf(scrapeTime),
		Readings: []engine.Reading{{Quantity: "nobody", Value: 1}},
	}); err != nil {
		t.Fatal(err)
	}
	if _, err := f.keeper.Retire(context.Background(), "winch.rope", engine.Condition{}, engine.InstantOf(scrapeTime)); err != nil {
		t.Fatal(err)
	}
	got := seriesOf(t, f.scrape(t))
	// 3 declarations, 7 readings, 1 refusal and 1 retirement are 12 records.
	for key, want := range map[string]float64{
		"leadline_readings_total{reason=,status=APPLIED}":                 7,
		"leadline_readings_total{reason=,status=DUPLICATE}":               0,
		"leadline_readings_total{reason=UNKNOWN_QUANTITY,status=REFUSED}": 1,
		"leadline_readings_total{reason=UNIT_MISMATCH,status=REFUSED}":    0,
		"leadline_ledger_position{}":                                      12,
		"leadline_ledger_bytes{}":                                         4096,
		"leadline_quantities{}":                                           2,
		"leadline_queued_readings{}":                                      0,
		"leadline_storage_writable{}":                                     1,
		"leadline_ready{}":                                                0,
		"leadline_unpublished_quantities{}":                               0,
		"leadline_unevaluated_quantities{}":                               0,
	} {
		if v, ok := got[key]; !ok || v != want {
			t.Errorf("%s is %v (published: %t), want %v", key, v, ok, want)
		}
	}
}

func TestEveryReasonHasASeriesFromTheStart(t *testing.T) {
	got := seriesOf(t, newPageFixture(t, nil).scrape(t))
	for _, r := range engine.ReadingReasons {
		key := "leadline_readings_total{reason=" + string(r) + ",status=REFUSED}"
		if v, ok := got[key]; !ok || v != 0 {
			t.Errorf("%s is %v (published: %t), want 0", key, v, ok)
		}
	}
}

func TestReadingsOutOfCalibrationAreCounted(t *testing.T) {
	f := newPageFixture(t, nil)
	f.declare(t, "gap", engine.Declaration{Unit: "mm", Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.1}})
	at := engine.InstantOf(scrapeTime)
	for id, calibrations := range map[engine.InstrumentID][]engine.Calibration{
		"calliper-7": {{ValidFrom: at - 2000, BiasStandardUncertainty: 0.1, HasDue: true, Due: at - 1000}},
		"feeler":     nil,
	} {
		d := engine.InstrumentDeclaration{Unit: "mm", Calibrations: calibrations}
		if _, _, err := f.keeper.DeclareInstrument(t.Context(), id, d, engine.Condition{}, at); err != nil {
			t.Fatal(err)
		}
	}
	var readings []engine.Reading
	for _, r := range []struct {
		instrument engine.InstrumentID
		before     engine.Instant
	}{{"calliper-7", 3000}, {"calliper-7", 1500}, {"calliper-7", 500}, {"calliper-7", 400}, {"feeler", 1}, {"", 0}} {
		readings = append(readings, engine.Reading{Quantity: "gap", Value: 1, HasTime: true, Time: at - r.before, Instrument: r.instrument})
	}
	if _, err := f.keeper.Post(t.Context(), engine.Batch{Receive: at, Readings: readings}); err != nil {
		t.Fatal(err)
	}
	got := seriesOf(t, f.scrape(t))
	for state, want := range map[string]float64{"OVERDUE": 2, "NOT_YET_VALID": 1, "UNCALIBRATED": 1} {
		key := "leadline_readings_by_calibration_total{state=" + state + "}"
		if v, ok := got[key]; !ok || v != want {
			t.Errorf("%s is %v (published: %t), want %v", key, v, ok, want)
		}
	}
	if _, ok := got["leadline_readings_by_calibration_total{state=IN_FORCE}"]; ok {
		t.Error("readings in order are counted too")
	}
}

func TestCommitsAndFaultsAreObserved(t *testing.T) {
	o := NewObservations()
	f := newPageFixture(t, func(m *MetricsOptions) { m.Observations = o })
	o.Commit(3*time.Millisecond, 100)
	o.Commit(time.Second, 2000)
	o.Fault(errors.New("no space"))
	families := parsePage(t, f.scrape(t))
	seconds := families["leadline_commit_seconds"].GetMetric()[0].GetHistogram()
	if seconds.GetSampleCount() != 2 || seconds.GetSampleSum() != 1.003 {
		t.Errorf("%d commits took %v s, want 2 in 1.003", seconds.GetSampleCount(), seconds.GetSampleSum())
	}
	records := families["leadline_group_records"].GetMetric()[0].GetHistogram()
	if records.GetSampleCount() != 2 || records.GetSampleSum() != 2100 {
		t.Errorf("%d groups had %v records, want 2 with 2100", records.GetSampleCount(), records.GetSampleSum())
	}
	if faults := families["leadline_storage_faults_total"].GetMetric()[0].GetCounter().GetValue(); faults != 1 {
		t.Errorf("%v faults, want 1", faults)
	}
}

func TestRequestsAreCountedByTheirCode(t *testing.T) {
	o := NewObservations()
	f := newPageFixture(t, func(m *MetricsOptions) { m.Observations = o })
	for _, err := range []error{nil, nil, status.Error(codes.NotFound, "no such quantity"), context.Canceled} {
		_, got := o.UnaryInterceptor(t.Context(), nil, &grpc.UnaryServerInfo{FullMethod: "/leadline.v1.BeliefService/GetBelief"},
			func(context.Context, any) (any, error) { return nil, err })
		if !errors.Is(got, err) {
			t.Errorf("the interceptor turned %v into %v", err, got)
		}
	}
	_ = o.StreamInterceptor(nil, nil, &grpc.StreamServerInfo{FullMethod: "/leadline.v1.BeliefService/WatchBeliefs"},
		func(any, grpc.ServerStream) error { return status.Error(codes.Unavailable, "stopping") })
	got := seriesOf(t, f.scrape(t))
	for key, want := range map[string]float64{
		"leadline_grpc_requests_total{code=OK,method=/leadline.v1.BeliefService/GetBelief}":             2,
		"leadline_grpc_requests_total{code=NotFound,method=/leadline.v1.BeliefService/GetBelief}":       1,
		"leadline_grpc_requests_total{code=Canceled,method=/leadline.v1.BeliefService/GetBelief}":       1,
		"leadline_grpc_requests_total{code=Unavailable,method=/leadline.v1.BeliefService/WatchBeliefs}": 1,
	} {
		if got[key] != want {
			t.Errorf("%s is %v, want %v", key, got[key], want)
		}
	}
}

func TestObservationsServeOnePage(t *testing.T) {
	f := newPageFixture(t, nil)
	o := NewObservations()
	options := MetricsOptions{Keeper: f.keeper, Observations: o, Now: fixedClock}
	if _, err := NewMetrics(options); err != nil {
		t.Fatal(err)
	}
	if _, err := NewMetrics(options); err == nil {
		t.Error("a second page was made from the same observations, which would count everything twice")
	}
}
