package server

import (
	"context"
	"encoding/binary"
	"log/slog"
	"math"
	"strconv"
	"time"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// beliefKeeper is what BeliefService needs of the keeper.
type beliefKeeper interface {
	Belief(ctx context.Context, id engine.QuantityID, q engine.BeliefQuery) (engine.Belief, error)
	Beliefs(ctx context.Context, prefix string, after engine.QuantityID, limit int, q engine.BeliefQuery) (page []engine.Belief, more bool, err error)
	BeliefOf(v *engine.View, q engine.BeliefQuery) (engine.Belief, error)
	Tracks() []*engine.Track
	Change() uint64
}

// beliefService implements BeliefService; errors are the engine's, turned into
// answers at the edge.
type beliefService struct {
	leadlinev1.UnimplementedBeliefServiceServer
	keeper   beliefKeeper
	outlook  outlookKeeper
	checks   checkKeeper
	now      func() time.Time
	stopping <-chan struct{} // closed when streams have to end
	logger   *slog.Logger
}

// GetBelief answers with the belief of one quantity.
func (s *beliefService) GetBelief(ctx context.Context, r *leadlinev1.GetBeliefRequest) (*leadlinev1.Belief, error) {
	if err := engine.CheckID("quantity", r.GetQuantity()); err != nil {
		return nil, err
	}
	query := engine.BeliefQuery{
		Now:          engine.InstantOf(s.now()),
		HasThreshold: r.Threshold != nil,
		Threshold:    r.GetThreshold(),
		Instrument:   engine.InstrumentID(r.GetInstrument()),
		HasTime:      r.GetTime() != nil,
	}
	var err error
	if query.Coverage, err = coverageOf(r.CoverageProbability); err != nil {
		return nil, err
	}
	if query.HasTime {
		if query.Time, err = instantOf("time", r.GetTime()); err != nil {
			return nil, err
		}
	}
	b, err := s.keeper.Belief(ctx, engine.QuantityID(r.GetQuantity()), query)
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return beliefText(&b) })
	return beliefMessage(&b), nil
}

// coverageOf reads a coverage probability; 0, the engine's word for the
// default, can't be asked for.
func coverageOf(p *float64) (float64, error) {
	if p == nil {
		return 0, nil
	}
	if !(*p > 0 && *p < 1) {
		return 0, refuse(engine.InvalidField, "coverage_probability", "coverage_probability is "+strconv.FormatFloat(*p, 'g', -1, 64)+"; give a number above 0 and below 1")
	}
	return *p, nil
}

// ListBeliefs answers with the beliefs of many quantities. The instant of the
// first page travels in the page token.
func (s *beliefService) ListBeliefs(ctx context.Context, r *leadlinev1.ListBeliefsRequest) (*leadlinev1.ListBeliefsResponse, error) {
	limit, err := pageSize(r.GetPageSize())
	if err != nil {
		return nil, err
	}
	query := engine.BeliefQuery{Now: engine.InstantOf(s.now()), HasTime: r.GetTime() != nil}
	if query.Coverage, err = coverageOf(r.CoverageProbability); err != nil {
		return nil, err
	}
	if query.HasTime {
		if query.Time, err = instantOf("time", r.GetTime()); err != nil {
			return nil, err
		}
	}
	bound := binding("beliefs", r.GetPrefix(), timeKey(r.GetTime()), strconv.FormatUint(math.Float64bits(query.Coverage), 16))
	var after engine.QuantityID
	if r.GetPageToken() != "" {
		cursor, err := decodePageToken(r.GetPageToken(), bound)
		if err == nil && len(cursor) < 8 {
			err = invalidToken("page_token is not one of this list; send the next_page_token of the page before, unchanged")
		}
		if err != nil {
			return nil, err
		}
		query.Now, after = engine.Instant(binary.BigEndian.Uint64(cursor)), engine.QuantityID(cursor[8:])
	}
	page, more, err := s.keeper.Beliefs(ctx, r.GetPrefix(), after, limit, query)
	if err != nil {
		return nil, err
	}
	response := &leadlinev1.ListBeliefsResponse{}
	for i := range page {
		response.Beliefs = append(response.Beliefs, beliefMessage(&page[i]))
	}
	if more {
		cursor := binary.BigEndian.AppendUint64(nil, uint64(query.Now))
		response.NextPageToken = encodePageToken(bound, append(cursor, page[len(page)-1].Quantity.ID...))
	}
	inWords(ctx, func() string { return beliefsText(page, response.NextPageToken) })
	return response, nil
}
