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
}

// Readings lists readings by time and ledger position; more tells whether
// there are others. Refusals are those of the bounded log.
func (k *Keeper) Readings(ctx context.Context, q ReadingsQuery) (page []StoredReading, more bool, err error) {
	var found []listed
	if q.Quantity != "" {
		t, ok := k.find(q.Quantity)
		if !ok && q.Status != Refused {
			return nil, false, notDeclared("quantity", q.Quantity)
		}
		if ok && q.Status != Refused {
			if found, err = k.appliedReadings(t.View(), &q); err != nil {
				return nil, false, err
			}
		}
	}
	if q.Status != Applied {
		found = append(found, k.refusedReadings(&q)...)
	}
	if err := ctx.Err(); err != nil {
		return nil, false, err
	}
	slices.SortFunc(found, listed.compare)
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

func (k *Keeper) appliedReadings(v *View, q *ReadingsQuery) ([]listed, error) {
	var found []listed
	add := func(r *Row) {
		if c := (ReadingCursor{r.Time, r.Position}); q.selects(c) {
			found = append(found, listed{c, q.Quantity})
		}
	}
	for i := range v.rows {
		add(&v.rows[i].Row)
	}
	// The view was taken before the segments are read, so a row is in one of
	// them at least; it can be in both.
	recent := len(found)
	err := k.Ledger().Rows(v.Quantity.Number, q.since(), func(rows []Row) error {
		for i := range rows {
			if rows[i].Position <= v.Position {
				add(&rows[i])
			}
		}
		return nil
	})
	if recent > 0 && len(found) > recent {
		slices.SortFunc(found, listed.compare)
		found = slices.Compact(found)
	}
	return found, err
}

func (k *Keeper) refusedReadings(q *ReadingsQuery) []listed {
	var found []listed
	for _, r := range *k.refusals.shown.Load() {
		if c := (ReadingCursor{r.Time, r.Position}); (q.Quantity == "" || r.Quantity == q.Quantity) && q.selects(c) {
			found = append(found, listed{c, r.Quantity})
		}
	}
	return found
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
