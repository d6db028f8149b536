package engine

import (
	"math"
	"slices"
	"sort"
	"sync/atomic"

	"leadline.example/engine/posterior"
)

// markSpacing is the number of rows from one mark to the next: a late reading
// refolds at most that many more than come after it. As many rows at least stay
// in memory, for readings that are only a little late.
const markSpacing = 16

// Track is one quantity's place in the keeper. All but its View belongs to the
// keeper's goroutine.
//
// The rows are, from markFrom on, a canonical run that ends
// with the latest reading, and marks[i] is the fold of everything before
// rows[markFrom + i*markSpacing]; so a reading that comes late, but not before
// marks[0], costs one merge and a short refold. The obvious way, to fold on
// arrival, would make the belief depend on the order of arrival; refolding
// everything would make a late reading cost as much as the quantity's whole
// life.
type Track struct {
	id     QuantityID
	number QuantityNumber
	view   atomic.Pointer[View]
	ahead  atomic.Pointer[ahead] // nil until a scrape asks for it
	asked  atomic.Bool           // the forecaster has been asked for it

	// What has been decided, including records that aren't durable yet.
	decided      *Quantity
	rules        rules
	decidedTally tally
	decidedUsed  []use
	stored       atomic.Int64 // no reading that memory may have dropped is later; for all to read

	// What is durable.
	quantity *Quantity
	basis    *model
	tally    tally
	position Position
	law      law   // of basis
	used     []use // of instruments, by number
	fold     fold
	foldedTo Position
	last     entry // the latest in canonical order
	rows     []entry
	marks    []fold
	markFrom int
	behind   entry // the latest reading in marks[0]

	history       []entry        // in a rebuild: all readings in canonical order
	steps         []RecordedStep // published, oldest first; appended to only
	unrecorded    []StepEvent    // detected, and not yet durable as records
	decidedStep   Instant        // of the newest one decided to be
	fresh         []entry        // late ones of the group being folded
	touched       bool           // in the group being folded
	job           *job           // the rebuild under way or waiting; rows behind job.recent then stand in order of arrival
	saved         Position       // the last record that its checkpoint includes
	savedQuantity *Quantity      // as in its checkpoint
	hollow        bool           // restored without a fold
	recount       bool           // restored without all that its tally has now
	held          form           // of the fold restored
	outgrown      bool           // the fold needs all readings again, which aren't at hand
}

// rules is what a declaration asks of readings, close together because a batch
// over many quantities waits for memory more than for anything else.
type rules struct {
	unit          string
	scale         float64 // r as far as it is known, to compare values with
	priorTime     Instant // MinInstant without one
	prior         posterior.Prior
	retired       bool
	needsOwnNoise bool // no repeatability is declared
	log           bool // the scale is logarithmic
	revision      uint32
}

// decide makes q the quantity that readings are decided by.
func (t *Track) decide(q *Quantity) {
	d := &q.Declaration
	t.decided = q
	t.rules = rules{
		unit: d.Unit, scale: d.Repeatability.scale(), priorTime: MinInstant, retired: q.Retired,
		needsOwnNoise: d.Repeatability.Form == RepeatabilityAbsent, revision: q.Revision,
		prior: d.levelPrior(), log: d.Scale == ScaleLog,
	}
	if d.Prior.HasTime {
		t.rules.priorTime = d.Prior.Time
	}
}

// tally is what deciding on a reading or a declaration needs to know of the
// readings applied before.
type tally struct {
	count       int
	bare        int     // without an uncertainty of their own or an instrument's
	direct      int     // without an instrument
	censored    int     // that don't say a value
	averaged    int     // means of several indications
	largest     float64 // magnitude
	least, most float64 // of the numbers that readings say
	positive    float64 // the least of what is to have a logarithm
	finest      float64 // the least uncertainty of a reading's own; 0: there is none
	first, last Instant
}

func (a *tally) add(r *Row) {
	a.note(r)
	a.count++
}

// note is add without the count.
func (a *tally) note(r *Row) {
	if a.count == 0 || r.Time < a.first {
		a.first = r.Time
	}
	if a.count == 0 || r.Time > a.last {
		a.last = r.Time
	}
	if r.Instrument == 0 {
		a.direct++
		if !r.HasUncertainty {
			a.bare++
		}
	}
	if r.Extent != ExtentValue {
		a.censored++
	}
	if r.Samples > 1 {
		a.averaged++
	}
	a.largest = max(a.largest, math.Abs(r.Value), math.Abs(r.Upper))
	positive, most := r.Value, r.Value
	if r.Extent == ExtentBetween {
		positive, most = r.Upper, r.Upper
	}
	if a.count == 0 {
		a.least, a.most, a.positive = r.Value, most, positive
	}
	a.least, a.most, a.positive = min(a.least, r.Value), max(a.most, most), min(a.positive, positive)
	if u := r.Uncertainty; r.HasUncertainty && (a.finest == 0 || u < a.finest) {
		a.finest = u
	}
}

// ID returns the quantity's ID.
func (t *Track) ID() QuantityID { return t.id }

// View returns the present picture; nil before the declaration is durable.
func (t *Track) View() *View { return t.view.Load() }

// publish makes the present state visible.
func (t *Track) publish(change uint64) {
	t.view.Store(&View{
		Quantity: t.quantity, Position: t.position, Change: change,
		ReadingCount: t.fold.count, HasLast: t.fold.count > 0, LastTime: t.fold.lastTime,
		Rebuilding: t.job != nil,
		track:      t, applied: t.tally.count,
		basis: t.basis, fold: t.fold.copied(), foldedTo: t.foldedTo,
		rows: t.rows, marks: t.marks, markFrom: t.markFrom, steps: t.steps,
	})
}

// rest makes m the model that the belief rests on.
func (t *Track) rest(m *model) {
	t.basis, t.law = m, lawOf(m)
}

// reset makes t the track of a quantity without readings.
func (t *Track) reset() {
	t.fold, t.last, t.behind = fold{}, entry{}, entry{}
	t.rows, t.markFrom = nil, 0
	t.marks = []fold{{}}
	t.outgrown = false
}

// settle folds the fresh readings in, as long as that takes at most budget
// refolded steps. It returns the steps taken, and false if a rebuild is needed
// instead; the fresh rows are then in rows, in order of arrival.
func (t *Track) settle(budget int) (steps int, ok bool) {
	fresh := t.fresh
	t.fresh = t.fresh[:0]
	switch {
	case len(fresh) == 0:
		return 0, true
	case t.job != nil:
		t.rows = append(t.rows, fresh...)
		return 0, true
	}
	first := fresh[0].Position
	if t.law.model.dear() && len(fresh)*t.law.model.cost() > budget {
		t.rows = append(t.rows, fresh...)
		t.foldedTo = first - 1
		return 0, false
	}
	if !slices.IsSortedFunc(fresh, entry.compare) {
		slices.SortFunc(fresh, entry.compare)
	}
	if t.follows(&fresh[0]) {
		for i := range fresh {
			t.extend(&fresh[i])
		}
		return 0, true
	}
	if steps, ok = t.insert(fresh, budget); !ok {
		t.foldedTo = first - 1
	}
	return steps, ok
}

// cost is what folding a reading takes, about, in steps of a filter of few states.
func (m *model) cost() int {
	switch {
	case m.form == gridForm && m.learns() != nil:
		return 250
	case m.form == gridForm:
		return 10
	case m.form == bankForm:
		return 5
	}
	return 1
}

// dear tells whether a reading takes so long that not any number can be folded at once.
func (m *model) dear() bool { return m.form == gridForm }

// growBudget is how many readings are folded again at once, in milliseconds; at points, none.
func (m *model) growBudget() int {
	if m.form == gridForm {
		return 0
	}
	return 256
}

// follows tells whether e comes after all readings.
func (t *Track) follows(e *entry) bool {
	return t.fold.count == 0 || !t.last.tiesNameless(e) && compareEntries(&t.last, e) <= 0
}

// add takes one durable reading: it folds it at once if that is right without
// a merge, else keeps it for settle.
func (t *Track) add(e *entry) {
	if t.job == nil && len(t.fresh) == 0 && t.follows(e) {
		t.extend(e)
		return
	}
	t.fresh = append(t.fresh, *e)
}

// extend appends and folds a row, which follows all others.
func (t *Track) extend(e *entry) {
	if len(t.rows)-t.markFrom == len(t.marks)*markSpacing {
		t.marks = append(t.marks, t.fold.copied())
	}
	t.last = *e
	t.fold.add(&t.law, &e.Row)
	t.rows = append(t.rows, *e)
	if !t.outgrown && t.fold.outgrown(t.law.model) {
		t.grow()
	}
}

// grow folds all readings again, at nodes that fit what they have come to, if they are few
// and at hand; else they are left to a rebuild.
func (t *Track) grow() {
	rows := t.history
	if rows == nil {
		if t.marks[0].count > 0 || len(t.rows)-t.markFrom > t.law.model.growBudget() {
			t.outgrown = true
			return
		}
		rows = t.rows[t.markFrom:]
	}
	t.fold.bank.replace(t.law.model, rows[:t.fold.count])
}

// insert merges rows of which the first is late. The slices that Views share
// are left as they are.
func (t *Track) insert(fresh []entry, budget int) (steps int, ok bool) {
	if t.behindMarks(&fresh[0]) || t.tiesNameless(fresh) {
		t.rows = append(t.rows, fresh...)
		return 0, false
	}
	at := t.markFrom + sort.Search(len(t.rows)-t.markFrom, func(i int) bool {
		return compareEntries(&t.rows[t.markFrom+i], &fresh[0]) > 0
	})
	mark := (at - t.markFrom) / markSpacing
	mark = min(mark, len(t.marks)-1)
	from := t.markFrom + mark*markSpacing
	steps = (len(t.rows) - from) * t.law.model.cost()
	if steps > budget {
		t.rows = append(t.rows, fresh...)
		return 0, false
	}
	tail := mergeEntries(t.rows[from:], fresh)
	t.rows = append(make([]entry, 0, from+len(tail)), t.rows[:from]...)
	t.fold = t.marks[mark].copied()
	t.marks = slices.Clone(t.marks[:mark+1])
	for i := range tail {
		t.extend(&tail[i])
	}
	return steps, true
}

// behindMarks tells whether e comes before the oldest mark, as far as is known.
func (t *Track) behindMarks(e *entry) bool {
	return t.marks[0].count > 0 && (t.behind.tiesNameless(e) || compareEntries(e, &t.behind) < 0)
}

// tiesNameless tells whether a row's ID is needed and isn't at hand.
func (t *Track) tiesNameless(fresh []entry) bool {
	rows := t.rows[t.markFrom:]
	for i := range fresh {
		at := sort.Search(len(rows), func(n int) bool { return rows[n].Time >= fresh[i].Time })
		for ; at < len(rows) && rows[at].Time == fresh[i].Time; at++ {
			if rows[at].tiesNameless(&fresh[i]) {
				return true
			}
		}
	}
	return false
}

// mergeEntries merges two canonical runs into a new one.
func mergeEntries(a, b []entry) []entry {
	out := make([]entry, 0, len(a)+len(b))
	for len(a) > 0 && len(b) > 0 {
		if compareEntries(&b[0], &a[0]) < 0 {
			out, b = append(out, b[0]), b[1:]
		} else {
			out, a = append(out, a[0]), a[1:]
		}
	}
	return append(append(out, a...), b...)
}

// minTrim is how many rows there must be for it to be worth dropping any.
const minTrim = 3 * markSpacing

// trim drops rows that complete segments hold, where nothing needs them.
func (t *Track) trim(stored Position) {
	if t.job != nil || len(t.rows) < minTrim {
		return
	}
	n := 0
	for n < len(t.rows) && t.rows[n].Position <= stored {
		n++
	}
	if n < t.markFrom || n == 0 {
		return
	}
	mark := min((n-t.markFrom)/markSpacing, len(t.marks)-1) - 1
	if mark < 0 {
		return
	}
	if mark > 0 {
		t.behind = t.rows[t.markFrom+mark*markSpacing-1]
	}
	kept := t.rows[t.markFrom+mark*markSpacing:]
	t.rows = append(make([]entry, 0, len(kept)+markSpacing), kept...)
	t.marks = slices.Clone(t.marks[mark:])
	t.markFrom = 0
}
