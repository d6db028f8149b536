package server

import (
	"context"
	"strconv"
	"time"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// instrumentKeeper is what InstrumentService needs of the keeper.
type instrumentKeeper interface {
	DeclareInstrument(ctx context.Context, id engine.InstrumentID, d engine.InstrumentDeclaration, c engine.Condition, receive engine.Instant) (v engine.InstrumentView, created bool, err error)
	RetireInstrument(ctx context.Context, id engine.InstrumentID, c engine.Condition, receive engine.Instant) (engine.InstrumentView, error)
	Instrument(id engine.InstrumentID) (engine.InstrumentView, error)
	Instruments(prefix string, after engine.InstrumentID, limit int, showRetired bool) (page []engine.InstrumentView, more bool)
}

// instrumentService implements InstrumentService; errors are the engine's,
// turned into answers at the edge.
type instrumentService struct {
	leadlinev1.UnimplementedInstrumentServiceServer
	keeper instrumentKeeper
	now    func() time.Time
}

// DeclareInstrument declares an instrument or replaces its declaration.
func (s *instrumentService) DeclareInstrument(ctx context.Context, r *leadlinev1.DeclareInstrumentRequest) (*leadlinev1.Instrument, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	if r.GetInstrument() == nil {
		return nil, refuse(engine.MissingField, "instrument", "instrument is missing; give the declaration")
	}
	condition, err := conditionOf(ctx, r.GetInstrument().GetEtag())
	if err != nil {
		return nil, err
	}
	declaration, err := instrumentDeclarationOf(r.GetInstrument())
	if err != nil {
		return nil, err
	}
	id := engine.InstrumentID(r.GetId())
	if err := checkOutputOnly(r.GetId(), r.GetInstrument(), func() declared { return s.present(id) }, &condition); err != nil {
		return nil, err
	}
	v, _, err := s.keeper.DeclareInstrument(ctx, id, declaration, condition, engine.InstantOf(s.now()))
	return instrumentAnswer(ctx, &v, err)
}

// present reads what is there; an empty message for nothing.
func (s *instrumentService) present(id engine.InstrumentID) *leadlinev1.Instrument {
	v, err := s.keeper.Instrument(id)
	if err != nil {
		return &leadlinev1.Instrument{}
	}
	return instrumentMessage(&v)
}

// instrumentAnswer answers with an instrument, unless there is an error.
func instrumentAnswer(ctx context.Context, v *engine.InstrumentView, err error) (*leadlinev1.Instrument, error) {
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return instrumentText(v) })
	return instrumentMessage(v), nil
}

// GetInstrument reads one instrument.
func (s *instrumentService) GetInstrument(ctx context.Context, r *leadlinev1.GetInstrumentRequest) (*leadlinev1.Instrument, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	v, err := s.keeper.Instrument(engine.InstrumentID(r.GetId()))
	return instrumentAnswer(ctx, &v, err)
}

// ListInstruments lists instruments.
func (s *instrumentService) ListInstruments(ctx context.Context, r *leadlinev1.ListInstrumentsRequest) (*leadlinev1.ListInstrumentsResponse, error) {
	limit, err := pageSize(r.GetPageSize())
	if err != nil {
		return nil, err
	}
	bound := binding("instruments", r.GetPrefix(), strconv.FormatBool(r.GetShowRetired()))
	var after engine.InstrumentID
	if r.GetPageToken() != "" {
		cursor, err := decodePageToken(r.GetPageToken(), bound)
		if err != nil {
			return nil, err
		}
		after = engine.InstrumentID(cursor)
	}
	page, more := s.keeper.Instruments(r.GetPrefix(), after, limit, r.GetShowRetired())
	response := &leadlinev1.ListInstrumentsResponse{}
	for i := range page {
		response.Instruments = append(response.Instruments, instrumentMessage(&page[i]))
	}
	if more {
		response.NextPageToken = encodePageToken(bound, []byte(page[len(page)-1].Instrument.ID))
	}
	inWords(ctx, func() string { return instrumentsText(page, response.NextPageToken) })
	return response, nil
}

// RetireInstrument retires an instrument.
func (s *instrumentService) RetireInstrument(ctx context.Context, r *leadlinev1.RetireInstrumentRequest) (*leadlinev1.Instrument, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	condition, err := conditionOf(ctx, r.GetEtag())
	if err != nil {
		return nil, err
	}
	v, err := s.keeper.RetireInstrument(ctx, engine.InstrumentID(r.GetId()), condition, engine.InstantOf(s.now()))
	return instrumentAnswer(ctx, &v, err)
}
