package engine

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
)

// apply changes the state by one durable record. Nothing else changes it,
// while serving and while replaying alike.
func (k *Keeper) apply(r *Record) {
	k.count(r)
	k.received = r.ReceiveTime
	switch r.Kind {
	case KindRefusal:
	case KindInstrument:
		k.applyInstrument(r)
	default:
		k.applyToTrack(r)
	}
}

// count keeps the counts and the log of refusals.
func (k *Keeper) count(r *Record) {
	k.refusals.remove(r.PutThrough)
	switch r.Kind {
	case KindReading:
		k.fresh++
	case KindRefusal:
		k.countRefused(r.Reason)
		k.refusals.add(k.refusalOf(r))
	}
}

// applyToTrack changes the quantity that a record is about.
func (k *Keeper) applyToTrack(r *Record) {
	t := k.trackOf(r.Number, r.Quantity)
	k.touch(t)
	var e entry
	if r.Kind == KindReading {
		e = entry{Row: k.rowOf(r), ID: r.Reading.ID}
		k.readAs(t, &e.Row) // may begin a rebuild, which is of the readings before this one
	}
	t.position = r.Position
	switch r.Kind {
	case KindDeclaration:
		k.applyDeclaration(t, r)
	case KindRetirement:
		q := *t.quantity
		q.Retired, q.RetireTime, q.UpdateTime = true, r.ReceiveTime, r.ReceiveTime
		t.quantity = &q
		k.rebase(t)
	case KindRenewal:
		q := *t.quantity
		q.Renewals = t.quantity.withRenewal(*r.Renewal)
		t.quantity = &q
		k.rebase(t)
	case KindReading:
		switch c := t.law.model.cost(); {
		case !t.law.model.dear():
			t.add(&e)
		case k.budget >= c:
			k.budget -= c
			t.add(&e)
		default:
			t.fresh = append(t.fresh, e)
		}
	case KindStep:
		t.step(r)
	}
}

func (k *Keeper) applyDeclaration(t *Track, r *Record) {
	q := Quantity{
		ID: r.Quantity, Number: r.Number, Declaration: *r.Declaration,
		Revision: r.Revision, CreateTime: r.ReceiveTime, UpdateTime: r.ReceiveTime,
	}
	if t.quantity == nil {
		t.reset()
		k.arrived = append(k.arrived, t)
	} else {
		q.CreateTime, q.Renewals = t.quantity.CreateTime, t.quantity.Renewals
	}
	t.quantity = &q
	k.rebase(t)
}

// rebase lets the belief rest on the declarations now in force, of the quantity
// and of the instruments that have read it.
func (k *Keeper) rebase(t *Track) {
	switch m := k.modelOf(t); {
	case t.basis == nil:
		t.rest(m)
	case t.job == nil && t.basis.extends(m):
		t.rest(m)
	case t.job != nil && t.job.model.same(m): // which goes on; finishJob takes the newest text and tolerance
		if t.basis.same(m) {
			t.rest(m)
		}
	default:
		k.settle(t)
		n := len(t.rows)
		if t.job == nil && n == t.tally.count && n*m.cost() <= k.budget && t.refold(m) {
			k.budget -= n * m.cost()
		} else {
			k.startJob(t, m)
		}
	}
}

// rowOf returns the index entry of an applied reading, whose instrument, if any,
// is known.
func (k *Keeper) rowOf(r *Record) Row {
	return rowOf(r, k.directory.Load().numberOf(r.Reading.Instrument))
}

// refold folds the rows, which are all there are, under m; false if their order
// rests on IDs that aren't at hand.
func (t *Track) refold(m *model) bool {
	rows := slices.Clone(t.rows)
	slices.SortFunc(rows, entry.compare)
	for i := 1; i < len(rows); i++ {
		if rows[i].tiesNameless(&rows[i-1]) {
			return false
		}
	}
	t.rest(m)
	t.reset()
	t.fresh = rows
	t.settle(len(rows) * m.cost())
	return true
}

// trackOf returns the track with that number, making it if it is new.
func (k *Keeper) trackOf(n QuantityNumber, id QuantityID) *Track {
	if int(n) > len(k.byNumber) {
		t := &Track{id: id, number: n, decidedStep: math.MinInt64}
		t.stored.Store(math.MinInt64)
		k.byNumber = append(k.byNumber, t)
		k.directory.Load().add(t)
	}
	return k.byNumber[n-1]
}

func (k *Keeper) touch(t *Track) {
	if !t.touched {
		t.touched = true
		k.touched = append(k.touched, t)
	}
}

// settleTouched folds what the group brought.
func (k *Keeper) settleTouched() {
	for _, t := range k.touched {
		k.settle(t)
	}
}

// settle folds the fresh readings of t or starts a rebuild.
func (k *Keeper) settle(t *Track) {
	steps, ok := t.settle(k.budget)
	k.budget = max(0, k.budget-steps)
	switch {
	case !ok:
		k.startJob(t, t.basis)
	case t.outgrown && t.job == nil: // whose fold has all readings, at nodes that no longer fit
		t.foldedTo = t.position
		k.startJob(t, t.basis)
	case t.job == nil:
		t.foldedTo = t.position
	}
}

// publish makes the group visible.
func (k *Keeper) publish(through Position) {
	for _, t := range k.touched {
		t.publish(k.change)
		t.touched = false
	}
	if len(k.arrived) > 0 { // they have their views now
		k.index(k.arrived)
		k.arrived = k.arrived[:0]
	}
	clear(k.touched)
	k.touched = k.touched[:0]
	k.applied.Add(k.fresh)
	k.fresh = 0
	k.refusals.publish()
	k.position.Store(uint64(through))
	k.windowLost.Store(uint64(k.window.lost))
	k.published.Store(k.change)
}

// index adds tracks to the sorted list that readers use.
func (k *Keeper) index(arrived []*Track) {
	byID := func(a, b *Track) int { return strings.Compare(string(a.id), string(b.id)) }
	slices.SortFunc(arrived, byID)
	old := k.Tracks()
	all := make([]*Track, 0, len(old)+len(arrived))
	for _, t := range arrived {
		n, _ := slices.BinarySearchFunc(old, t, byID)
		all = append(append(all, old[:n]...), t)
		old = old[n:]
	}
	all = append(all, old...)
	k.tracks.Store(&all)
}

// startJob has the belief of t folded anew by the rebuilder.
func (k *Keeper) startJob(t *Track, m *model) {
	j := &job{
		track: t, model: m, number: t.number, recent: t.rows, count: t.tally.count, position: t.position,
		trimmed: k.sweep.trimmed, ledger: k.ledger, directory: k.directory.Load(),
	}
	t.job = j
	k.jobs = append(k.jobs, j)
	k.dispatch()
}

// dispatch gives the rebuilder the next job that still counts.
func (k *Keeper) dispatch() {
	for !k.working && len(k.jobs) > 0 {
		j := k.jobs[0]
		k.jobs = k.jobs[1:]
		if j.track.job == j {
			k.working = true
			k.jobQueue <- j
		}
	}
}

// rebuildLoop is the rebuilder's goroutine. jobDone has room for its result,
// so it never waits for the keeper.
func (k *Keeper) rebuildLoop() {
	for j := range k.jobQueue {
		j.run()
		k.jobDone <- j
	}
}

// finishJob swaps a rebuilt belief in and folds what came in the meantime.
func (k *Keeper) finishJob(j *job) {
	t := j.track
	if t.job != j {
		return // superseded by a later declaration
	}
	if j.err != nil && j.ledger != k.ledger {
		k.startJob(t, j.model) // it read a ledger that has been closed since
		return
	}
	if j.fault != nil {
		k.options.OnFault(fmt.Errorf("rebuild the belief of %q: %w", t.id, j.fault))
	}
	if j.err != nil {
		k.fail(errors.Join(j.err, ErrStorageFailed))
		return
	}
	since := slices.Clone(t.rows[len(j.recent):])
	t.job = nil
	t.rest(k.modelOf(t)) // which gives the same belief, but may have another tolerance or text
	t.fold, t.foldedTo, t.outgrown = j.fold, j.position, false
	t.rows, t.marks, t.markFrom = j.rows, j.marks, 0
	t.last, t.behind, t.saved = j.last, j.behind, 0 // and the checkpoint, if any, has no fold
	t.trim(k.sweep.trimmed)
	t.fresh = since
	k.change++
	k.budget = refoldBudget
	k.settle(t)
	k.dueSteps([]*Track{t})
	t.publish(k.change)
	k.published.Store(k.change)
}
