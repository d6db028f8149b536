package server

import (
	"context"
	"strconv"
	"time"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// quantityKeeper is what QuantityService needs of the keeper.
type quantityKeeper interface {
	Declare(ctx context.Context, id engine.QuantityID, d engine.Declaration, c engine.Condition, receive engine.Instant) (q engine.Quantity, created bool, err error)
	Retire(ctx context.Context, id engine.QuantityID, c engine.Condition, receive engine.Instant) (engine.Quantity, error)
	Quantity(id engine.QuantityID) (engine.Quantity, error)
	Quantities(prefix string, after engine.QuantityID, limit int, showRetired bool) (page []engine.Quantity, more bool)
}

// quantityService implements QuantityService; errors are the engine's, turned
// into answers at the edge.
type quantityService struct {
	leadlinev1.UnimplementedQuantityServiceServer
	keeper   quantityKeeper
	renewals renewalKeeper
	now      func() time.Time
}

// DeclareQuantity declares a quantity or replaces its declaration.
func (s *quantityService) DeclareQuantity(ctx context.Context, r *leadlinev1.DeclareQuantityRequest) (*leadlinev1.Quantity, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	if r.GetQuantity() == nil {
		return nil, refuse(engine.MissingField, "quantity", "quantity is missing; give the declaration")
	}
	condition, err := conditionOf(ctx, r.GetQuantity().GetEtag())
	if err != nil {
		return nil, err
	}
	declaration, err := declarationOf(r.GetQuantity())
	if err != nil {
		return nil, err
	}
	id := engine.QuantityID(r.GetId())
	if err := checkOutputOnly(r.GetId(), r.GetQuantity(), func() declared { return s.present(id) }, &condition); err != nil {
		return nil, err
	}
	q, _, err := s.keeper.Declare(ctx, id, declaration, condition, engine.InstantOf(s.now()))
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return quantityText(&q) })
	return quantityMessage(&q), nil
}

// present reads what is there; an empty message for nothing.
func (s *quantityService) present(id engine.QuantityID) *leadlinev1.Quantity {
	q, err := s.keeper.Quantity(id)
	if err != nil {
		return &leadlinev1.Quantity{}
	}
	return quantityMessage(&q)
}

// GetQuantity reads one quantity.
func (s *quantityService) GetQuantity(ctx context.Context, r *leadlinev1.GetQuantityRequest) (*leadlinev1.Quantity, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	q, err := s.keeper.Quantity(engine.QuantityID(r.GetId()))
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return quantityText(&q) })
	return quantityMessage(&q), nil
}

// ListQuantities lists quantities.
func (s *quantityService) ListQuantities(ctx context.Context, r *leadlinev1.ListQuantitiesRequest) (*leadlinev1.ListQuantitiesResponse, error) {
	limit, err := pageSize(r.GetPageSize())
	if err != nil {
		return nil, err
	}
	bound := binding("quantities", r.GetPrefix(), strconv.FormatBool(r.GetShowRetired()))
	var after engine.QuantityID
	if r.GetPageToken() != "" {
		cursor, err := decodePageToken(r.GetPageToken(), bound)
		if err != nil {
			return nil, err
		}
		after = engine.QuantityID(cursor)
	}
	page, more := s.keeper.Quantities(r.GetPrefix(), after, limit, r.GetShowRetired())
	response := &leadlinev1.ListQuantitiesResponse{}
	for i := range page {
		response.Quantities = append(response.Quantities, quantityMessage(&page[i]))
	}
	if more {
		response.NextPageToken = encodePageToken(bound, []byte(page[len(page)-1].ID))
	}
	inWords(ctx, func() string { return quantitiesText(page, response.NextPageToken) })
	return response, nil
}

// RetireQuantity retires a quantity.
func (s *quantityService) RetireQuantity(ctx context.Context, r *leadlinev1.RetireQuantityRequest) (*leadlinev1.Quantity, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	condition, err := conditionOf(ctx, r.GetEtag())
	if err != nil {
		return nil, err
	}
	q, err := s.keeper.Retire(ctx, engine.QuantityID(r.GetId()), condition, engine.InstantOf(s.now()))
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return quantityText(&q) })
	return quantityMessage(&q), nil
}
