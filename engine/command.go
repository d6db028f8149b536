package engine

import (
	"context"
	"hash/fnv"
)

// command is one request on its way through the keeper: a batch of readings,
// or an action that decides on something else.
type command struct {
	batch   Batch
	origins []Record // the refusals that the batch puts through, one for each reading
	found   []resolved
	within  *directory // where the readings were resolved
	trimmed Position   // the lookup of late ones is complete through this
	lookups int        // beyond the first
	next    int        // the first reading not decided on
	results []Result
	resume  bool
	action  func(*work) error // runs in the keeper's goroutine, adds what is to be recorded
	err     error
	done    func()
}

var errStopping = &Error{Reason: Overloaded, Message: "the service is stopping; send the request again in a moment"}

var errOverloaded = &Error{Reason: Overloaded, Message: "more requests wait than the service takes; send this one again in a moment"}

// submit queues a command; c.done is called from the keeper's goroutine.
func (k *Keeper) submit(c *command) error {
	if err := k.Health(); err != nil {
		return err
	}
	n := int64(len(c.batch.Readings))
	if k.queued.Add(n) > maxQueuedReadings && n > 0 {
		k.queued.Add(-n)
		return errOverloaded
	}
	c.results = make([]Result, 0, len(c.batch.Readings))
	if err := k.resolve(c, false); err != nil {
		k.queued.Add(-n)
		return err
	}
	if err := k.enqueue(c); err != nil {
		k.queued.Add(-n)
		return err
	}
	return nil
}

// enqueue puts a command into the queue, as long as the keeper will take it out
// again.
func (k *Keeper) enqueue(c *command) error {
	k.gate.RLock()
	defer k.gate.RUnlock()
	if k.closed {
		return errStopping
	}
	select {
	case k.commands <- c:
		return nil
	default:
		return errOverloaded
	}
}

// wait runs a command to its end. When ctx ends first, the command goes on
// without its caller.
func (k *Keeper) wait(ctx context.Context, c *command) error {
	done := make(chan struct{})
	c.done = func() { close(done) }
	if err := k.submit(c); err != nil {
		return err
	}
	select {
	case <-done:
		return c.err
	case <-ctx.Done():
		return ctx.Err()
	case <-k.stopped:
	}
	select {
	case <-done: // answered just before the keeper stopped
		return c.err
	default:
		return errStopping
	}
}

// Post decides on the readings of a batch, in order, and returns when all that
// it answers is durable. It fills in the times that are missing in b.Readings,
// which it keeps. A fault after part of a large batch was made durable returns
// the fault alone; a retry of readings with IDs finds that part DUPLICATE.
func (k *Keeper) Post(ctx context.Context, b Batch) ([]Result, error) {
	c := &command{batch: b}
	if err := k.wait(ctx, c); err != nil {
		return nil, err
	}
	return c.results, nil
}

// Submit is Post without the wait: done is called once, from a goroutine of the
// keeper's, which it must not block. If Submit returns an error, done is not
// called.
func (k *Keeper) Submit(b Batch, done func([]Result, error)) error {
	c := &command{batch: b}
	c.done = func() { done(c.results, c.err) }
	return k.submit(c)
}

// decide turns a command into records of w.
func (k *Keeper) decide(w *work, c *command) {
	switch {
	case c.resume:
		k.resuming = c
		return
	case k.failed != nil:
		c.err = k.failed
		k.partial = nil
	case c.action != nil:
		c.err = c.action(w)
	case k.mustLookUp(c):
		k.workers.Go(func() { k.again(c) })
		return
	default:
		if k.decideBatch(w, c); c.next < len(c.batch.Readings) {
			k.partial = c
			return
		}
		k.partial = nil
	}
	w.waiting = append(w.waiting, c)
}

// decideBatch decides on readings until the group is full.
func (k *Keeper) decideBatch(w *work, c *command) {
	b := &c.batch
	if len(c.found) > 1 {
		k.warmed += k.window.warm(c.found[c.next:])
	}
	for c.next < len(b.Readings) && !w.full() {
		r := &b.Readings[c.next]
		var origin Record
		if c.origins != nil {
			origin = c.origins[c.next]
		} else if !r.HasTime {
			r.Time = b.Receive
		}
		if c.origins != nil && !k.refusals.take(origin.Position) {
			c.results = append(c.results, Result{ReadingID: r.ID, Time: r.Time, Status: Duplicate})
			c.next++
			continue
		}
		at := c.found[c.next]
		if now := k.directory.Load(); at.track == nil || c.within != now {
			at.place = now.place(r.Quantity) // declared since, or the ledger was opened anew
			at.hashID(r, &k.seeds)
		}
		if r.Instrument != "" { // which may be new, or have been forgotten with a full disk
			at.instrument = k.directory.Load().instrument(r.Instrument)
		}
		res, write := k.admit(r, at, b.Receive)
		if !write {
			k.refusals.release(origin.Position)
		}
		if write {
			res.Position = k.record(w, at, r, &res, b, &origin)
		} else {
			k.duplicates.Add(1)
		}
		c.results = append(c.results, res)
		c.next++
	}
}

// record adds the record of a reading that was decided on.
func (k *Keeper) record(w *work, at resolved, r *Reading, res *Result, b *Batch, origin *Record) Position {
	t := at.track
	k.decidedTo++
	rec := w.next(len(r.ID) + len(r.Quantity) + len(res.Detail))
	*rec = Record{
		Kind: KindReading, ReceiveTime: b.Receive, Principal: b.Principal, RequestID: b.RequestID,
		Reading: *r, Reason: res.Reason, Detail: res.Detail, PutThrough: origin.Position,
	}
	if origin.Position != 0 {
		rec.ReceiveTime = origin.ReceiveTime
	}
	if t != nil {
		rec.Number, rec.Revision, rec.Reading.Quantity = t.number, t.rules.revision, ""
	}
	if res.Status == Refused {
		rec.Kind = KindRefusal
	} else {
		var number InstrumentNumber
		if at.instrument != nil {
			number = at.instrument.number
		}
		row := rowOf(rec, number)
		t.decidedTally.add(&row)
		if i := at.instrument; i != nil {
			i.decidedSpan.add(r.Time)
			t.decidedUsed, _ = addUse(t.decidedUsed, &row)
			k.calibrated[i.decided.Declaration.State(r.Time)].Add(1)
		}
	}
	return k.decidedTo
}

// rowOf returns the index entry of an applied reading.
func rowOf(r *Record, instrument InstrumentNumber) Row {
	row := Row{
		Time: r.Reading.Time, Value: r.Reading.Value, Upper: r.Reading.Upper, Extent: r.Reading.Extent,
		Samples: r.Reading.Samples, Instrument: instrument,
		HasUncertainty: r.Reading.HasUncertainty, Uncertainty: r.Reading.RandomStandardUncertainty,
		HasID: r.Reading.ID != "", Position: r.Position,
	}
	if r.Reading.Occasion != "" {
		row.Occasion = hashOccasion(r.Reading.Occasion)
	}
	return row
}

// hashOccasion returns what stands for an occasion in a Row; never 0. It is
// only compared with that of the instrument's reading before.
func hashOccasion(occasion string) uint64 {
	h := fnv.New64a()
	h.Write([]byte(occasion))
	return max(1, h.Sum64())
}
