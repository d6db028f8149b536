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
	if r.Kind != KindRefusal {
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
	t.position = r.Position
	k.touch(t)
	switch r.Kind {
	case KindDeclaration:
		k.applyDeclaration(t, r)
	case KindRetirement:
		q := *t.quantity
		q.Retired, q.RetireTime, q.UpdateTime = true, r.ReceiveTime, r.ReceiveTime
		t.quantity = &q
		k.rebase(t)
	case KindReading:
		e := entry{Row: rowOf(r), ID: r.Reading.ID}
		t.tally.add(&e.Row)
		t.add(&e)
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
		q.CreateTime = t.quantity.CreateTime
	}
	t.quantity = &q
	k.rebase(t)
}

// rebase lets the belief rest on the declaration now in force.
func (k *Keeper) rebase(t *Track) {
	switch {
	case t.basis == nil:
		t.rest(t.quantity)
	case t.basis.Declaration.SameBelief(t.quantity.Declaration):
		t.rest(t.quantity)
		if t.job != nil && !t.job.quantity.Declaration.SameBelief(t.quantity.Declaration) {
			k.startJob(t)
		}
	default:
		k.settle(t)
		if n := len(t.rows); t.job == nil && n == t.tally.count && n <= refoldBudget {
			t.refold()
		} else {
			k.startJob(t)
		}
	}
}

// refold folds the rows, which are all there are, under t.quantity.
func (t *Track) refold() {
	rows := slices.Clone(t.rows)
	slices.SortFunc(rows, entry.compare)
	t.rest(t.quantity)
	t.reset()
	t.fresh = rows
	t.settle(len(rows))
}

// trackOf returns the track with that number, making it if it is new.
func (k *Keeper) trackOf(n QuantityNumber, id QuantityID) *Track {
	if int(n) > len(k.byNumber) {
		t := &Track{id: id, number: n}
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
	k.budget = refoldBudget
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
		k.startJob(t)
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
func (k *Keeper) startJob(t *Track) {
	j := &job{track: t, quantity: t.quantity, number: t.number, recent: t.rows, count: t.tally.count, position: t.position, ledger: k.ledger}
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
		k.startJob(t) // it read a ledger that has been closed since
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
	t.rest(t.quantity)
	t.fold, t.foldedTo = j.fold, j.position
	t.rows, t.marks, t.markFrom = j.rows, j.marks, 0
	t.last, t.behind, t.saved = j.last, entry{}, 0 // and the checkpoint, if any, has no fold
	t.trim(k.sweep.trimmed)
	t.fresh = since
	k.change++
	k.budget = refoldBudget
	k.settle(t)
	t.publish(k.change)
	k.published.Store(k.change)
}
