package server

import (
	"context"
	"strconv"
	"time"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// ReadingKeeper is what ReadingService needs of the keeper.
type ReadingKeeper interface {
	Post(ctx context.Context, b engine.Batch) ([]engine.Result, error)
	Submit(b engine.Batch, done func([]engine.Result, error)) error
	Readings(ctx context.Context, q engine.ReadingsQuery) (page []engine.StoredReading, more bool, err error)
	ApplyRefused(ctx context.Context, id engine.QuantityID, receive engine.Instant) (engine.PutThrough, error)
	Belief(ctx context.Context, id engine.QuantityID, q engine.BeliefQuery) (engine.Belief, error)
}

// readingService implements ReadingService; errors are the engine's, turned
// into answers at the edge.
type readingService struct {
	leadlinev1.UnimplementedReadingServiceServer
	keeper   ReadingKeeper
	assess   assessKeeper
	now      func() time.Time
	stopping <-chan struct{} // closed when streams have to end
}

// PostReading posts one reading.
func (s *readingService) PostReading(ctx context.Context, r *leadlinev1.PostReadingRequest) (*leadlinev1.PostReadingResponse, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	if r.GetReading() == nil {
		return nil, refuse(engine.MissingField, "reading", "reading is missing; give one")
	}
	reading, err := readingOfQuantity(r.GetQuantity(), r.GetReading())
	if err != nil {
		return nil, err
	}
	id, err := requestID(ctx)
	if err != nil {
		return nil, err
	}
	result, belief, err := s.post(ctx, reading, id)
	if err != nil {
		return nil, err
	}
	response := &leadlinev1.PostReadingResponse{Result: resultMessage(0, &result)}
	if belief != nil {
		response.Belief = beliefMessage(belief)
	}
	return response, nil
}

// post posts one reading and returns the belief after it, nil if the quantity
// is not declared.
func (s *readingService) post(ctx context.Context, reading engine.Reading, requestID string) (engine.Result, *engine.Belief, error) {
	receive := engine.InstantOf(s.now())
	quantity := reading.Quantity
	results, err := s.keeper.Post(ctx, engine.Batch{Readings: []engine.Reading{reading}, Receive: receive, RequestID: requestID})
	if err != nil {
		return engine.Result{}, nil, err
	}
	belief, err := s.keeper.Belief(ctx, quantity, engine.BeliefQuery{Now: receive})
	switch {
	case isReason(err, engine.NotFound):
		return results[0], nil, nil
	case err != nil:
		return engine.Result{}, nil, err
	}
	return results[0], &belief, nil
}

// PostReadings posts a batch of readings.
func (s *readingService) PostReadings(ctx context.Context, r *leadlinev1.PostReadingsRequest) (*leadlinev1.PostReadingsResponse, error) {
	readings, err := readingsOf(r.GetReadings())
	if err != nil {
		return nil, err
	}
	id, err := requestID(ctx)
	if err != nil {
		return nil, err
	}
	results, err := s.keeper.Post(ctx, engine.Batch{Readings: readings, Receive: engine.InstantOf(s.now()), RequestID: id})
	if err != nil {
		return nil, err
	}
	n := countResults(results)
	return &leadlinev1.PostReadingsResponse{
		Results: resultMessages(results), AppliedCount: n.applied, DuplicateCount: n.duplicate, RefusedCount: n.refused,
	}, nil
}

// ListReadings lists readings.
func (s *readingService) ListReadings(ctx context.Context, r *leadlinev1.ListReadingsRequest) (*leadlinev1.ListReadingsResponse, error) {
	query, bound, err := readingsQueryOf(r)
	if err != nil {
		return nil, err
	}
	page, more, err := s.keeper.Readings(ctx, query)
	if err != nil {
		return nil, err
	}
	response := &leadlinev1.ListReadingsResponse{}
	for i := range page {
		response.Readings = append(response.Readings, recordedMessage(&page[i]))
	}
	if more {
		response.NextPageToken = encodePageToken(bound, readingCursor(&page[len(page)-1]))
	}
	inWords(ctx, func() string { return readingsText(page, response.NextPageToken) })
	return response, nil
}

// readingsQueryOf reads a selection of readings, and binds its page tokens.
func readingsQueryOf(r *leadlinev1.ListReadingsRequest) (q engine.ReadingsQuery, bound uint64, err error) {
	if q.Limit, err = pageSize(r.GetPageSize()); err != nil {
		return q, 0, err
	}
	if r.GetQuantity() != "" {
		if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
			return q, 0, err
		}
		q.Quantity = engine.QuantityID(r.GetQuantity())
	}
	if q.Status, err = listedStatus(r); err != nil {
		return q, 0, err
	}
	if q.HasStart = r.GetStart() != nil; q.HasStart {
		if q.Start, err = instantOf("start", r.GetStart()); err != nil {
			return q, 0, err
		}
	}
	if q.HasEnd = r.GetEnd() != nil; q.HasEnd {
		if q.End, err = instantOf("end", r.GetEnd()); err != nil {
			return q, 0, err
		}
	}
	bound = binding("readings", r.GetQuantity(), timeKey(r.GetStart()), timeKey(r.GetEnd()), strconv.Itoa(int(q.Status)))
	if q.HasAfter = r.GetPageToken() != ""; q.HasAfter {
		q.After, err = decodeReadingCursor(r.GetPageToken(), bound)
	}
	return q, bound, err
}

func listedStatus(r *leadlinev1.ListReadingsRequest) (engine.Status, error) {
	switch {
	case r.Status == nil && r.GetQuantity() == "":
		return 0, refuse(engine.MissingField, "status", "status is missing; give REFUSED to list the refused readings of all quantities, or name a quantity")
	case r.Status == nil:
		return 0, nil
	case r.GetStatus() == leadlinev1.Reading_REFUSED:
		return engine.Refused, nil
	case r.GetStatus() != leadlinev1.Reading_APPLIED:
		return 0, refuse(engine.InvalidField, "status", "status is "+r.GetStatus().String()+"; give APPLIED or REFUSED, or leave it out")
	case r.GetQuantity() == "":
		return 0, refuse(engine.InvalidField, "status", "status is APPLIED without a quantity; give REFUSED, or name a quantity")
	}
	return engine.Applied, nil
}

// ApplyRefused puts through what was refused before the declaration.
func (s *readingService) ApplyRefused(ctx context.Context, r *leadlinev1.ApplyRefusedRequest) (*leadlinev1.ApplyRefusedResponse, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	n, err := s.keeper.ApplyRefused(ctx, engine.QuantityID(r.GetQuantity()), engine.InstantOf(s.now()))
	if err != nil {
		return nil, err
	}
	return &leadlinev1.ApplyRefusedResponse{
		AppliedCount: uint32(n.Applied), DuplicateCount: uint32(n.Duplicate), RefusedCount: uint32(n.Refused),
	}, nil
}
