package engine

import (
	"cmp"
	"context"
	"slices"
)

// ReadingsQuery selects readings. Those of one quantity, or, with Status
// Refused and no Quantity, the log of refusals.
type ReadingsQuery struct {
	Quantity         QuantityID
	HasStart, HasEnd bool
	Start, End       Instant // start inclusive, end exclusive
	Status           Status  // Applied, Refused, or 0 for both
	HasAfter         bool
	After            ReadingCursor
	Limit            int
}

// ReadingCursor is a place in the order in which readings are listed.
type ReadingCursor struct {
	Time     Instant
	Position Position
}

func (c ReadingCursor) compare(d ReadingCursor) int {
	return cmp.Or(cmp.Compare(c.Time, d.Time), cmp.Compare(c.Position, d.Position))
}

// listed is a reading found for a list.
type listed struct {
	ReadingCursor
	quantity QuantityID
}

func (l listed) compare(m listed) int { return l.ReadingCursor.compare(m.ReadingCursor) }

// StoredReading is a reading in the ledger with what became of it.
type StoredReading struct {
	Reading
	Status      Status
	Reason      Reason
	Detail      string
	ReceiveTime Instant
	Position    Position

	HasCalibration bool // an applied reading by an instrument
	Calibration    CalibrationState
}

// Readings lists readings by time and ledger position; more tells whether
// there are others. Refusals are those of the bounded log.
func (k *Keeper) Readings(ctx context.Context, q ReadingsQuery) (page []StoredReading, more bool, err error) {
	list := listing{query: &q}
	if q.Quantity != "" && q.Status != Refused {
		t, ok := k.find(q.Quantity)
		if !ok {
			return nil, false, notDeclared("quantity", q.Quantity)
		}
		if err := list.applied(ctx, t.View(), k.Ledger()); err != nil {
			return nil, false, err
		}
	}
	if q.Status != Applied {
		list.refused(*k.refusals.shown.Load())
	}
	list.prune()
	found := list.found
	if more = len(found) > q.Limit; more {
		found = found[:q.Limit]
	}
	page, err = k.storedReadings(found)
	return page, more, err
}

// selects tells whether a reading at that place belongs to the answer.
func (q *ReadingsQuery) selects(c ReadingCursor) bool {
	return !(q.HasStart && c.Time < q.Start || q.HasEnd && c.Time >= q.End || q.HasAfter && c.compare(q.After) <= 0)
}

// since is the earliest time that the answer can hold.
func (q *ReadingsQuery) since() Instant {
	since := MinInstant
	if q.HasStart {
		since = max(since, q.Start)
	}
	if q.HasAfter {
		since = max(since, q.After.Time)
	}
	return since
}

// listing collects the first readings of an answer: it keeps no more than a
// few pages of what it is shown.
type listing struct {
	query *ReadingsQuery
	found []listed
}

func (l *listing) add(at Instant, position Position, id QuantityID) {
	c := ReadingCursor{at, position}
	if !l.query.selects(c) {
		return
	}
	if l.found = append(l.found, listed{c, id}); len(l.found) > 4*l.query.Limit+1_000 {
		l.prune()
	}
}

// prune leaves the first readings, one more than the answer has, in order. A
// reading can be shown twice.
func (l *listing) prune() {
	slices.SortFunc(l.found, listed.compare)
	l.found = slices.Compact(l.found)
	l.found = l.found[:min(len(l.found), l.query.Limit+1)]
}

// applied adds the applied readings of a view. The view was taken before the
// segments are read, so each reading is in one of them at least.
func (l *listing) applied(ctx context.Context, v *View, from Ledger) error {
	for i := range v.rows {
		l.add(v.rows[i].Time, v.rows[i].Position, v.Quantity.ID)
	}
	return from.Rows(v.Quantity.Number, l.query.since(), func(rows []Row) error {
		for i := range rows {
			if rows[i].Position <= v.Position {
				l.add(rows[i].Time, rows[i].Position, v.Quantity.ID)
			}
		}
		return ctx.Err()
	})
}

// refused adds what the log of refusals has.
func (l *listing) refused(log []refusal) {
	for i := range log {
		if r := &log[i]; l.query.Quantity == "" || r.Quantity == l.query.Quantity {
			l.add(r.Time, r.Position, r.Quantity)
		}
	}
}

func (k *Keeper) storedReadings(found []listed) ([]StoredReading, error) {
	at := make([]Position, len(found))
	for i := range found {
		at[i] = found[i].Position
	}
	page := make([]StoredReading, 0, len(at))
	err := k.Ledger().Records(at, func(r *Record) error {
		s := StoredReading{Reading: r.Reading, Status: Applied, ReceiveTime: r.ReceiveTime, Position: r.Position}
		s.Quantity = found[len(page)].quantity
		if i := k.directory.Load().instrument(r.Reading.Instrument); i != nil && r.Kind == KindReading {
			s.HasCalibration, s.Calibration = true, i.shown.Load().instrument.Declaration.State(r.Reading.Time)
		}
		if r.Kind == KindRefusal {
			s.Status, s.Reason, s.Detail = Refused, r.Reason, r.Detail
		}
		page = append(page, s)
		return nil
	})
	return page, err
}

// PutThrough says what became of refused readings that were put through.
type PutThrough struct {
	Applied, Duplicate, Refused int
}

// ApplyRefused decides again on the readings in the log of refusals that were
// refused because the quantity was unknown.
func (k *Keeper) ApplyRefused(ctx context.Context, id QuantityID, receive Instant) (PutThrough, error) {
	var sum PutThrough
	if _, ok := k.find(id); !ok {
		return sum, notDeclared("quantity", id)
	}
	var at []Position
	for _, r := range *k.refusals.shown.Load() {
		if r.Quantity == id && r.Reason == UnknownQuantity {
			at = append(at, r.Position)
		}
	}
	for chunk := range slices.Chunk(at, MaxBatchReadings) {
		if err := k.putThrough(ctx, chunk, receive, &sum); err != nil {
			return sum, err
		}
	}
	return sum, nil
}

func (k *Keeper) putThrough(ctx context.Context, at []Position, receive Instant, sum *PutThrough) error {
	c := &command{batch: Batch{Receive: receive}}
	err := k.Ledger().Records(at, func(r *Record) error {
		c.origins = append(c.origins, *r)
		c.batch.Readings = append(c.batch.Readings, r.Reading)
		return nil
	})
	if err != nil {
		return err
	}
	if err := k.wait(ctx, c); err != nil {
		return err
	}
	for _, r := range c.results {
		switch r.Status {
		case Applied:
			sum.Applied++
		case Duplicate:
			sum.Duplicate++
		case Refused:
			sum.Refused++
		}
	}
	return nil
}
