package published_test

import (
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// A clock that steps back by an hour refuses what now lies in its future, and
// changes no belief; readings without time, which then get earlier times than
// those before, are folded where they belong; and all of it survives a restart
// on the early clock.
func TestClockStepsBack(t *testing.T) {
	s := start(t)
	s.declare("walk", `{"unit":"mm","repeatability":{"standard_deviation":0.1},"dynamics":{"random_walk":{"standard_deviation":0.5,"per":"3600s"}}}`)
	s.declare("tidy", `{"unit":"mm","repeatability":{"standard_deviation":0.1},"dynamics":{"random_walk":{"standard_deviation":0.5,"per":"3600s"}}}`)
	values := []float64{10, 10.4, 10.2, 10.9}
	times := []time.Time{noon, noon.Add(10 * time.Minute), noon.Add(50 * time.Minute), noon.Add(time.Hour)}
	for i, v := range values {
		s.clock.Advance(times[i].Sub(s.clock.Now()))
		s.postAll([]posted{{Quantity: "walk", Value: v}})
	}
	at := s.clock.Now()
	before := s.snapshotAll(at)

	s.clock.Advance(-time.Hour - time.Minute)
	early := s.clock.Now()
	refused := s.postHTTP([]posted{{Quantity: "walk", Value: 11, Time: rfc3339(at)}, {Quantity: "walk", Value: 11, Time: rfc3339(early.Add(5*time.Minute + 1))}})
	for _, r := range refused.GetResults() {
		if r.GetReason() != "TIME_IN_FUTURE" {
			t.Errorf("%v, want TIME_IN_FUTURE", r)
		}
	}
	wantSameSnapshot(t, "on the early clock", s.snapshotAll(at), before)
	// Without time= the belief is that at the last reading, not of the past.
	if b := s.belief("walk", time.Time{}); !b.GetTime().AsTime().Equal(at) || b.GetReadingCount() != 4 {
		t.Errorf("belief at %v with %d readings, want %v with 4", b.GetTime().AsTime(), b.GetReadingCount(), at)
	}

	response := s.postHTTP([]posted{{Quantity: "walk", Value: 9.7, ID: "late"}})
	if r := response.GetResults()[0]; r.GetStatus() != leadlinev1.Reading_APPLIED || !r.GetTime().AsTime().Equal(early) {
		t.Errorf("reading without time: %v, want it applied at %v", r, early)
	}
	s.postAll([]posted{{Quantity: "tidy", Value: 9.7, Time: rfc3339(early)}})
	s.clock.Advance(at.Sub(early))
	s.postAll(timedReadings("tidy", values, times))
	s.clock.Advance(early.Sub(at))
	for _, when := range append(times, early, early.Add(-1), at.Add(time.Hour)) {
		if err := sameBelief(s.belief("walk", when), s.belief("tidy", when)); err != nil {
			t.Errorf("at %v: %v", when, err)
		}
	}

	after := s.snapshotAll(at)
	for _, next := range []func(*service) *service{(*service).abandon, (*service).restart} {
		s = next(s)
		wantSameSnapshot(t, "restarted on the early clock", s.snapshotAll(at), after)
	}
	if again := s.postHTTP([]posted{{Quantity: "walk", Value: 9.7, ID: "late"}}); again.GetDuplicateCount() != 1 {
		t.Errorf("retry after the restart: %v", again.GetResults())
	}
}
