package server

import (
	"context"
	"errors"

	"leadline.example/engine"
	leadlinev1 "leadline.example/proto/leadline/v1"
)

// renewalKeeper is what renewals need of the keeper.
type renewalKeeper interface {
	Renew(ctx context.Context, id engine.QuantityID, r engine.Renewal, receive engine.Instant) (engine.Renewal, error)
	WithdrawRenewal(ctx context.Context, id engine.QuantityID, requestID string, receive engine.Instant) (engine.Renewal, error)
	Renewals(id engine.QuantityID) ([]engine.Renewal, error)
}

// RenewQuantity records that a part was replaced.
func (s *quantityService) RenewQuantity(ctx context.Context, r *leadlinev1.RenewQuantityRequest) (*leadlinev1.Renewal, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	renewal, err := renewalOf(r)
	if err != nil {
		return nil, err
	}
	receive := engine.InstantOf(s.now())
	if r.GetTime() == nil {
		renewal.Time = receive
	}
	id := engine.QuantityID(r.GetId())
	done, err := s.renewals.Renew(ctx, id, renewal, receive)
	if r.GetTime() == nil && isAbout(err, "request_id") {
		// Perhaps a retry: it was given its time when it was first received.
		if renewal.Time, err = s.renewedAt(id, renewal.RequestID, err); err == nil {
			done, err = s.renewals.Renew(ctx, id, renewal, receive)
		}
	}
	return renewalAnswer(ctx, &done, err)
}

// renewedAt returns the time of a renewal that is known, else unknown.
func (s *quantityService) renewedAt(id engine.QuantityID, requestID string, unknown error) (engine.Instant, error) {
	all, err := s.renewals.Renewals(id)
	for i := range all {
		if all[i].RequestID == requestID {
			return all[i].Time, nil
		}
	}
	return 0, errors.Join(unknown, err)
}

// isAbout tells whether err is a refusal that blames a field.
func isAbout(err error, field string) bool {
	var refused *engine.Error
	return errors.As(err, &refused) && refused.Field == field
}

// renewalOf reads a renewal, but for the time that it is given if it has none.
func renewalOf(r *leadlinev1.RenewQuantityRequest) (engine.Renewal, error) {
	renewal := engine.Renewal{RequestID: r.GetRequestId(), Reason: r.GetReason()}
	var err error
	if r.GetTime() != nil {
		if renewal.Time, err = instantOf("time", r.GetTime()); err != nil {
			return renewal, err
		}
	}
	if r.GetPrior() == nil {
		return renewal, refuse(engine.MissingField, "prior", `prior is missing; give what is known of the new part, or {"vague":{}} if nothing is`)
	}
	if renewal.Prior, err = priorOf(r.GetPrior()); err != nil {
		return renewal, err
	}
	if renewal.HasSlope = r.GetSlope() != nil; renewal.HasSlope {
		renewal.Slope, err = slopeOf("slope", r.GetSlope())
	}
	return renewal, err
}

func renewalMessage(r *engine.Renewal) *leadlinev1.Renewal {
	m := &leadlinev1.Renewal{
		RequestId: r.RequestID, Time: timestamp(r.Time), Reason: r.Reason, Prior: priorMessage(&r.Prior),
		LedgerPosition: uint64(r.Position), CreateTime: timestamp(r.CreateTime),
	}
	if r.HasSlope {
		m.Slope = slopeMessage(&r.Slope)
	}
	if r.Withdrawn {
		m.WithdrawTime = timestamp(r.WithdrawTime)
	}
	return m
}

// renewalAnswer answers with a renewal, unless there is an error.
func renewalAnswer(ctx context.Context, r *engine.Renewal, err error) (*leadlinev1.Renewal, error) {
	if err != nil {
		return nil, err
	}
	inWords(ctx, func() string { return renewalsText([]engine.Renewal{*r}) })
	return renewalMessage(r), nil
}

// WithdrawRenewal takes a renewal back.
func (s *quantityService) WithdrawRenewal(ctx context.Context, r *leadlinev1.WithdrawRenewalRequest) (*leadlinev1.Renewal, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	if r.GetRequestId() == "" {
		return nil, refuse(engine.MissingField, "request_id", "request_id is missing; give that of the renewal to withdraw")
	}
	withdrawn, err := s.renewals.WithdrawRenewal(ctx, engine.QuantityID(r.GetId()), r.GetRequestId(), engine.InstantOf(s.now()))
	return renewalAnswer(ctx, &withdrawn, err)
}

// ListRenewals lists the renewals of a quantity.
func (s *quantityService) ListRenewals(ctx context.Context, r *leadlinev1.ListRenewalsRequest) (*leadlinev1.ListRenewalsResponse, error) {
	if err := engine.CheckID("id", r.GetId()); err != nil {
		return nil, err
	}
	all, err := s.renewals.Renewals(engine.QuantityID(r.GetId()))
	if err != nil {
		return nil, err
	}
	response := &leadlinev1.ListRenewalsResponse{}
	for i := range all {
		response.Renewals = append(response.Renewals, renewalMessage(&all[i]))
	}
	inWords(ctx, func() string { return renewalsText(all) })
	return response, nil
}
