package server

import (
	"context"
	"slices"
	"testing"

	"google.golang.org/protobuf/types/known/timestamppb"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// assessedReadings is a keeper of assessments, by time and position.
type assessedReadings struct {
	all   []engine.Assessment
	asked engine.AssessQuery
}

// Assess implements assessKeeper.
func (k *assessedReadings) Assess(_ context.Context, _ engine.QuantityID, q engine.AssessQuery) (page []engine.Assessment, more bool, err error) {
	k.asked = q
	page = slices.DeleteFunc(slices.Clone(k.all), func(a engine.Assessment) bool {
		seen := q.HasAfter && (a.Reading.Time < q.After.Time || a.Reading.Time == q.After.Time && a.Reading.Position <= q.After.Position)
		return seen || q.HasStart && a.Reading.Time < q.Start || q.HasEnd && a.Reading.Time >= q.End
	})
	if len(page) > q.Limit {
		return page[:q.Limit], true, nil
	}
	return page, false, nil
}

// severalAt returns assessments of readings at 10, 10, 20, 20, ... s.
func severalAt(n int) []engine.Assessment {
	var all []engine.Assessment
	for i := range n {
		r := engine.StoredReading{Status: engine.Applied, Position: engine.Position(i + 1)}
		r.Quantity, r.Time = "gap", engine.Instant((i/2+1)*10_000_000_000)
		all = append(all, engine.Assessment{Reading: r})
	}
	return all
}

func TestAssessmentsArePaged(t *testing.T) {
	keeper := &assessedReadings{all: severalAt(7)}
	s := &readingService{assess: keeper}
	request := &leadlinev1.AssessReadingsRequest{Quantity: "gap", PageSize: 3, Hindsight: true}
	var positions []uint64
	for {
		page, err := s.AssessReadings(t.Context(), request)
		if err != nil {
			t.Fatal(err)
		}
		for _, a := range page.GetAssessments() {
			positions = append(positions, a.GetReading().GetLedgerPosition())
		}
		if !keeper.asked.Hindsight || keeper.asked.Limit != 3 {
			t.Errorf("asked for %+v", keeper.asked)
		}
		if request.PageToken = page.GetNextPageToken(); request.PageToken == "" || len(positions) > 7 {
			break
		}
	}
	if want := []uint64{1, 2, 3, 4, 5, 6, 7}; !slices.Equal(positions, want) {
		t.Errorf("the pages have the readings %v, want %v", positions, want)
	}
}

func TestAssessmentsAreOfATime(t *testing.T) {
	keeper := &assessedReadings{all: severalAt(7)}
	s := &readingService{assess: keeper}
	page, err := s.AssessReadings(t.Context(), &leadlinev1.AssessReadingsRequest{
		Quantity: "gap", Start: &timestamppb.Timestamp{Seconds: 20}, End: &timestamppb.Timestamp{Seconds: 40},
	})
	if err != nil {
		t.Fatal(err)
	}
	if n := len(page.GetAssessments()); n != 4 || page.GetAssessments()[0].GetReading().GetLedgerPosition() != 3 {
		t.Errorf("%d readings from 20 to 40 s, want the 4 from the third on", n)
	}
	if keeper.asked.Limit != defaultPageSize || keeper.asked.Hindsight || keeper.asked.HasAfter {
		t.Errorf("asked for %+v", keeper.asked)
	}
}

func TestAssessmentsAreRefused(t *testing.T) {
	s := &readingService{assess: &assessedReadings{all: severalAt(7)}}
	first, err := s.AssessReadings(t.Context(), &leadlinev1.AssessReadingsRequest{Quantity: "gap", PageSize: 3})
	if err != nil {
		t.Fatal(err)
	}
	token := first.GetNextPageToken()
	for _, test := range []struct {
		name    string
		request *leadlinev1.AssessReadingsRequest
		reason  engine.Reason
		field   string
	}{
		{"no quantity", &leadlinev1.AssessReadingsRequest{}, engine.InvalidID, "quantity"},
		{"page size", &leadlinev1.AssessReadingsRequest{Quantity: "gap", PageSize: -1}, engine.InvalidField, "page_size"},
		{"start", &leadlinev1.AssessReadingsRequest{Quantity: "gap", Start: &timestamppb.Timestamp{Nanos: -1}}, engine.InvalidField, "start"},
		{"end", &leadlinev1.AssessReadingsRequest{Quantity: "gap", End: &timestamppb.Timestamp{Seconds: 1 << 50}}, engine.InvalidField, "end"},
		{"token of another hindsight", &leadlinev1.AssessReadingsRequest{Quantity: "gap", PageSize: 3, Hindsight: true, PageToken: token}, engine.InvalidField, "page_token"},
		{"token of another quantity", &leadlinev1.AssessReadingsRequest{Quantity: "gap2", PageSize: 3, PageToken: token}, engine.InvalidField, "page_token"},
		{"token of another start", &leadlinev1.AssessReadingsRequest{Quantity: "gap", Start: &timestamppb.Timestamp{}, PageToken: token}, engine.InvalidField, "page_token"},
	} {
		t.Run(test.name, func(t *testing.T) {
			_, err := s.AssessReadings(t.Context(), test.request)
			if reason, field := problemOf(err); reason != test.reason || field != test.field {
				t.Errorf("%s of %q, want %s of %q (%v)", reason, field, test.reason, test.field, err)
			}
		})
	}
}
