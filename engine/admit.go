package engine

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"time"
)

// admit decides on one reading: it returns the result and whether a record is
// to be written. r.Time is set.
func (k *Keeper) admit(r *Reading, at resolved, receive Instant) (res Result, write bool) {
	res = Result{ReadingID: r.ID, Time: r.Time}
	if reason, detail := k.objection(at.track, at.instrument, r, receive); reason != "" {
		res.Status, res.Reason, res.Detail = Refused, reason, detail
		return res, true
	}
	if r.ID == "" {
		res.Status = Applied
		return res, true
	}
	earlier := k.earlier(r, at)
	switch {
	case earlier == nil:
		res.Status = Applied
		k.window.add(seenID{
			hash: at.hash, time: r.Time, said: r.said(),
			position: k.decidedTo + 1, receive: receive, untimed: !r.HasTime,
		})
		return res, true
	case earlier.said == r.said() && (earlier.time == r.Time || earlier.untimed || !r.HasTime):
		res.Status, res.Time, res.Position = Duplicate, earlier.time, earlier.position
		return res, false
	}
	res.Status, res.Reason = Refused, ReadingIDConflict
	res.Detail = fmt.Sprintf("reading_id %q stands for the reading of %v at %v already; give a new reading another reading_id, and send a retry unchanged", r.ID, earlier.said, earlier.time)
	return res, true
}

// objection returns why a reading can't be applied, or "".
func (k *Keeper) objection(t *Track, i *instrumentTrack, r *Reading, receive Instant) (Reason, string) {
	switch {
	case t == nil && !wellFormedID(string(r.Quantity)):
		return UnknownQuantity, fmt.Sprintf("quantity %.80q is not an ID; give that of a declared quantity", r.Quantity)
	case t == nil:
		return UnknownQuantity, fmt.Sprintf("quantity %q is not declared; declare it with PUT /v1/quantities/{id}, then put the reading through with :apply_refused or send it again", r.Quantity)
	case t.rules.retired:
		return QuantityRetired, fmt.Sprintf("quantity %q was retired at %v; declare it again to revive it, then send the reading again", r.Quantity, t.decided.RetireTime)
	case r.Unit != "" && r.Unit != t.rules.unit:
		return UnitMismatch, fmt.Sprintf("unit is %q but the quantity is in %q; convert the value and send it in that unit", r.Unit, t.rules.unit)
	}
	if r.Instrument != "" {
		if reason, detail := t.objectionToInstrument(r, i); reason != "" {
			return reason, detail
		}
	} else if r.Occasion != "" {
		return NotSupported, "occasion is given without the instrument whose readings it ties together; name the instrument, or leave occasion out"
	}
	if reason, detail := t.rules.objectionToNumbers(r, i); reason != "" {
		return reason, detail
	}
	if reason, detail := k.objectionToTime(&t.rules, r, receive); reason != "" {
		return reason, detail
	}
	return k.objectionToMethod(t, i, r)
}

// objectionToMethod returns why there is no method by which the belief could be held with a
// reading that is the first of its kind, or "".
func (k *Keeper) objectionToMethod(t *Track, i *instrumentTrack, r *Reading) (Reason, string) {
	row := Row{Time: r.Time, Value: r.Value, Upper: r.Upper, Extent: r.Extent, Samples: r.Samples, HasUncertainty: r.HasUncertainty}
	isNew := t.decidedTally.asks(&row)
	if i != nil {
		row.Instrument = i.number
		n := slices.IndexFunc(t.decidedUsed, func(u use) bool { return u.number == i.number })
		isNew = isNew || n < 0 || i.decided.Declaration.asks(&t.decidedUsed[n], &row)
	}
	d := &t.decided.Declaration
	if !isNew && r.Extent == ExtentValue && t.decidedTally.censored == 0 && d.Outliers == (Outliers{}) && (i == nil || i.decided.Declaration.Resolution == 0) {
		return "", ""
	}
	counted := t.decidedTally
	counted.add(&row)
	uses := t.decidedUsed
	if i != nil {
		uses, _ = addUse(slices.Clone(uses), &row)
	}
	if sentence := k.objectionToReadings(d, len(t.decided.InForce()), &counted, uses); sentence != "" {
		return NotSupported, "the reading can't be taken in: " + sentence
	}
	return "", ""
}

// objectionToReadings returns why a belief under d can't be held after readings, or "".
func (k *Keeper) objectionToReadings(d *Declaration, renewals int, a *tally, uses []use) string {
	decided := func(n InstrumentNumber) *InstrumentDeclaration { return &k.instruments[n-1].decided.Declaration }
	return objectionToAll(d, renewals, a, uses, decided)
}

func objectionToAll(d *Declaration, renewals int, a *tally, uses []use, of func(InstrumentNumber) *InstrumentDeclaration) string {
	for _, u := range uses {
		if _, sentence := improper(d, of(u.number)); sentence != "" {
			return sentence
		}
	}
	all := a.readAs(uses, of)
	asked := traitsOf(d, renewals, &all)
	if _, sentence := asked.objection(); sentence != "" {
		return sentence
	}
	if m := asked.method(); m == MethodCounts || m == MethodGrid {
		return all.resolved(d, a)
	}
	return ""
}

func (a *rules) objectionToNumbers(r *Reading, i *instrumentTrack) (Reason, string) {
	u := a.noiseOf(i)
	if field, detail := a.objectionToSaid(r); field != "" {
		return ValueOutOfRange, detail
	}
	switch {
	case r.HasUncertainty:
		if u = r.RandomStandardUncertainty; !(u >= MinMagnitude && u <= MaxMagnitude) {
			return RandomUncertaintyInvalid, fmt.Sprintf("random_standard_uncertainty is %v; give a number above 0, from 1e-100 to 1e100", u)
		}
	case math.IsNaN(u):
		return NoRepeatability, "random_standard_uncertainty is missing and neither quantity nor instrument declares a repeatability; give one of them and send the reading again"
	}
	if a.log {
		return "", "" // logarithms are of a magnitude that no ratio overflows
	}
	if math.Abs(r.Value)/u > maxRatio {
		return ValueOutOfRange, fmt.Sprintf("value %v is more than 1e150 times its random standard uncertainty %v; check both", r.Value, u)
	}
	if p := &a.prior; !p.Vague && math.Abs(r.Value-p.Mean)/p.SD > maxRatio {
		return ValueOutOfRange, fmt.Sprintf("value %v is more than 1e150 prior standard deviations %v away from the prior mean %v; check it", r.Value, p.SD, p.Mean)
	}
	return "", ""
}

// objectionToSaid returns what is wrong with the numbers that a reading says: the field and a
// sentence, or "".
func (a *rules) objectionToSaid(r *Reading) (field, detail string) {
	field = [...]string{"value", "above", "below", "between.lower"}[r.Extent]
	switch {
	case !inRange(r.Value):
		return field, fmt.Sprintf("%s is %v; give 0 or a number of magnitude 1e-100 to 1e100", field, r.Value)
	case r.Extent == ExtentBetween && !inRange(r.Upper):
		return "between.upper", fmt.Sprintf("between.upper is %v; give 0 or a number of magnitude 1e-100 to 1e100", r.Upper)
	case r.Extent == ExtentBetween && r.Value >= r.Upper:
		return "between.upper", fmt.Sprintf("between.upper is %v, not above between.lower %v; give lower < upper, or value for a reading that is exact", r.Upper, r.Value)
	case !a.log:
		return "", ""
	case r.Extent == ExtentBetween && r.Upper <= 0:
		return "between.upper", fmt.Sprintf("between.upper is %v but the quantity's scale is LOG, on which every value is positive; give a number above 0", r.Upper)
	case r.Extent != ExtentBetween && r.Value <= 0:
		return field, fmt.Sprintf("%[1]s is %[2]v but the quantity's scale is LOG, on which every value is positive; give a number above 0, or below with the limit of detection", field, r.Value)
	}
	return "", ""
}

func (k *Keeper) objectionToTime(a *rules, r *Reading, receive Instant) (Reason, string) {
	switch {
	case !r.Time.Valid():
		return TimeOutOfRange, fmt.Sprintf("time %v lies outside 1678 to 2262; check the clock of the sender", cmp.Or(r.SentTime, r.Time.String()))
	case r.Time.Sub(receive) > float64(k.options.MaxClockSkew):
		return TimeInFuture, fmt.Sprintf("time %v is more than %v after the receipt at %v; check the clock and the time zone of the sender", r.Time, k.options.MaxClockSkew, receive)
	case r.Time < a.priorTime:
		return BeforePrior, fmt.Sprintf("time %v is before the prior's time %v; send readings from then on, or declare an earlier prior.time and send the reading again", r.Time, a.priorTime)
	}
	return "", ""
}

// earlier returns the applied reading that r repeats or contradicts, nil if r
// is new. An exact repeat is known for as long as the ledger lives: from the
// window, from the rows in memory, or from the lookup that was made before r
// came to the keeper.
func (k *Keeper) earlier(r *Reading, at resolved) *seenID {
	e, recent := k.window.find(at.hash)
	if e != nil && e.time == r.Time {
		return e
	}
	if older := k.exact(r, at); older != nil {
		return older
	}
	if recent {
		return e
	}
	return nil
}

// exact returns the reading with r's ID and time that the window has lost.
func (k *Keeper) exact(r *Reading, at resolved) *seenID {
	if k.window.lost == 0 || !r.HasTime {
		return nil
	}
	if k.window.lost > k.sweep.trimmed {
		if e := at.track.inMemory(r); e != nil {
			return e
		}
	}
	return at.stored
}

// inMemory looks through the rows of t. It is needed only where the window is
// shorter than the distance of two checkpoints.
func (t *Track) inMemory(r *Reading) *seenID {
	for i := range t.rows {
		if e := &t.rows[i]; e.Time == r.Time && e.HasID && e.ID == r.ID {
			return &seenID{time: e.Time, said: e.said(), position: e.Position}
		}
	}
	return nil
}

// skewDefault is the clock skew allowed to senders.
const skewDefault = 5 * time.Minute
