package engine

import (
	"errors"
	"fmt"

	"leadline.example/engine/modelcheck"
)

// load opens the ledger and brings the state up to its end: from the last
// complete checkpoint and the records after it.
func (k *Keeper) load() error {
	l, err := k.options.Open()
	if err != nil {
		return err
	}
	if err := k.loadFrom(l); err != nil {
		return errors.Join(fmt.Errorf("replay the ledger: %w", err), l.Close())
	}
	return nil
}

func (k *Keeper) loadFrom(l Ledger) error {
	k.ledger = l
	k.current.Store(&l)
	k.directory.Store(newDirectory())
	k.byNumber = nil
	k.window = newWindow(k.options.DuplicateWindow, k.options.minGeneration)
	k.laws = map[modelcheck.Settings]modelcheck.Law{}
	k.refusals.init(k.options.RefusedLog)
	k.touched, k.arrived, k.jobs, k.partial, k.fresh = nil, nil, nil, nil, 0
	k.change++
	k.working = true // no job is dispatched while loading

	if err := k.loadInstruments(l); err != nil {
		return err
	}
	sweep, err := l.Checkpoint(k.restore)
	if err != nil {
		return err
	}
	done := swept{sweep.Segment, sweep.Through}
	k.budget = refoldBudget
	k.sweep = sweeper{written: done, durable: done, trimmed: sweep.Through, trim: len(k.byNumber)}
	k.trimmed.Store(uint64(sweep.Through))
	sum, err := k.restoreSummary(sweep.Summary)
	if err != nil {
		return err
	}
	if err := k.replayFrom(sweep.Through, sum); err != nil {
		return err
	}
	return k.present()
}

// restore takes the checkpoint of one quantity.
func (k *Keeper) restore(e CheckpointEntry) error {
	if int(e.Number) != len(k.byNumber)+1 {
		return fmt.Errorf("checkpoint of quantity number %d follows that of %d", e.Number, len(k.byNumber))
	}
	t := k.trackOf(e.Number, e.Quantity.ID)
	t.quantity, t.savedQuantity = e.Quantity, e.Quantity
	t.position, t.saved, t.foldedTo = e.Through, e.Through, e.Through
	t.reset()
	rebuild, err := t.decodeState(e.State, k.instruments)
	if err != nil {
		return err
	}
	t.rest(k.modelOf(t))
	rebuild = rebuild || t.held != t.basis.form && t.fold.count > 0
	if rebuild {
		t.fold, t.last = fold{}, entry{}
	}
	t.marks[0], t.behind = t.fold.copied(), t.last
	t.hollow = rebuild
	for _, u := range t.used {
		i := k.instruments[u.number-1]
		i.users = append(i.users, t)
		i.publish()
	}
	if t.tally.count > 0 {
		t.stored.Store(int64(t.tally.last))
	}
	k.arrived = append(k.arrived, t)
	return nil
}

// summaryPositions are two positions that a summary names.
type summaryPositions struct {
	countedTo Position // counts and log include every record up to this
	window    Position // of the first reading ID to be remembered, 0 if none
}

// restoreSummary takes the counts and the log of refusals.
func (k *Keeper) restoreSummary(b []byte) (sum summaryPositions, err error) {
	k.applied.Store(0)
	for i := range k.refused {
		k.refused[i].Store(0)
	}
	if len(b) == 0 {
		return sum, nil
	}
	if b[0] != summaryVersion {
		return sum, fmt.Errorf("checkpoint summary has version %d, not %d", b[0], summaryVersion)
	}
	r := stateReader{rest: b[1:]}
	for i := range r.uvarint() {
		if n := r.uvarint(); int(i) < len(k.refused) {
			k.refused[i].Store(n)
		}
	}
	k.applied.Store(r.uvarint())
	sum.countedTo, sum.window = Position(r.uvarint()), Position(r.uvarint())
	var at []Position
	for last := Position(0); r.err == nil && len(r.rest) > 0; {
		last += Position(r.uvarint())
		at = append(at, last)
	}
	if r.err != nil {
		return sum, fmt.Errorf("checkpoint summary: %w", r.err)
	}
	return sum, k.ledger.Records(at, func(r *Record) error {
		k.refusals.add(k.refusalOf(r))
		return nil
	})
}

// replayFrom applies the records after through, and reads those before it that
// the window of reading IDs covers.
func (k *Keeper) replayFrom(through Position, sum summaryPositions) error {
	from := through + 1
	if sum.window != 0 {
		from = min(from, sum.window)
	}
	k.window.lost = from - 1
	k.position.Store(uint64(through))
	n := 0
	err := k.ledger.Replay(from, func(r *Record) error {
		if err := k.checkReplayed(r); err != nil {
			return err
		}
		k.remember(r)
		if r.Position <= through {
			return nil
		}
		k.replay(r, sum.countedTo)
		k.received = r.ReceiveTime
		k.position.Store(uint64(r.Position))
		if n++; n%maxGroupRecords == 0 {
			k.settleReplayed()
		}
		return nil
	})
	k.settleReplayed()
	return err
}

// checkReplayed guards against a ledger that no keeper wrote.
func (k *Keeper) checkReplayed(r *Record) error {
	known := int(r.Number) <= len(k.byNumber)
	switch {
	case r.Kind == KindInstrument:
		if i := r.Instrument; i != nil && i.Number > 0 && int(i.Number) <= len(k.instruments) {
			return nil
		}
		return fmt.Errorf("record %d is of an instrument that the ledger doesn't list", r.Position)
	case r.Kind == KindDeclaration && r.Declaration != nil && r.Number != 0 && int(r.Number) <= len(k.byNumber)+1,
		(r.Kind == KindRetirement || r.Kind == KindReading || r.Kind == KindRenewal && r.Renewal != nil || r.Kind == KindStep && r.Step != nil) && r.Number != 0 && known,
		r.Kind == KindRefusal && known:
		return nil
	}
	return fmt.Errorf("record %d of kind %d is about quantity number %d, of which there are %d", r.Position, r.Kind, r.Number, len(k.byNumber))
}

// remember puts an applied reading's ID into the window.
func (k *Keeper) remember(r *Record) {
	if r.Kind == KindReading && r.Reading.ID != "" {
		k.window.add(seenID{
			hash: k.seeds.hash(r.Number, r.Reading.ID), time: r.Reading.Time, said: r.Reading.said(),
			position: r.Position, receive: r.ReceiveTime, untimed: !r.Reading.HasTime,
		})
	}
}

// replay applies one record, but for what the checkpoint includes already.
func (k *Keeper) replay(r *Record, countedTo Position) {
	if r.Position > countedTo {
		k.count(r)
	}
	if r.Kind == KindInstrument {
		k.applyInstrument(r)
	}
	if r.Number == 0 || r.Kind == KindRefusal {
		return
	}
	if int(r.Number) <= len(k.byNumber) {
		if t := k.byNumber[r.Number-1]; r.Position <= t.saved {
			if r.Kind == KindReading {
				t.rows = append(t.rows, entry{Row: k.rowOf(r), ID: r.Reading.ID})
				t.markFrom = len(t.rows)
			}
			return
		}
	}
	k.applyToTrack(r)
}

func (k *Keeper) settleReplayed() {
	k.settleTouched()
	k.budget = refoldBudget
	for _, t := range k.touched {
		t.touched = false
	}
	k.touched = k.touched[:0]
}

// recount counts all readings of a track whose checkpoint is of an earlier version.
func (k *Keeper) recount(t *Track) error {
	all, err := loadEntries(k.ledger, t.number, t.position, t.tally.count, t.rows)
	if err != nil {
		return err
	}
	t.tally, t.used, t.recount = tally{}, nil, false
	for i := range all {
		t.tally.add(&all[i].Row)
		if all[i].Instrument != 0 {
			t.used, _ = addUse(t.used, &all[i].Row)
		}
	}
	if t.job == nil {
		t.rest(k.modelOf(t))
	} else {
		k.startJob(t, k.modelOf(t)) // which was for readings as they had not been counted yet
	}
	return nil
}

// present rebuilds what the checkpoint left to be rebuilt and publishes all.
func (k *Keeper) present() error {
	for _, t := range k.byNumber {
		if t.recount {
			if err := k.recount(t); err != nil {
				return err
			}
		}
		if t.hollow && t.job == nil {
			k.startJob(t, t.basis)
		}
		t.hollow = false
	}
	for len(k.jobs) > 0 {
		j := k.jobs[0]
		k.jobs = k.jobs[1:]
		if j.track.job != j {
			continue
		}
		if j.run(); j.err != nil {
			return j.err
		}
		k.finishJob(j)
	}
	k.working = false
	for _, t := range k.byNumber {
		t.decide(t.quantity)
		t.decidedTally = t.tally
		k.touch(t)
	}
	k.presentInstruments()
	k.decidedTo = Position(k.position.Load())
	k.due = nil
	for _, t := range k.byNumber {
		if t.decidedStep = t.lastStep(); len(t.unrecorded) > 0 {
			k.due = append(k.due, t)
		}
	}
	k.dueSteps(k.byNumber)
	k.tracks.Store(nil)
	k.publish(k.decidedTo)
	return nil
}
