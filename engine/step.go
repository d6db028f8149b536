package engine

import (
	"encoding/binary"
	"math"
	"slices"
)

// RecordedStep is a step as it was published: what becomes of the belief by later readings
// doesn't change it.
type RecordedStep struct {
	StepEvent
	Position   Position
	CreateTime Instant
}

// maxListedSteps bounds the published steps that are listed of a quantity; the ledger keeps all.
const maxListedSteps = 100

// Steps lists the published steps of a quantity, oldest first.
func (k *Keeper) Steps(id QuantityID) ([]RecordedStep, error) {
	t, ok := k.find(id)
	if !ok {
		return nil, notDeclared("quantity", id)
	}
	return t.View().steps, nil
}

// lastStep returns the time of the newest published step.
func (t *Track) lastStep() Instant {
	if n := len(t.steps); n > 0 {
		return t.steps[n-1].Time
	}
	return math.MinInt64
}

// step takes a durable record of a step.
func (t *Track) step(r *Record) {
	all := slices.Clip(t.steps)
	t.steps = append(all[max(0, len(all)-maxListedSteps+1):], RecordedStep{*r.Step, r.Position, r.ReceiveTime})
	t.unrecorded = slices.DeleteFunc(t.unrecorded, func(e StepEvent) bool { return e.Time <= r.Step.Time })
}

// dueSteps has what the tracks' folds newly found recorded in a group to come. What isn't
// recorded yet is part of a track's state, so that a crash in between loses nothing.
func (k *Keeper) dueSteps(tracks []*Track) {
	for _, t := range tracks {
		if t.job != nil {
			continue // its fold is to be replaced
		}
		if t.unrecorded = append(t.unrecorded, t.fold.detected...); len(t.fold.detected) > 0 {
			k.due = append(k.due, t)
		}
		t.fold.detected = nil
	}
	if len(k.due) == 0 {
		return
	}
	all := k.due
	record := &command{done: func() {}, action: func(w *work) error {
		for _, t := range all {
			for i := range t.unrecorded {
				k.recordStep(w, t, &t.unrecorded[i])
			}
		}
		return nil
	}}
	if k.enqueue(record) == nil { // else the next group tries again
		k.due = nil
	}
}

// recordStep records a step unless one as late has been: what a refold finds anew of the past
// isn't news.
func (k *Keeper) recordStep(w *work, t *Track, event *StepEvent) {
	if event.Time <= t.decidedStep {
		return
	}
	recorded := *event
	event, t.decidedStep = &recorded, event.Time
	k.decidedTo++
	*w.next(declarationBytes) = Record{
		Kind: KindStep, ReceiveTime: k.received, Number: t.number, Revision: t.rules.revision, Step: event,
	}
}

func appendSteps(b []byte, steps []RecordedStep) []byte {
	b = binary.AppendUvarint(b, uint64(len(steps)))
	for i := range steps {
		s := &steps[i]
		for _, at := range [...]Instant{s.Time, s.Since, s.CreateTime} {
			b = binary.AppendVarint(b, int64(at))
		}
		b = binary.AppendUvarint(append(b, flag(s.Up)), uint64(s.Position))
		b = appendFloats(b, s.Widen)
	}
	return b
}

func (r *stateReader) steps() (all []RecordedStep) {
	for n := r.uvarint(); n > 0 && r.err == nil; n-- {
		var s RecordedStep
		s.Time, s.Since, s.CreateTime = Instant(r.varint()), Instant(r.varint()), Instant(r.varint())
		s.Up = r.byte() == 1
		s.Position, s.Widen = Position(r.uvarint()), r.float()
		all = append(all, s)
	}
	return all
}
