package server

import (
	"context"
	"fmt"
	"strconv"
	"time"

	"google.golang.org/protobuf/types/known/timestamppb"

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
	keeper quantityKeeper
	now    func() time.Time
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
	if err := s.checkOutputOnly(id, r.GetQuantity(), &condition); err != nil {
		return nil, err
	}
	q, _, err := s.keeper.Declare(ctx, id, declaration, condition, engine.InstantOf(s.now()))
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return quantityText(&q) })
	return quantityMessage(&q), nil
}

// checkOutputOnly lets a declaration carry what the service itself answers
// with, if it is still so: what was read can be changed and sent back. The
// condition is tightened to what was compared with.
func (s *quantityService) checkOutputOnly(id engine.QuantityID, q *leadlinev1.Quantity, c *engine.Condition) error {
	if q.GetId() != "" && q.GetId() != string(id) {
		return refuse(engine.InvalidField, "id", fmt.Sprintf("id is %q, not the %q of the request; leave it out", shorten(q.GetId()), id))
	}
	if q.GetRevision() == 0 && q.GetCreateTime() == nil && q.GetUpdateTime() == nil && q.GetRetireTime() == nil {
		return nil
	}
	present, err := s.keeper.Quantity(id)
	if err != nil {
		present = engine.Quantity{}
	}
	// An ETag that is no longer true says it best.
	if c.IfMatch != "" && c.IfMatch != "*" && c.IfMatch != present.ETag() {
		return nil
	}
	was := quantityMessage(&present)
	switch {
	case q.GetRevision() != 0 && q.GetRevision() != was.GetRevision():
		return notSettable("revision", strconv.FormatUint(uint64(was.GetRevision()), 10))
	case differs(q.GetCreateTime(), was.GetCreateTime()):
		return notSettable("create_time", present.CreateTime.String())
	case differs(q.GetUpdateTime(), was.GetUpdateTime()):
		return notSettable("update_time", present.UpdateTime.String())
	case differs(q.GetRetireTime(), was.GetRetireTime()):
		return notSettable("retire_time", present.RetireTime.String())
	}
	if c.IfMatch == "" && present.Revision != 0 {
		c.IfMatch = present.ETag()
	}
	return nil
}

// differs tells whether a given time is another than the present one.
func differs(given, present *timestamppb.Timestamp) bool {
	return given != nil && (present == nil || !given.AsTime().Equal(present.AsTime()))
}

func notSettable(field, present string) error {
	return refuse(engine.InvalidField, field, fmt.Sprintf("%s is set by the service, and is %s at present; leave it out", field, present))
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
