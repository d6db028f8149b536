package published_test

import (
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// snapshotAll is every quantity with its belief at an instant, as text, by ID.
func (s *service) snapshotAll(at time.Time) map[string]string {
	s.t.Helper()
	list := new(leadlinev1.ListQuantitiesResponse)
	s.call("GET", "/v1/quantities?show_retired=true&page_size=1000", "").into(list)
	all := map[string]string{}
	for _, q := range list.GetQuantities() {
		all[q.GetId()] = s.call("GET", quantityPath(q.GetId()), "").ok().body + s.beliefText(q.GetId(), at, "threshold", "0.8")
	}
	return all
}

func TestRefusedRequestsChangeNothing(t *testing.T) {
	s := startAgreement(t)
	at := s.clock.Now()
	before, position := s.snapshotAll(at), s.scrape().number(t, "leadline_ledger_position")
	for i := range refusedRequests {
		t.Run(refusedRequests[i].name, func(t *testing.T) { refusedRequests[i].check(t, s) })
	}
	wantSameSnapshot(t, "after the refused requests", s.snapshotAll(at), before)
	if got := s.scrape().number(t, "leadline_ledger_position"); got != position {
		t.Errorf("ledger position %v, was %v: a refused request was recorded", got, position)
	}
}
