package engine

import (
	"slices"
	"sort"
	"strings"
	"sync/atomic"
)

// refusal is an entry of the log of refused readings; the rest is in its
// record.
type refusal struct {
	Position Position
	Quantity QuantityID
	Reason   Reason
	Time     Instant
}

// refusals is the log of the latest refused readings, by position. The
// keeper's goroutine changes it; readers see what was published.
type refusals struct {
	limit int
	list  []refusal
	gone  map[Position]struct{} // put through, still in list
	taken map[Position]struct{} // decided to be put through, not yet durable
	shown atomic.Pointer[[]refusal]
}

func (f *refusals) init(limit int) {
	f.limit, f.list = limit, nil
	f.gone, f.taken = map[Position]struct{}{}, map[Position]struct{}{}
}

// add appends r. Slices that readers hold are not overwritten: the list grows
// behind their ends and is copied when it is cut.
func (f *refusals) add(r refusal) {
	if len(f.list) >= 2*f.limit {
		f.list = slices.Clone(f.list[len(f.list)-f.limit:])
	}
	f.list = append(f.list, r)
}

// remove takes the refusal at that position, if any, out of the log.
func (f *refusals) remove(at Position) {
	if at != 0 {
		f.gone[at] = struct{}{}
		delete(f.taken, at)
	}
}

// take tells whether the refusal at that position is still to be put through,
// and reserves it.
func (f *refusals) take(at Position) bool {
	_, taken := f.taken[at]
	_, gone := f.gone[at]
	i := sort.Search(len(f.list), func(i int) bool { return f.list[i].Position >= at })
	if taken || gone || i == len(f.list) || f.list[i].Position != at {
		return false
	}
	f.taken[at] = struct{}{}
	return true
}

// release gives a reserved refusal back: it turned out to be a duplicate, and
// stays in the log.
func (f *refusals) release(at Position) { delete(f.taken, at) }

// all returns the log as the keeper's goroutine sees it.
func (f *refusals) all() []refusal {
	if len(f.gone) > 0 {
		f.list = slices.DeleteFunc(slices.Clone(f.list), func(r refusal) bool {
			_, gone := f.gone[r.Position]
			return gone
		})
		clear(f.gone)
	}
	return f.list[max(0, len(f.list)-f.limit):]
}

func (f *refusals) publish() {
	all := f.all()
	f.shown.Store(&all)
}

// refusalOf makes the log entry of a record.
func (k *Keeper) refusalOf(r *Record) refusal {
	id := QuantityID(strings.Clone(string(r.Reading.Quantity))) // which may be a piece of a whole request
	if r.Number != 0 {
		id = k.byNumber[r.Number-1].id
	}
	return refusal{Position: r.Position, Quantity: id, Reason: r.Reason, Time: r.Reading.Time}
}

// counts are the numbers of readings by what became of them: since the ledger
// began, but for duplicates, which are not recorded, and those by calibration,
// which count since the start of the process.
type counts struct {
	applied    atomic.Uint64
	duplicates atomic.Uint64
	refused    [len(ReadingReasons)]atomic.Uint64
	calibrated [len(CalibrationStates)]atomic.Uint64
}

func (c *counts) countRefused(reason Reason) {
	if i := slices.Index(ReadingReasons[:], reason); i >= 0 {
		c.refused[i].Add(1)
	}
}
