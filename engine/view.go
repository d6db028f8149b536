package engine

import (
	"sync/atomic"

	"leadline.example/engine/posterior"
)

// View is an immutable picture of one quantity after some record of the
// ledger. Any goroutine may keep and read it.
type View struct {
	Quantity     *Quantity // as last declared or retired
	Position     Position  // of the last record about the quantity
	ReadingCount int       // readings in the belief
	HasLast      bool
	LastTime     Instant // of the latest reading in the belief
	Rebuilding   bool    // the belief is that of an earlier position, until a rebuild is done
	Change       uint64  // grows with each View of any quantity

	track    *Track
	basis    *model // on which fold rests
	fold     fold
	applied  int // readings, also those not in the belief yet
	foldedTo Position
	rows     []entry // the applied readings that need not be in storage yet
	marks    []fold  // as in Track
	markFrom int
	steps    []RecordedStep
	// Of a belief that time doesn't move, once asked for:
	still    atomic.Pointer[Figures]
	stays    atomic.Pointer[posterior.Posterior]
	foreseen atomic.Pointer[foreseen]
}

// foreseen is the distribution of an indication by an instrument.
type foreseen struct {
	by *Instrument
	p  posterior.Posterior
}

// level is fold.level of v's own fold or another moment's.
func (v *View) level(m *fold, at Instant) posterior.Posterior {
	if m != &v.fold || !v.basis.still() {
		return m.level(v.basis, at)
	}
	if p := v.stays.Load(); p != nil {
		return *p
	}
	p := m.level(v.basis, at)
	v.stays.Store(&p)
	return p
}

// predictive is fold.predictive, likewise where no bias drifts.
func (v *View) predictive(m *fold, at Instant, by *Instrument) posterior.Posterior {
	if held := v.basis.form; m != &v.fold || !v.basis.still() || held != sumForm && held != countsForm {
		return m.predictive(v.basis, at, by)
	}
	if f := v.foreseen.Load(); f != nil && f.by == by {
		return f.p
	}
	f := &foreseen{by, m.predictive(v.basis, at, by)}
	v.foreseen.Store(f)
	return f.p
}

// Declared returns the quantity with the declaration that the belief rests on:
// while it is rebuilt, the one before.
func (v *View) Declared() *Quantity {
	if v.Rebuilding {
		return v.basis.quantity
	}
	return v.Quantity
}

// Breach is the probability that the true value lies outside the tolerance.
type Breach struct {
	Below, Above, Either float64
	Conformance          float64 // 1 - Either, without cancellation
}

// DefaultCoverage is the coverage probability where none is asked for.
const DefaultCoverage = 0.95

// breachOf returns the breach probabilities of a level under a tolerance with
// at least one limit.
func breachOf(p posterior.Posterior, t Tolerance) Breach {
	var b Breach
	switch {
	case t.HasLower && t.HasUpper:
		b.Below, b.Above = p.LowerTail(t.Lower), p.UpperTail(t.Upper)
		b.Conformance = p.Between(t.Lower, t.Upper)
	case t.HasLower:
		b.Below = p.LowerTail(t.Lower)
		b.Conformance = p.UpperTail(t.Lower)
	default:
		b.Above = p.UpperTail(t.Upper)
		b.Conformance = p.LowerTail(t.Upper)
	}
	b.Either = min(1, b.Below+b.Above)
	return b
}
