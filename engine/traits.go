package engine

import (
	"fmt"
	"math"
	"strings"
)

// Errors tells what readings of a quantity share.
type Errors uint8

const (
	NoErrors      Errors = iota // nothing: no calibrated instrument
	OneBias                     // a bias at a time: all readings are of one instrument whose calibrations state a bias and its uncertainty alone
	FurtherErrors               // any others
)

// traits is what a quantity asks of the method by which its belief is held.
type traits struct {
	dynamics DynamicsForm
	plain    bool // no reading names an instrument
	learned  int  // repeatabilities that are learned
	floored  bool // with a floor
	averaged bool // some readings are means of several
	display  bool // a resolution is coarser than r, as far as r is known
	censored bool // some readings are censored, or beyond a measuring interval
	outliers bool
	log      bool
	errors   Errors
	changes  bool // there are renewals, or steps widen the level
	further  bool // readings are under several calibrations
}

// words names what t combines.
func (t *traits) words() string {
	all := []string{"dynamics " + dynamicsWord(t.dynamics)}
	for _, w := range []struct {
		has  bool
		word string
	}{
		{t.learned == 1, "a learned repeatability"}, {t.learned > 1, "several learned repeatabilities"},
		{t.outliers, "outliers"}, {t.censored, "censored readings"}, {t.display, "a display coarser than the repeatability"},
		{t.log, "scale LOG"}, {t.errors == OneBias, "a calibrated instrument"}, {t.errors == FurtherErrors && !t.log, "instruments with relative, correlated or occasion parts, drift, shared references or several biases"},
		{t.errors == FurtherErrors && t.log, "an instrument's own repeatability or calibration"},
	} {
		if w.has {
			all = append(all, w.word)
		}
	}
	if len(all) == 1 {
		return all[0] + " and its readings"
	}
	return strings.Join(all[:len(all)-1], ", ") + " and " + all[len(all)-1]
}

// dynamicsWord is how the interface calls dynamics.
func dynamicsWord(d DynamicsForm) string {
	return [...]string{"constant", "random_walk", "linear_trend", "mean_reverting"}[d]
}

// instrumentUse is an instrument as readings of a quantity used it.
type instrumentUse struct {
	declaration     *InstrumentDeclaration
	lowest, highest float64 // values
	first, last     Instant
	finest          float64 // the least uncertainty of a reading's own; 0: there is none
	samples         uint32  // the most of a reading without
}

// readAs is what a quantity's readings amount to for the choice of a method.
type readAs struct {
	instruments []instrumentUse
	direct      bool // some readings name no instrument
	bareDirect  bool // of those, some rest on the quantity's repeatability
	censored    bool
	averaged    bool
}

// traitsOf returns what a quantity declared as d asks for.
func traitsOf(d *Declaration, renewals int, r *readAs) traits {
	t := traits{
		dynamics: d.Dynamics.Form, plain: len(r.instruments) == 0, outliers: d.Outliers != (Outliers{}), log: d.Scale == ScaleLog,
		censored: r.censored, averaged: r.averaged, changes: renewals > 0 || d.StepDetection.Widen > 0,
	}
	own := 0 // instruments that learn a repeatability of their own
	rests := r.bareDirect || len(r.instruments) == 0
	for i := range r.instruments {
		u := &r.instruments[i]
		n := &u.declaration.Repeatability
		if n.Learned.Learned() {
			own++
			t.floored = t.floored || n.Learned.Floor > 0
		} else if n.StandardDeviation == 0 {
			rests = true
		}
		t.display = t.display || u.displays(d)
		m := u.declaration.MeasuringInterval
		t.further = t.further || u.declaration.at(u.first) != u.declaration.at(u.last)
		t.censored = t.censored || m.HasUpper && u.highest > m.Upper || m.HasLower && u.lowest < m.Lower
	}
	t.learned = own
	if d.Repeatability.Learned() && rests {
		t.learned++
		t.floored = t.floored || d.Repeatability.Floor > 0
	}
	t.errors = r.errors()
	if t.log && r.noisy() {
		t.errors = FurtherErrors
	}
	return t
}

// noisy tells whether an instrument states noise of its own, which is in the unit.
func (r *readAs) noisy() bool {
	for i := range r.instruments {
		if n := r.instruments[i].declaration.Repeatability; n != (InstrumentRepeatability{}) {
			return true
		}
	}
	return false
}

// displays tells whether the display is coarser than the noise, as far as that is known.
func (u *instrumentUse) displays(d *Declaration) bool {
	resolution, n := u.declaration.Resolution, &u.declaration.Repeatability
	if resolution == 0 {
		return false
	}
	if d.Scale == ScaleLog {
		return true // what it is on the logarithmic scale depends on the level
	}
	least := n.StandardDeviation
	switch {
	case n.Learned.Learned():
		least = n.Learned.Floor
	case least > 0:
	case d.Repeatability.Learned():
		least = d.Repeatability.Floor
	default:
		least = d.Repeatability.StandardDeviation
	}
	least /= math.Sqrt(float64(max(1, u.samples)))
	if u.finest > 0 {
		least = min(least, u.finest)
	}
	return resolution > least
}

const (
	// maxApart bounds the distance of readings, and from the prior, that COUNTS and GRID can
	// hold, in their smallest noise.
	maxApart = 1e7
	// maxCoarse bounds a resolution in units of the noise, as far as that is known beforehand.
	maxCoarse = 300
)

// resolved returns why readings lie too far apart for their noise, or a display is too coarse
// for it, to be held as counts or at points; "" if they don't.
func (r *readAs) resolved(d *Declaration, a *tally) string {
	least := math.Inf(1)
	if a.finest > 0 {
		least = a.finest
	}
	for i := range r.instruments {
		u := r.instruments[i].declaration
		noise := u.Repeatability.least(d)
		if noise > 0 {
			least = min(least, noise)
		}
		if noise > 0 && u.Resolution > maxCoarse*noise && d.Scale == ScaleLinear {
			return fmt.Sprintf("the resolution %v is more than %d times the repeatability %v of the instrument, as far as that is known, which no method resolves; declare a repeatability, guess or floor of at least %v", u.Resolution, maxCoarse, noise, u.Resolution/maxCoarse)
		}
	}
	if r.bareDirect {
		if noise := (&InstrumentRepeatability{}).least(d); noise > 0 {
			least = min(least, noise)
		}
	}
	low, high := a.least, a.most
	if p := d.levelPrior(); d.Scale == ScaleLinear && !p.Vague {
		least = min(least, max(least, p.SD))
		low, high = min(low, p.Mean), max(high, p.Mean)
	}
	if d.Scale == ScaleLinear && (high-low)/least > maxApart {
		return fmt.Sprintf("readings and prior from %v to %v lie more than %v times the smallest random standard uncertainty %v apart, which can't be held together with displays, censored readings or outliers; check the value", low, high, float64(maxApart), least)
	}
	return ""
}

// least returns the smallest white noise of an instrument's reading without its own, as far
// as it is known beforehand; 0 if it isn't.
func (n *InstrumentRepeatability) least(d *Declaration) float64 {
	r := &d.Repeatability
	switch {
	case n.Learned.Learned():
		r = &n.Learned
	case n.StandardDeviation > 0:
		return n.StandardDeviation
	}
	switch {
	case r.Form == RepeatabilityKnown:
		return r.StandardDeviation
	case r.Floor > 0:
		return r.Floor
	}
	return r.Guess
}

// errors returns what the readings share.
func (r *readAs) errors() Errors {
	calibrated, further := 0, false
	for i := range r.instruments {
		d := r.instruments[i].declaration
		further = further || d.Repeatability.Relative > 0 || d.Repeatability.Correlated != (Correlated{}) || d.Repeatability.BetweenOccasions > 0
		if len(d.Calibrations) > 0 {
			calibrated++
		}
		for n := range d.Calibrations {
			c := &d.Calibrations[n]
			further = further || c.Reference != "" && len(d.Calibrations) > 1 || c.DriftPer != 0 || c.RelativeBiasStandardUncertainty > 0
		}
	}
	switch {
	case further || calibrated > 0 && (len(r.instruments) > 1 || r.direct):
		return FurtherErrors
	case calibrated == 1:
		return OneBias
	}
	return NoErrors
}

// improper returns why r can't be learned under d from readings by an instrument, nil for
// none: the posterior would be improper, as readings could be explained without any
// noise. Empty if it can.
func improper(d *Declaration, by *InstrumentDeclaration) (field, sentence string) {
	r, at := &d.Repeatability, "repeatability.learned"
	if by != nil && by.Repeatability.Learned.Learned() {
		r, at = &by.Repeatability.Learned, "the instrument's repeatability.learned"
	}
	if r.Form != RepeatabilityLearnedReference || r.Floor > 0 {
		return "", ""
	}
	why := ""
	switch {
	case d.Dynamics.Form != DynamicsConstant:
		why = "the movement of the level"
	case by == nil:
	case by.Repeatability.StandardDeviation > 0:
	case by.Resolution > 0:
		why = "the display"
	case by.Repeatability.BetweenOccasions > 0, by.Repeatability.Correlated != (Correlated{}):
		why = "noise that readings share"
	default:
		for i := range by.Calibrations {
			if by.Calibrations[i].DriftPer > 0 {
				why = "the drift of a bias"
			}
		}
	}
	if why == "" {
		return "", ""
	}
	return "repeatability.learned", fmt.Sprintf("%s has neither guess and worth nor floor, but readings could be explained by %s alone, so that nothing bounds it from below; give guess and worth, or a floor", at, why)
}
