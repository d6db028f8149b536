package engine

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"time"
)

// admit decides on one reading: it returns the result and whether a record is
// to be written. r.Time is set.
func (k *Keeper) admit(r *Reading, at resolved, receive Instant) (res Result, write bool) {
	res = Result{ReadingID: r.ID, Time: r.Time}
	if reason, detail := k.objection(at.track, r, receive); reason != "" {
		res.Status, res.Reason, res.Detail = Refused, reason, detail
		return res, true
	}
	if r.ID == "" {
		res.Status = Applied
		return res, true
	}
	earlier := k.window.find(at.hash)
	if earlier == nil || r.HasTime && !earlier.untimed && earlier.time != r.Time {
		older, err := k.findStored(at.track, r)
		if err != nil {
			k.fail(fmt.Errorf("look up reading %q of %q: %w", r.ID, r.Quantity, errors.Join(err, ErrStorageFailed)))
		}
		if older != nil {
			earlier = older
		}
	}
	switch {
	case earlier == nil:
		res.Status = Applied
		k.window.add(seenID{
			hash: at.hash, time: r.Time, value: r.Value,
			position: k.decidedTo + 1, receive: receive, untimed: !r.HasTime,
		})
		return res, true
	case earlier.value == r.Value && (earlier.time == r.Time || earlier.untimed || !r.HasTime):
		res.Status, res.Time, res.Position = Duplicate, earlier.time, earlier.position
		return res, false
	}
	res.Status, res.Reason = Refused, ReadingIDConflict
	res.Detail = fmt.Sprintf("reading_id %q stands for the reading of %v at %v already; give a new reading another reading_id, and send a retry unchanged", r.ID, earlier.value, earlier.time)
	return res, true
}

// objection returns why a reading can't be applied, or "".
func (k *Keeper) objection(t *Track, r *Reading, receive Instant) (Reason, string) {
	switch {
	case t == nil && !wellFormedID(string(r.Quantity)):
		return UnknownQuantity, fmt.Sprintf("quantity %.80q is not an ID; give that of a declared quantity", r.Quantity)
	case t == nil:
		return UnknownQuantity, fmt.Sprintf("quantity %q is not declared; declare it with PUT /v1/quantities/{id}, then put the reading through with :apply_refused or send it again", r.Quantity)
	case t.rules.retired:
		return QuantityRetired, fmt.Sprintf("quantity %q was retired at %v; declare it again to revive it", r.Quantity, t.decided.RetireTime)
	case r.Instrument != "":
		return UnknownInstrument, fmt.Sprintf("instrument %q is not known; leave instrument out", r.Instrument)
	case r.Unit != "" && r.Unit != t.rules.unit:
		return UnitMismatch, fmt.Sprintf("unit is %q but the quantity is in %q; convert the value, or leave unit out", r.Unit, t.rules.unit)
	}
	if reason, detail := t.rules.objectionToNumbers(r); reason != "" {
		return reason, detail
	}
	return k.objectionToTime(&t.rules, r, receive)
}

func (a *rules) objectionToNumbers(r *Reading) (Reason, string) {
	u := a.scale
	switch {
	case !inRange(r.Value):
		return ValueOutOfRange, fmt.Sprintf("value is %v; give 0 or a number of magnitude 1e-100 to 1e100", r.Value)
	case r.HasUncertainty:
		if u = r.RandomStandardUncertainty; !(u >= MinMagnitude && u <= MaxMagnitude) {
			return RandomUncertaintyInvalid, fmt.Sprintf("random_standard_uncertainty is %v; give a number above 0, from 1e-100 to 1e100", u)
		}
	case a.needsOwnNoise:
		return NoRepeatability, "random_standard_uncertainty is missing and the quantity declares no repeatability; give one of the two"
	}
	if math.Abs(r.Value)/u > maxRatio {
		return ValueOutOfRange, fmt.Sprintf("value %v is more than 1e150 times its random standard uncertainty %v; check both", r.Value, u)
	}
	return "", ""
}

func (k *Keeper) objectionToTime(a *rules, r *Reading, receive Instant) (Reason, string) {
	switch {
	case !r.Time.Valid():
		return TimeOutOfRange, fmt.Sprintf("time %v lies outside 1678 to 2262; check the clock of the sender", cmp.Or(r.SentTime, r.Time.String()))
	case r.Time.Sub(receive) > float64(k.options.MaxClockSkew):
		return TimeInFuture, fmt.Sprintf("time %v is more than %v after the receipt at %v; check the clock of the sender", r.Time, k.options.MaxClockSkew, receive)
	case r.Time < a.priorTime:
		return BeforePrior, fmt.Sprintf("time %v is before the prior's time %v; send readings from then on, or declare an earlier prior.time", r.Time, a.priorTime)
	}
	return "", ""
}

// findStored looks for an applied reading with r's ID and time among those
// that the window no longer holds; nil if there is none.
func (k *Keeper) findStored(t *Track, r *Reading) (*seenID, error) {
	if !k.window.evicted || !r.HasTime || t.decidedTally.count == 0 || r.Time > t.decidedTally.last {
		return nil, nil
	}
	for i := range t.rows {
		if e := &t.rows[i]; e.Time == r.Time && e.HasID && e.ID == r.ID {
			return &seenID{time: e.Time, value: e.Value, position: e.Position}, nil
		}
	}
	var at []Position
	err := k.ledger.Rows(t.number, r.Time, func(rows []Row) error {
		for _, row := range rows {
			if row.Time == r.Time && row.HasID {
				at = append(at, row.Position)
			}
		}
		return nil
	})
	if err != nil || len(at) == 0 {
		return nil, err
	}
	var found *seenID
	err = k.ledger.Records(at, func(rec *Record) error {
		if rec.Reading.ID == r.ID {
			found = &seenID{time: rec.Reading.Time, value: rec.Reading.Value, position: rec.Position}
		}
		return nil
	})
	return found, err
}

// skewDefault is the clock skew allowed to senders.
const skewDefault = 5 * time.Minute
