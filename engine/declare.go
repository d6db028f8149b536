package engine

import (
	"context"
	"math"
)

// Condition makes a change depend on what is there.
type Condition struct {
	IfMatch     string // the ETag that the quantity must have; empty for any, * for any existing one
	IfNoneMatch bool   // the quantity must not exist
}

func (c Condition) check(t *Track) error {
	if t == nil {
		return c.checkTag("quantity", "", "")
	}
	return c.checkTag("quantity", string(t.id), t.decided.ETag())
}

// checkTag compares the condition with the tag of what noun and id name; an
// empty tag says that it doesn't exist.
func (c Condition) checkTag(noun, id, tag string) error {
	switch {
	case c.IfNoneMatch && tag != "":
		return refuse(AlreadyExists, "", "%s %q exists; leave If-None-Match out to replace its declaration", noun, id)
	case c.IfMatch == "" || c.IfMatch == "*" && tag != "":
		return nil
	case tag == "":
		return refuse(ETagMismatch, "etag", "etag is %q but the %s doesn't exist; leave etag and If-Match out to declare it", c.IfMatch, noun)
	case c.IfMatch != tag:
		return refuse(ETagMismatch, "etag", "etag is %q but the %s has %q; read it again and repeat the change on what is there", c.IfMatch, noun, tag)
	}
	return nil
}

// Declare declares a quantity, replaces its declaration or revives it; created
// tells the first case. A declaration equal to the one in force writes
// nothing. Where prior, dynamics or repeatability change, the belief is folded
// anew from all its readings.
func (k *Keeper) Declare(ctx context.Context, id QuantityID, d Declaration, c Condition, receive Instant) (q Quantity, created bool, err error) {
	if err := CheckID("id", string(id)); err != nil {
		return Quantity{}, false, err
	}
	if err := d.Check(); err != nil {
		return Quantity{}, false, err
	}
	err = k.wait(ctx, &command{action: func(w *work) error {
		t := k.directory.Load().find(id)
		if err := c.check(t); err != nil {
			return err
		}
		if t != nil && t.decided.Declaration == d && !t.decided.Retired {
			q = *t.decided
			return nil
		}
		if err := k.checkRedeclaration(t, &d); err != nil {
			return err
		}
		q, created = k.declare(w, t, id, d, receive), t == nil
		return nil
	}})
	return q, created, err
}

// declarationBytes is what a declaration takes about.
const declarationBytes = 200

// declare records a declaration.
func (k *Keeper) declare(w *work, t *Track, id QuantityID, d Declaration, receive Instant) Quantity {
	q := &Quantity{ID: id, Declaration: d, Revision: 1, CreateTime: receive, UpdateTime: receive}
	if t == nil {
		t = k.trackOf(QuantityNumber(len(k.byNumber)+1), id)
	} else {
		q.Revision, q.CreateTime, q.Renewals = t.decided.Revision+1, t.decided.CreateTime, t.decided.Renewals
	}
	q.Number = t.number
	t.decide(q)
	k.decidedTo++
	*w.next(declarationBytes) = Record{
		Kind: KindDeclaration, ReceiveTime: receive, Number: q.Number, Revision: q.Revision,
		Quantity: id, Declaration: &q.Declaration,
	}
	return *q
}

// checkRedeclaration refuses what the readings applied so far don't allow. t
// may be nil.
func (k *Keeper) checkRedeclaration(t *Track, d *Declaration) error {
	if t == nil {
		return nil
	}
	if err := d.checkRenewals(t.decided.InForce()); err != nil || t.decidedTally.count == 0 {
		return err
	}
	if was := t.decided.Declaration.Unit; d.Unit != was {
		return refuse(UnitFixed, "unit", "unit is %q but %d readings in %q have been applied; keep the unit, or declare another quantity", d.Unit, t.decidedTally.count, was)
	}
	if first := t.decidedTally.first; d.Prior.HasTime && d.Prior.Time > first {
		return refuse(InvalidField, "prior.time", "prior.time %v is after the reading of %v, which has been applied; give that time or an earlier one", d.Prior.Time, first)
	}
	if bare := t.decidedBare(k); d.Repeatability.Form == RepeatabilityAbsent && bare > 0 {
		return refuse(InvalidField, "repeatability", "repeatability is missing but %d readings without a random_standard_uncertainty or an instrument's repeatability have been applied; declare one", bare)
	}
	if least := t.decidedTally.positive; d.Scale == ScaleLog && t.decidedTally.count > 0 && least <= 0 {
		return refuse(InvalidField, "scale", "scale is LOG, on which every value is positive, but a reading of %v has been applied; keep scale LINEAR", least)
	}
	if sentence := k.objectionToReadings(d, len(t.decided.InForce()), &t.decidedTally, t.decidedUsed); sentence != "" {
		return refuse(NotSupported, "dynamics", "with what its readings so far were, %s", sentence)
	}
	if d.Scale == ScaleLog {
		return nil
	}
	if largest := t.decidedTally.largest; largest/d.Repeatability.scale() > maxRatio {
		return refuse(InvalidField, "repeatability", "repeatability is less than 1e-150 times the reading %v, which has been applied; give a larger one", largest)
	}
	p, largest := d.levelPrior(), t.decidedTally.largest
	if !p.Vague && (largest+math.Abs(p.Mean))/p.SD > maxRatio {
		return refuse(InvalidField, "prior", "the prior's standard deviation %v is less than 1e-150 times the reading %v, which has been applied; give a wider prior", p.SD, largest)
	}
	return nil
}

// decidedBare is how many applied readings rest on the quantity's repeatability.
func (t *Track) decidedBare(k *Keeper) int {
	bare := t.decidedTally.bare
	for _, u := range t.decidedUsed {
		if r := &k.instruments[u.number-1].decided.Declaration.Repeatability; r.StandardDeviation == 0 && !r.Learned.Learned() {
			bare += u.bare
		}
	}
	return bare
}

// Retire takes a quantity out of lists and metrics and refuses further
// readings; it stays readable. Retiring it again changes nothing.
func (k *Keeper) Retire(ctx context.Context, id QuantityID, c Condition, receive Instant) (q Quantity, err error) {
	err = k.wait(ctx, &command{action: func(w *work) error {
		t := k.directory.Load().find(id)
		if t == nil {
			return notDeclared("id", id)
		}
		if err := c.check(t); err != nil {
			return err
		}
		if !t.decided.Retired {
			retired := *t.decided
			retired.Retired, retired.RetireTime, retired.UpdateTime = true, receive, receive
			t.decide(&retired)
			k.decidedTo++
			*w.next(0) = Record{Kind: KindRetirement, ReceiveTime: receive, Number: t.number, Revision: retired.Revision}
		}
		q = *t.decided
		return nil
	}})
	return q, err
}

func notDeclared(field string, id QuantityID) error {
	return refuse(NotFound, field, "quantity %q is not declared; declare it with PUT /v1/quantities/{id}", id)
}
