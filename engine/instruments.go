package engine

import (
	"context"
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"
	"sync/atomic"
)

// instrumentTrack is one instrument's place in the keeper, to whose goroutine all
// but shown belongs.
type instrumentTrack struct {
	id     InstrumentID
	number InstrumentNumber
	shown  atomic.Pointer[shownInstrument] // nil before the declaration is durable

	decided     *Instrument // also if that isn't durable yet
	decidedSpan span        // of the readings decided on

	current  *Instrument // durable
	position Position    // of its record
	users    []*Track    // quantities whose readings name it; appended to only
}

// shownInstrument is an immutable picture of an instrument.
type shownInstrument struct {
	instrument *Instrument
	users      []*Track
}

// span is the times of some readings.
type span struct {
	count       int
	first, last Instant
}

func (s *span) add(at Instant) {
	if s.count == 0 {
		s.first, s.last = at, at
	}
	s.first, s.last = min(s.first, at), max(s.last, at)
	s.count++
}

func (s *span) join(t span) {
	if t.count == 0 {
		return
	}
	s.add(t.first)
	s.add(t.last)
	s.count += t.count - 2
}

// use is what a quantity's readings by one instrument amount to.
type use struct {
	number          InstrumentNumber
	bare            int // of those readings without an uncertainty of their own
	span            span
	lowest, highest float64 // values
	finest          float64 // the least uncertainty of a reading's own; 0: there is none
	samples         uint32  // the most of a reading without
}

// addUse counts a reading by an instrument in uses sorted by number; isNew tells
// whether it is the first.
func addUse(uses []use, r *Row) (all []use, isNew bool) {
	n, found := slices.BinarySearchFunc(uses, r.Instrument, func(u use, n InstrumentNumber) int { return int(u.number) - int(n) })
	if !found {
		uses = slices.Insert(uses, n, use{number: r.Instrument, lowest: math.Inf(1), highest: math.Inf(-1)})
	}
	uses[n].span.add(r.Time)
	if r.Extent == ExtentValue {
		uses[n].lowest, uses[n].highest = min(uses[n].lowest, r.Value), max(uses[n].highest, r.Value)
	}
	if !r.HasUncertainty {
		uses[n].bare++
		uses[n].samples = max(uses[n].samples, r.Samples)
	} else if uses[n].finest == 0 || r.Uncertainty < uses[n].finest {
		uses[n].finest = r.Uncertainty
	}
	return uses, !found
}

// InstrumentView is an instrument with what rests on it.
type InstrumentView struct {
	Instrument Instrument
	Quantities int // whose readings name it
	Rebuilding int // of those, whose belief is being folded anew
}

func (t *instrumentTrack) view() InstrumentView {
	s := t.shown.Load()
	v := InstrumentView{Instrument: *s.instrument, Quantities: len(s.users)}
	for _, user := range s.users {
		if u := user.View(); u != nil && u.Rebuilding { // nil: declared in the group under way
			v.Rebuilding++
		}
	}
	return v
}

func (t *instrumentTrack) publish() {
	t.shown.Store(&shownInstrument{t.current, slices.Clip(t.users)})
}

// Instrument returns an instrument as last declared, also a retired one.
func (k *Keeper) Instrument(id InstrumentID) (InstrumentView, error) {
	t := k.directory.Load().instrument(id)
	if t == nil || t.shown.Load() == nil {
		return InstrumentView{}, instrumentNotDeclared("id", id)
	}
	return t.view(), nil
}

// Instruments lists the instruments whose IDs begin with prefix, in the order
// of their IDs, after the one given; more tells whether there are others.
func (k *Keeper) Instruments(prefix string, after InstrumentID, limit int, showRetired bool) (page []InstrumentView, more bool) {
	all := k.directory.Load().allInstruments()
	first := sort.Search(len(all), func(i int) bool {
		return string(all[i].id) >= prefix && (after == "" || all[i].id > after)
	})
	for _, t := range all[first:] {
		if !strings.HasPrefix(string(t.id), prefix) {
			break
		}
		if s := t.shown.Load(); s == nil || s.instrument.Retired && !showRetired {
			continue
		}
		if len(page) == limit {
			return page, true
		}
		page = append(page, t.view())
	}
	return page, false
}

func instrumentNotDeclared(field string, id InstrumentID) error {
	return refuse(NotFound, field, "instrument %q is not declared; declare it with PUT /v1/instruments/{id}", id)
}

// DeclareInstrument declares an instrument, replaces its declaration or revives
// it; created tells the first case. A declaration equal to the one in force
// writes nothing. Beliefs that rest on it are folded anew where its noise or
// its calibrations change.
func (k *Keeper) DeclareInstrument(ctx context.Context, id InstrumentID, d InstrumentDeclaration, c Condition, receive Instant) (v InstrumentView, created bool, err error) {
	if err := CheckID("id", string(id)); err != nil {
		return InstrumentView{}, false, err
	}
	if err := d.Check(); err != nil {
		return InstrumentView{}, false, err
	}
	return k.changeInstrument(ctx, id, func(t *instrumentTrack) (*Instrument, error) {
		next := &Instrument{ID: id, Declaration: d, Revision: 1, CreateTime: receive, UpdateTime: receive}
		if err := c.checkInstrument(t); t == nil || err != nil {
			return next, err
		}
		if t.decided.Declaration.Equal(&d) && !t.decided.Retired {
			return nil, nil
		}
		next.Revision, next.CreateTime = t.decided.Revision+1, t.decided.CreateTime
		return next, k.checkInstrumentChange(t, &d)
	})
}

// RetireInstrument refuses further readings by an instrument; what it has read
// stays. Retiring it again changes nothing.
func (k *Keeper) RetireInstrument(ctx context.Context, id InstrumentID, c Condition, receive Instant) (InstrumentView, error) {
	v, _, err := k.changeInstrument(ctx, id, func(t *instrumentTrack) (*Instrument, error) {
		if t == nil {
			return nil, instrumentNotDeclared("id", id)
		}
		if err := c.checkInstrument(t); err != nil || t.decided.Retired {
			return nil, err
		}
		next := *t.decided
		next.Retired, next.RetireTime, next.UpdateTime = true, receive, receive
		return &next, nil
	})
	return v, err
}

// changeInstrument has decide say, in the keeper's goroutine, what an instrument
// is to be; nil leaves it. It returns when that is durable.
func (k *Keeper) changeInstrument(ctx context.Context, id InstrumentID, decide func(*instrumentTrack) (*Instrument, error)) (v InstrumentView, created bool, err error) {
	var t *instrumentTrack
	err = k.wait(ctx, &command{action: func(w *work) error {
		t = k.directory.Load().instrument(id)
		next, err := decide(t)
		if next == nil || err != nil {
			return err
		}
		if t == nil {
			t, created = k.newInstrument(id), true
		}
		next.Number = t.number
		t.decided = next
		k.decidedTo++
		const calibrationBytes = 100
		*w.next(declarationBytes + calibrationBytes*len(next.Declaration.Calibrations)) = Record{
			Kind: KindInstrument, ReceiveTime: next.UpdateTime, Revision: next.Revision, Instrument: next,
		}
		return nil
	}})
	if err != nil {
		return InstrumentView{}, false, err
	}
	return t.view(), created, nil
}

// newInstrument makes the next track of an instrument.
func (k *Keeper) newInstrument(id InstrumentID) *instrumentTrack {
	t := &instrumentTrack{id: id, number: InstrumentNumber(len(k.instruments) + 1)}
	k.instruments = append(k.instruments, t)
	k.directory.Load().addInstrument(t)
	return t
}

func (c Condition) checkInstrument(t *instrumentTrack) error {
	if t == nil {
		return c.checkTag("instrument", "", "")
	}
	return c.checkTag("instrument", string(t.id), t.decided.ETag())
}

// checkInstrumentChange refuses what the readings that rest on t don't allow.
func (k *Keeper) checkInstrumentChange(t *instrumentTrack, d *InstrumentDeclaration) error {
	was := &t.decided.Declaration
	if t.decidedSpan.count == 0 {
		return nil
	}
	if d.Unit != was.Unit {
		return refuse(UnitFixed, "unit", "unit is %q but %d readings in %q rest on the instrument; keep the unit, or declare another instrument", d.Unit, t.decidedSpan.count, was.Unit)
	}
	if err := t.checkRemoved(d); err != nil {
		return err
	}
	for _, user := range k.byNumber {
		if err := user.checkNoiseOf(t.number, d); err != nil {
			return err
		}
		if err := k.checkMethodOf(user, t.number, d); err != nil {
			return err
		}
	}
	return nil
}

// checkMethodOf refuses a declaration of an instrument under which there is no method for the
// readings of a quantity.
func (k *Keeper) checkMethodOf(t *Track, n InstrumentNumber, d *InstrumentDeclaration) error {
	if !slices.ContainsFunc(t.decidedUsed, func(u use) bool { return u.number == n }) {
		return nil
	}
	sentence := objectionToAll(&t.decided.Declaration, len(t.decided.InForce()), &t.decidedTally, t.decidedUsed, func(i InstrumentNumber) *InstrumentDeclaration {
		if i == n {
			return d
		}
		return &k.instruments[i-1].decided.Declaration
	})
	if sentence != "" {
		return refuse(NotSupported, "instrument", "the belief about %q, whose readings rest on the instrument, could not be held: %s", t.id, sentence)
	}
	return nil
}

// checkRemoved refuses to take away a calibration that readings may rest on: one
// in force at some time between the first and the last of them.
func (t *instrumentTrack) checkRemoved(d *InstrumentDeclaration) error {
	was := t.decided.Declaration.Calibrations
	for i := range was {
		from, until := was[i].ValidFrom, MaxInstant
		if i == 0 {
			from = MinInstant
		}
		if i+1 < len(was) {
			until = was[i+1].ValidFrom
		}
		kept := validFrom(d.Calibrations, was[i].ValidFrom) || // or moved, as where its time was mistyped
			len(d.Calibrations) >= len(was) && !validFrom(was, d.Calibrations[i].ValidFrom)
		if !kept && from <= t.decidedSpan.last && t.decidedSpan.first < until {
			return refuse(InvalidField, "calibrations", "calibrations no longer has the one with valid_from %v, on which readings from %v to %v may rest; keep it, and correct what is wrong in it, also its time", was[i].ValidFrom, max(from, t.decidedSpan.first), min(until, t.decidedSpan.last))
		}
	}
	return nil
}

// checkNoiseOf refuses a declaration of an instrument that would leave readings
// of t without a repeatability, or with one too small for their values.
func (t *Track) checkNoiseOf(n InstrumentNumber, d *InstrumentDeclaration) error {
	i := slices.IndexFunc(t.decidedUsed, func(u use) bool { return u.number == n })
	if i < 0 || t.decidedUsed[i].bare == 0 {
		return nil
	}
	s := d.Repeatability.StandardDeviation
	if s == 0 && t.rules.needsOwnNoise && !d.Repeatability.Learned.Learned() {
		return refuse(InvalidField, "repeatability.standard_deviation", "repeatability.standard_deviation is missing but %d readings of %q, which declares no repeatability, rest on it; keep it", t.decidedUsed[i].bare, t.id)
	}
	if largest := t.decidedTally.largest; s > 0 && largest/s > maxRatio {
		return refuse(InvalidField, "repeatability.standard_deviation", "repeatability.standard_deviation is less than 1e-150 times the reading %v of %q, which rests on it; give a larger one", largest, t.id)
	}
	return nil
}

// applyInstrument takes a durable record of an instrument.
func (k *Keeper) applyInstrument(r *Record) {
	i := r.Instrument
	if int(i.Number) > len(k.instruments) {
		k.newInstrument(i.ID).decided = i
	}
	t := k.instruments[i.Number-1]
	if r.Position <= t.position {
		return // known since the start: the ledger gives the latest record of each
	}
	t.current, t.position = i, r.Position
	t.publish()
	for _, user := range t.users {
		k.touch(user)
		user.position = r.Position
		k.rebase(user)
	}
}

// readAs takes note of what a durable reading of t asks of the method by which its belief is
// held.
func (k *Keeper) readAs(t *Track, r *Row) {
	isNew := t.tally.asks(r)
	var before use
	if r.Instrument != 0 {
		n := slices.IndexFunc(t.used, func(u use) bool { return u.number == r.Instrument })
		if n >= 0 {
			before = t.used[n]
		}
		t.used, _ = addUse(t.used, r)
		if n < 0 {
			i := k.instruments[r.Instrument-1]
			i.users = append(i.users, t)
			i.publish()
		}
		isNew = isNew || n < 0 || k.instruments[r.Instrument-1].current.Declaration.asks(&before, r)
	}
	t.tally.note(r)
	if isNew {
		k.rebase(t)
	}
	t.tally.count++
}

// asks tells whether a reading is the first of its kind.
func (a *tally) asks(r *Row) bool {
	return r.Extent != ExtentValue && a.censored == 0 || r.Samples > 1 && a.averaged == 0 ||
		r.Instrument == 0 && (a.direct == 0 || !r.HasUncertainty && a.bare == 0)
}

// asks tells whether a reading is the first of an instrument that is beyond its measuring
// interval, or under another calibration than those before.
func (d *InstrumentDeclaration) asks(u *use, r *Row) bool {
	m := d.MeasuringInterval
	beyond := r.Extent == ExtentValue && (m.HasUpper && r.Value > m.Upper && u.highest <= m.Upper || m.HasLower && r.Value < m.Lower && u.lowest >= m.Lower)
	finer := d.Resolution > 0 && (r.HasUncertainty && r.Uncertainty < d.Resolution && (u.finest == 0 || u.finest >= d.Resolution) ||
		!r.HasUncertainty && r.Samples > max(1, u.samples))
	return beyond || finer || d.at(r.Time) != d.at(u.span.first)
}

// modelOf returns the model that t's belief is to rest on.
func (k *Keeper) modelOf(t *Track) *model {
	var instruments []*Instrument
	for _, u := range t.used {
		instruments = append(instruments, k.instruments[u.number-1].current)
	}
	current := func(n InstrumentNumber) *InstrumentDeclaration { return &k.instruments[n-1].current.Declaration }
	r := t.tally.readAs(t.used, current)
	return newModel(t.quantity, instruments, &r, k.checkLaw(&t.quantity.Declaration))
}

// readAs returns what readings amount to for the choice of a method.
func (a *tally) readAs(uses []use, of func(InstrumentNumber) *InstrumentDeclaration) readAs {
	r := readAs{direct: a.direct > 0, bareDirect: a.bare > 0, censored: a.censored > 0, averaged: a.averaged > 0}
	for _, u := range uses {
		r.instruments = append(r.instruments, instrumentUse{of(u.number), u.lowest, u.highest, u.span.first, u.span.last, u.finest, u.samples})
	}
	return r
}

// loadInstruments takes the latest record of each instrument.
func (k *Keeper) loadInstruments(from Ledger) error {
	k.instruments = nil
	return from.Instruments(func(r *Record) error {
		k.applyInstrument(r)
		return nil
	})
}

// presentInstruments makes what is durable all that is decided.
func (k *Keeper) presentInstruments() {
	for n := len(k.instruments); n > 0 && k.instruments[n-1].current == nil; n-- {
		k.directory.Load().removeInstrument(k.instruments[n-1])
		k.instruments = k.instruments[:n-1]
	}
	for _, t := range k.instruments {
		t.decided, t.decidedSpan = t.current, span{}
	}
	for _, t := range k.byNumber {
		t.decidedUsed = slices.Clone(t.used)
		for _, u := range t.used {
			i := k.instruments[u.number-1]
			i.decidedSpan.join(u.span)
			if t.position < i.position { // the belief is that under the latest declaration
				t.position, t.foldedTo = i.position, i.position
			}
		}
	}
}

// objectionToInstrument returns why a reading can't be by its instrument, or "".
func (t *Track) objectionToInstrument(r *Reading, i *instrumentTrack) (Reason, string) {
	switch {
	case i == nil:
		return UnknownInstrument, fmt.Sprintf("instrument %.80q is not declared; declare it with PUT /v1/instruments/{id}, then send the reading again", r.Instrument)
	case i.decided.Retired:
		return InstrumentRetired, fmt.Sprintf("instrument %q was retired at %v; declare it again to revive it, then send the reading again", i.id, i.decided.RetireTime)
	case i.decided.Declaration.Unit != t.rules.unit:
		return UnitMismatch, fmt.Sprintf("instrument %q is in %q but the quantity is in %q; declare an instrument in the quantity's unit and convert the value", i.id, i.decided.Declaration.Unit, t.rules.unit)
	case len(t.decidedUsed) >= MaxQuantityInstruments && !slices.ContainsFunc(t.decidedUsed, func(u use) bool { return u.number == i.number }):
		return NotSupported, fmt.Sprintf("instrument %q would be one more than the %d by which a quantity can be read; use one of those", i.id, MaxQuantityInstruments)
	}
	return "", ""
}

// noiseOf returns what a reading without its own uncertainty has: the
// instrument's repeatability, else the quantity's scale; NaN if there is none.
func (a *rules) noiseOf(i *instrumentTrack) float64 {
	if i != nil {
		r := &i.decided.Declaration.Repeatability
		if r.StandardDeviation > 0 {
			return r.StandardDeviation
		}
		if r.Learned.Learned() {
			return r.Learned.scale()
		}
	}
	if a.needsOwnNoise {
		return math.NaN()
	}
	return a.scale
}

// validFrom tells whether one of the calibrations begins at an instant.
func validFrom(all []Calibration, at Instant) bool {
	return slices.ContainsFunc(all, func(c Calibration) bool { return c.ValidFrom == at })
}
