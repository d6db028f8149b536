package engine

import (
	"math"
	"slices"
)

// A reading that is not later than what memory no longer holds, with an ID that
// the window has lost, may repeat one that only the ledger knows. Looking there takes time that grows with the
// quantity's life, so it is done in the caller's goroutine before the keeper
// takes the command, one pass over the rows of each quantity for a whole
// batch. The keeper relies on it for readings up to the position through which
// rows are dropped from memory; should that have moved since, the command goes
// back for another look.

// late is a reading that needs the lookup.
type late struct {
	index int // in the batch
	time  Instant
}

// notLookedUp is no position through which rows are dropped.
const notLookedUp Position = math.MaxUint64

// resolve looks up what c's readings need. Without force, the late ones are
// left out while the window has lost nothing.
func (k *Keeper) resolve(c *command, force bool) error {
	c.within = k.directory.Load()
	c.found = c.within.resolve(c.batch.Readings, &k.seeds)
	if !force && k.windowLost.Load() == 0 {
		c.trimmed = notLookedUp
		return nil
	}
	var err error
	c.trimmed, err = k.lookUp(c)
	return err
}

// lookUp fills in found[i].stored and returns the position through which that
// is complete.
func (k *Keeper) lookUp(c *command) (Position, error) {
	through := Position(k.trimmed.Load())
	byTrack := map[*Track][]late{}
	for i := range c.batch.Readings {
		r, t := &c.batch.Readings[i], c.found[i].track
		if t != nil && t.mayHold(r) {
			byTrack[t] = append(byTrack[t], late{i, r.Time})
		}
	}
	for t, all := range byTrack {
		if err := k.lookUpTrack(c, t, all); err != nil {
			return 0, err
		}
	}
	return through, nil
}

// lookUpTrack reads the rows of one quantity once and then the records of
// those that have the time of a late reading and an ID.
func (k *Keeper) lookUpTrack(c *command, t *Track, all []late) error {
	slices.SortFunc(all, func(a, b late) int { return int(min(1, max(-1, a.time-b.time))) })
	var at []Position
	err := k.Ledger().Rows(t.number, all[0].time, func(rows []Row) error {
		for i := range rows {
			if _, hit := search(all, rows[i].Time); hit && rows[i].HasID {
				at = append(at, rows[i].Position)
			}
		}
		return nil
	})
	if err != nil || len(at) == 0 {
		return err
	}
	return k.Ledger().Records(at, func(rec *Record) error {
		first, _ := search(all, rec.Reading.Time)
		for _, l := range all[first:] {
			if l.time != rec.Reading.Time {
				break
			}
			if c.batch.Readings[l.index].ID == rec.Reading.ID {
				c.found[l.index].stored = &seenID{time: rec.Reading.Time, said: rec.Reading.said(), position: rec.Position}
			}
		}
		return nil
	})
}

func search(all []late, at Instant) (first int, hit bool) {
	return slices.BinarySearchFunc(all, at, func(l late, at Instant) int {
		switch {
		case l.time < at:
			return -1
		case l.time > at:
			return 1
		}
		return 0
	})
}

// mustLookUp tells whether the lookup of c doesn't cover what window and memory
// lack. Going back for it costs c its place in the queue, so it is asked of each
// reading.
func (k *Keeper) mustLookUp(c *command) bool {
	if c.next > 0 || c.trimmed == k.sweep.trimmed || k.window.complete(len(c.found)) {
		return false
	}
	for i := range c.found {
		if r, t := &c.batch.Readings[i], c.found[i].track; t != nil && t.mayHold(r) {
			return true
		}
	}
	return false
}

// mayHold tells whether r may be the repeat of a reading that memory has
// dropped.
func (t *Track) mayHold(r *Reading) bool {
	return r.ID != "" && r.HasTime && r.Time <= Instant(t.stored.Load())
}

// maxLookups is how often a command is looked up before its sender is asked to
// come again: each time a checkpoint ended during the lookup.
const maxLookups = 5

// again looks a command up anew and puts it back into the queue.
func (k *Keeper) again(c *command) {
	err := k.resolve(c, true)
	if c.lookups++; err == nil && c.lookups > maxLookups {
		err = errOverloaded
	}
	if err == nil {
		err = k.enqueue(c)
	}
	if err == nil {
		return
	}
	c.err = err
	k.queued.Add(-int64(len(c.batch.Readings)))
	c.done()
}
