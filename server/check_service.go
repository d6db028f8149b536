package server

import (
	"context"
	"encoding/binary"
	"strconv"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// checkKeeper is what model checks need of the keeper.
type checkKeeper interface {
	ModelCheck(ctx context.Context, id engine.QuantityID, now engine.Instant) (engine.ModelCheckReport, error)
	Steps(id engine.QuantityID) ([]engine.RecordedStep, error)
}

// assessKeeper is what assessments of readings need of the keeper.
type assessKeeper interface {
	Assess(ctx context.Context, id engine.QuantityID, q engine.AssessQuery) (page []engine.Assessment, more bool, err error)
}

// GetModelCheck answers with how well the belief has predicted the readings.
func (s *beliefService) GetModelCheck(ctx context.Context, r *leadlinev1.GetModelCheckRequest) (*leadlinev1.ModelCheck, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	report, err := s.checks.ModelCheck(ctx, engine.QuantityID(r.GetQuantity()), engine.InstantOf(s.now()))
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return modelCheckText(&report) })
	return wholeCheckMessage(&report), nil
}

// ListSteps lists the steps that were found in a quantity's readings.
func (s *beliefService) ListSteps(ctx context.Context, r *leadlinev1.ListStepsRequest) (*leadlinev1.ListStepsResponse, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	all, err := s.checks.Steps(engine.QuantityID(r.GetQuantity()))
	if err != nil {
		return nil, err
	}
	response := &leadlinev1.ListStepsResponse{}
	for i := range all {
		response.Steps = append(response.Steps, stepEventMessage(&all[i]))
	}
	inWords(ctx, func() string { return stepsText(all) })
	return response, nil
}

// AssessReadings tells how readings agreed with the belief.
func (s *readingService) AssessReadings(ctx context.Context, r *leadlinev1.AssessReadingsRequest) (*leadlinev1.AssessReadingsResponse, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	query, bound, err := assessQueryOf(r)
	if err != nil {
		return nil, err
	}
	page, more, err := s.assess.Assess(ctx, engine.QuantityID(r.GetQuantity()), query)
	if err != nil {
		return nil, err
	}
	response := &leadlinev1.AssessReadingsResponse{}
	for i := range page {
		response.Assessments = append(response.Assessments, assessmentMessage(&page[i]))
	}
	if more {
		response.NextPageToken = encodePageToken(bound, readingCursor(&page[len(page)-1].Reading))
	}
	inWords(ctx, func() string { return assessmentsText(page, response.NextPageToken) })
	return response, nil
}

// assessQueryOf reads a selection of readings to assess, and binds its page tokens.
func assessQueryOf(r *leadlinev1.AssessReadingsRequest) (q engine.AssessQuery, bound uint64, err error) {
	q.Hindsight = r.GetHindsight()
	if q.Limit, err = pageSize(r.GetPageSize()); err != nil {
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
	bound = binding("assessments", r.GetQuantity(), timeKey(r.GetStart()), timeKey(r.GetEnd()), strconv.FormatBool(q.Hindsight))
	if q.HasAfter = r.GetPageToken() != ""; q.HasAfter {
		q.After, err = decodeReadingCursor(r.GetPageToken(), bound)
	}
	return q, bound, err
}

// readingCursor is where a page that ends with the reading ends.
func readingCursor(last *engine.StoredReading) []byte {
	cursor := binary.BigEndian.AppendUint64(nil, uint64(last.Time))
	return binary.BigEndian.AppendUint64(cursor, uint64(last.Position))
}

// decodeReadingCursor returns what readingCursor wrote into a token.
func decodeReadingCursor(token string, bound uint64) (c engine.ReadingCursor, err error) {
	cursor, err := decodePageToken(token, bound)
	if err == nil && len(cursor) != 16 {
		err = invalidToken("page_token is not one of this list; send the next_page_token of the page before, unchanged")
	}
	if err != nil {
		return c, err
	}
	c.Time = engine.Instant(binary.BigEndian.Uint64(cursor))
	c.Position = engine.Position(binary.BigEndian.Uint64(cursor[8:]))
	return c, nil
}
