package engine

import (
	"context"
	"fmt"
)

const (
	maxRenewals     = 1_000
	maxRequestBytes = MaxReadingIDBytes
)

// check returns an *Error for the first thing wrong with a renewal asked for.
func (r *Renewal) check(receive Instant, skew float64) error {
	switch {
	case len(r.RequestID) > maxRequestBytes || !printable(r.RequestID):
		return refuse(InvalidField, "request_id", "request_id has %d bytes or a character that isn't printable; give at most %d printable bytes", len(r.RequestID), maxRequestBytes)
	case len(r.Reason) > MaxDescriptionBytes || !printable(r.Reason):
		return refuse(InvalidField, "reason", "reason has %d bytes or a character that isn't printable; give at most %d printable bytes", len(r.Reason), MaxDescriptionBytes)
	case !r.Time.Valid():
		return refuse(InvalidField, "time", "time lies outside 1678 to 2262; give a time within")
	case r.Time.Sub(receive) > skew:
		return refuse(InvalidField, "time", "time %v is after the receipt at %v; a renewal is recorded when it has been made, leave time out for one made now", r.Time, receive)
	case r.Prior.HasTime:
		return refuse(InvalidField, "prior.time", "prior.time is given, but the prior of a renewal holds at its time; leave it out")
	}
	d := Declaration{Prior: r.Prior}
	if err := d.checkPrior(); err != nil {
		return err
	}
	if r.HasSlope {
		if err := r.Slope.check("slope"); err != nil {
			return err
		}
	}
	return nil
}

// Renew records that a quantity's part was replaced: from r.Time on the belief
// starts anew. A request ID that is known answers with the renewal of then, or
// is refused if it asked for something else. Without one, one is given.
func (k *Keeper) Renew(ctx context.Context, id QuantityID, r Renewal, receive Instant) (Renewal, error) {
	if err := r.check(receive, float64(k.options.MaxClockSkew)); err != nil {
		return Renewal{}, err
	}
	return k.changeRenewals(ctx, id, receive, func(q *Quantity) (*Renewal, error) {
		if old := q.renewal(r.RequestID); old != nil && r.RequestID != "" {
			if !old.same(&r) {
				return nil, refuse(InvalidField, "request_id", "request_id %q stands for the renewal at %v already; give a new renewal another one, and send a retry unchanged", r.RequestID, old.Time)
			}
			r = *old
			return nil, nil
		}
		if err := q.checkRenewal(&r); err != nil {
			return nil, err
		}
		r.Position, r.CreateTime = k.decidedTo+1, receive
		if r.RequestID == "" {
			r.RequestID = q.unusedRequestID(r.Position)
		}
		return &r, nil
	}, &r)
}

// unusedRequestID names a renewal that was asked for without a request ID.
func (q *Quantity) unusedRequestID(at Position) string {
	id := fmt.Sprintf("renewal-%d", at)
	for q.renewal(id) != nil {
		id += "-"
	}
	return id
}

// WithdrawRenewal undoes a renewal: the belief is as if it had not been. Doing it
// again changes nothing.
func (k *Keeper) WithdrawRenewal(ctx context.Context, id QuantityID, requestID string, receive Instant) (Renewal, error) {
	var r Renewal
	return k.changeRenewals(ctx, id, receive, func(q *Quantity) (*Renewal, error) {
		old := q.renewal(requestID)
		if old == nil {
			return nil, refuse(NotFound, "request_id", "request_id %q is of no renewal of %q; GET /v1/quantities/{id}/renewals lists them", requestID, id)
		}
		if r = *old; r.Withdrawn {
			return nil, nil
		}
		r.Withdrawn, r.WithdrawTime = true, receive
		return &r, nil
	}, &r)
}

// changeRenewals has decide say, in the keeper's goroutine, which renewal is to
// be recorded; nil for none. It returns answer when that is durable.
func (k *Keeper) changeRenewals(ctx context.Context, id QuantityID, receive Instant, decide func(*Quantity) (*Renewal, error), answer *Renewal) (Renewal, error) {
	err := k.wait(ctx, &command{action: func(w *work) error {
		t := k.directory.Load().find(id)
		if t == nil {
			return notDeclared("id", id)
		}
		r, err := decide(t.decided)
		if r == nil || err != nil {
			return err
		}
		if sentence := k.objectionToReadings(&t.decided.Declaration, 1, &t.decidedTally, t.decidedUsed); sentence != "" && !r.Withdrawn {
			return refuse(NotSupported, "id", "quantity %q can't be renewed: with renewals %s", t.id, sentence)
		}
		q, recorded := *t.decided, *r
		q.Renewals = t.decided.withRenewal(recorded)
		t.decide(&q)
		k.decidedTo++
		*w.next(declarationBytes) = Record{
			Kind: KindRenewal, ReceiveTime: receive, Number: t.number, Revision: q.Revision, Renewal: &recorded,
		}
		return nil
	}})
	if err != nil {
		return Renewal{}, err
	}
	return *answer, nil
}

// Renewals lists the renewals of a quantity by time, withdrawn ones included.
func (k *Keeper) Renewals(id QuantityID) ([]Renewal, error) {
	t, ok := k.find(id)
	if !ok {
		return nil, notDeclared("id", id)
	}
	return t.View().Quantity.Renewals, nil
}

// checkRenewal refuses a renewal that the declaration doesn't allow.
func (q *Quantity) checkRenewal(r *Renewal) error {
	d := &q.Declaration
	switch {
	case q.Retired:
		return refuse(InvalidField, "id", "quantity %q is retired; declare it again to revive it", q.ID)
	case len(q.Renewals) >= maxRenewals:
		return refuse(InvalidField, "id", "quantity %q has %d renewals, the most there can be; declare another quantity for the part", q.ID, maxRenewals)
	case r.HasSlope && d.Dynamics.Form != DynamicsLinearTrend:
		return refuse(InvalidField, "slope", "slope is given, but the quantity's dynamics have none; leave it out")
	}
	return d.checkRenewals([]Renewal{*r})
}

// checkRenewals refuses a declaration that renewals in force don't allow.
func (d *Declaration) checkRenewals(renewals []Renewal) error {
	if len(renewals) == 0 {
		return nil
	}
	for i := range renewals {
		log := Declaration{Prior: renewals[i].Prior, Scale: d.Scale}
		if err := log.checkScale(); err != nil {
			return err
		}
	}
	r := &renewals[0]
	switch {
	case d.Prior.HasTime && r.Time < d.Prior.Time:
		return refuse(InvalidField, "prior.time", "prior.time %v is after the renewal of %v; give that time or an earlier one", d.Prior.Time, r.Time)
	}
	return nil
}
