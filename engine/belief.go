package engine

import (
	"context"
	"slices"
	"sort"
	"strings"
	"time"

	"leadline.example/engine/decide"
	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// BeliefQuery says what is asked of a belief.
type BeliefQuery struct {
	Now          Instant
	HasTime      bool
	Time         Instant // without HasTime: the later of Now and the last applied reading
	Coverage     float64 // in (0, 1); 0 means DefaultCoverage
	HasThreshold bool
	Threshold    float64
	Instrument   InstrumentID
}

// Check returns an *Error for the first thing wrong with q.
func (q *BeliefQuery) Check() error {
	switch {
	case q.Coverage != 0 && !(q.Coverage > 0 && q.Coverage < 1):
		return refuse(InvalidField, "coverage_probability", "coverage_probability is %v; give a number above 0 and below 1", q.Coverage)
	case q.HasThreshold && !inRange(q.Threshold):
		return refuse(InvalidField, "threshold", "threshold is %v; give 0 or a number of magnitude 1e-100 to 1e100", q.Threshold)
	case q.HasTime && !q.Time.Valid():
		return refuse(InvalidField, "time", "time lies outside 1678 to 2262; give a time within")
	}
	return nil
}

// Belief is what is held of a quantity at an instant.
type Belief struct {
	Quantity Quantity // the declaration that the belief rests on
	Time     Instant
	Level    posterior.Posterior // FormNone where nothing is known

	Coverage     float64
	Lower, Upper float64 // the coverage interval, unless Level is FormNone

	HasBreach                         bool
	Below, Above, Either, Conformance float64
	Verdict                           decide.Verdict // 0 without a tolerance

	HasThreshold     bool
	Threshold        float64
	ProbabilityBelow float64

	Predictive                                posterior.Posterior // FormNone where there is none
	PredictiveInstrument                      InstrumentID        // empty: none, zero bias
	PredictiveLower, PredictiveUpper          float64
	OutsideBelow, OutsideAbove, OutsideEither float64 // under a tolerance

	Repeatability posterior.Repeatability

	Method     Method
	Check      modelcheck.Report // of the readings up to Time
	HasTail    bool              // something had been foretold of the last reading
	Tail       float64           // two-sided tail probability of the last reading under that
	HasOutlier bool              // outliers are declared, and something had been foretold of the last reading
	Outlier    float64           // probability that the last reading was one, given it and those before

	HasRenewal                        bool // the part has been renewed since the prior
	RenewalTime                       Instant
	HasSlope                          bool    // of a linear trend
	SlopeMean, SlopeStandardDeviation float64 // by SlopePer
	SlopePer                          time.Duration
	Biases                            []BiasBelief                // of the calibrations in force, by instrument
	References                        []ReferenceBelief           // by name
	Flagged                           [len(CalibrationStates)]int // readings by instruments, by how they stand to their calibration
	Linearised                        bool                        // some readings are by an instrument with relative parts
	ResolutionAsVariance              bool                        // some are by one with a resolution, which adds resolution^2/12 to the variance

	ReadingCount int
	HasLast      bool
	LastTime     Instant
	Position     Position
	Rebuilding   bool
	Undetermined []string // the fields that do not exist, by their names in the interface
}

// Belief answers a query about one quantity, also a retired one.
func (k *Keeper) Belief(_ context.Context, id QuantityID, q BeliefQuery) (Belief, error) {
	if err := q.Check(); err != nil {
		return Belief{}, err
	}
	t, ok := k.find(id)
	if !ok {
		return Belief{}, notDeclared("quantity", id)
	}
	return k.belief(t.View(), &q)
}

// BiasBelief is what is believed of an instrument's bias under one calibration:
// what was declared, and what the quantity's readings have taught.
type BiasBelief struct {
	Instrument              InstrumentID
	ValidFrom               Instant
	Reference               string
	Mean, StandardDeviation float64
}

// ReferenceBelief is what is believed of the error that all calibrations against a
// reference share, in units of their common standard uncertainty.
type ReferenceBelief struct {
	Reference               string
	Mean, StandardDeviation float64
}

// Beliefs answers a query about the quantities in force whose IDs begin with
// prefix, in the order of their IDs, after the one given; more tells whether
// there are others.
func (k *Keeper) Beliefs(ctx context.Context, prefix string, after QuantityID, limit int, q BeliefQuery) (page []Belief, more bool, err error) {
	if err := q.Check(); err != nil {
		return nil, false, err
	}
	for _, t := range k.from(prefix, after) {
		v := t.View()
		if v.Quantity.Retired {
			continue
		}
		if len(page) == limit {
			return page, true, nil
		}
		if err := ctx.Err(); err != nil {
			return nil, false, err
		}
		b, err := k.belief(v, &q)
		if err != nil {
			return nil, false, err
		}
		page = append(page, b)
	}
	return page, false, nil
}

// BeliefOf answers a query about a view; Watch and scrape loops use it.
func (k *Keeper) BeliefOf(v *View, q BeliefQuery) (Belief, error) { return k.belief(v, &q) }

func (k *Keeper) belief(v *View, q *BeliefQuery) (Belief, error) {
	at := q.Time
	if !q.HasTime {
		if at = q.Now; v.HasLast {
			at = max(at, v.LastTime)
		}
	}
	m, err := k.moment(v, at)
	if err != nil {
		return Belief{}, err
	}
	b := Belief{
		Quantity: *v.Declared(), Time: at, Coverage: q.Coverage,
		ReadingCount: m.count, HasLast: m.count > 0, LastTime: m.lastTime,
		Position: v.Position, Rebuilding: v.Rebuilding,
	}
	if v.Rebuilding {
		b.Position = v.foldedTo
	}
	if b.Coverage == 0 {
		b.Coverage = DefaultCoverage
	}
	d := &b.Quantity.Declaration
	by, err := k.predictiveInstrument(v.basis, m, q)
	if err != nil {
		return Belief{}, err
	}
	if by != nil {
		b.PredictiveInstrument = by.ID
	}
	b.evaluateLevel(v.level(m, at), d, q)
	b.evaluatePredictive(v.predictive(m, at, by), d)
	b.Repeatability = m.repeatability(v.basis, b.Coverage)
	b.Method, b.Check = v.basis.method(), m.check.Report(&v.basis.check)
	if m.scored {
		b.Tail, b.HasTail = m.check.Tail()
	}
	b.HasOutlier, b.Outlier = d.Outliers != (Outliers{}) && m.scored, m.outlier
	b.evaluateShared(v.basis, m, at)
	if r := b.Repeatability; d.Repeatability.Learned() && !r.HasMedian {
		b.lacks("repeatability")
	}
	return b, nil
}

// predictiveInstrument returns the instrument by which the next indication is
// foretold: the one asked for, else the last one used, else nil.
func (k *Keeper) predictiveInstrument(m *model, f *fold, q *BeliefQuery) (*Instrument, error) {
	if q.Instrument == "" {
		return m.instrument(f.last), nil
	}
	t := k.directory.Load().instrument(q.Instrument)
	if t == nil || t.shown.Load() == nil {
		return nil, instrumentNotDeclared("instrument", q.Instrument)
	}
	i := t.shown.Load().instrument
	if d := m.declaration(); i.Declaration.Unit != d.Unit {
		return nil, refuse(InvalidField, "instrument", "instrument %q is in %q but the quantity is in %q; ask for an instrument in the quantity's unit", i.ID, i.Declaration.Unit, d.Unit)
	}
	if basis := m.instrument(i.Number); basis != nil {
		return basis, nil
	}
	return i, nil
}

// evaluateShared gives what is believed beside the level.
func (b *Belief) evaluateShared(m *model, f *fold, at Instant) {
	b.Flagged, b.Linearised = f.flagged, f.linearised
	renewed := sort.Search(len(m.renewals), func(i int) bool { return m.renewals[i].Time > at })
	if b.HasRenewal = renewed > 0; b.HasRenewal {
		b.RenewalTime = m.renewals[renewed-1].Time
	}
	for _, i := range m.instruments {
		b.ResolutionAsVariance = b.ResolutionAsVariance || i.Declaration.Resolution > 0 && (m.form == jointForm || m.form == bankForm)
	}
	switch m.form {
	case jointForm:
		if j := f.jointAt(m, at); j != nil {
			b.Biases, b.References = j.biases(m), j.commons()
			b.HasSlope, b.SlopeMean, b.SlopeStandardDeviation, b.SlopePer = j.slope(m)
		}
	case bankForm, gridForm:
		s := f.bank.shared(m, at)
		b.Biases, b.References = s.biases, s.references
		b.HasSlope, b.SlopeMean, b.SlopeStandardDeviation, b.SlopePer = s.hasSlope, s.slope, s.slopeSD, s.slopePer
	}
}

func (b *Belief) lacks(fields ...string) { b.Undetermined = append(b.Undetermined, fields...) }

func (b *Belief) evaluateLevel(p posterior.Posterior, d *Declaration, q *BeliefQuery) {
	b.Level = p
	f := figuresOf(p, d)
	b.Verdict = f.Verdict
	if !f.HasMean {
		b.lacks("mean")
	}
	if !f.HasStandardDeviation {
		b.lacks("standard_deviation")
	}
	if !f.HasInterval && p.Form() != posterior.FormNone {
		b.lacks("interval")
	} else if !f.HasInterval {
		b.lacks("interval")
		if d.Tolerance.Declared() {
			b.lacks("breach", "conformance_probability")
		}
		if q.HasThreshold {
			b.lacks("threshold")
		}
		return
	}
	b.Lower, b.Upper = f.Lower, f.Upper
	if b.Coverage != DefaultCoverage {
		b.Lower, b.Upper = p.Interval(b.Coverage)
	}
	b.HasBreach = f.HasBreach
	b.Below, b.Above, b.Either, b.Conformance = f.Breach.Below, f.Breach.Above, f.Breach.Either, f.Breach.Conformance
	if b.HasThreshold = q.HasThreshold; b.HasThreshold {
		b.Threshold, b.ProbabilityBelow = q.Threshold, p.LowerTail(q.Threshold)
	}
}

func (b *Belief) evaluatePredictive(p posterior.Posterior, d *Declaration) {
	b.Predictive = p
	if p.Form() == posterior.FormNone {
		b.lacks("predictive")
		return
	}
	b.PredictiveLower, b.PredictiveUpper = p.Interval(b.Coverage)
	if d.Tolerance.Declared() {
		o := breachOf(p, d.Tolerance)
		b.OutsideBelow, b.OutsideAbove, b.OutsideEither = o.Below, o.Above, o.Either
	}
}

// Tracks returns every quantity ever declared, sorted by the bytes of its ID.
// The slice must not be changed.
func (k *Keeper) Tracks() []*Track {
	if all := k.tracks.Load(); all != nil {
		return *all
	}
	return nil
}

// find returns the track of a quantity whose declaration is durable.
func (k *Keeper) find(id QuantityID) (*Track, bool) {
	t := k.directory.Load().find(id)
	return t, t != nil && t.View() != nil
}

// from returns the tracks whose IDs begin with prefix and come after an ID.
func (k *Keeper) from(prefix string, after QuantityID) []*Track {
	all := k.Tracks()
	first := sort.Search(len(all), func(i int) bool {
		return string(all[i].id) >= prefix && (after == "" || all[i].id > after)
	})
	all = all[first:]
	end := slices.IndexFunc(all, func(t *Track) bool { return !strings.HasPrefix(string(t.id), prefix) })
	if end < 0 {
		return all
	}
	return all[:end]
}

// Quantity returns a quantity as last declared, also a retired one.
func (k *Keeper) Quantity(id QuantityID) (Quantity, error) {
	t, ok := k.find(id)
	if !ok {
		return Quantity{}, notDeclared("id", id)
	}
	return *t.View().Quantity, nil
}

// Quantities lists like Beliefs.
func (k *Keeper) Quantities(prefix string, after QuantityID, limit int, showRetired bool) (page []Quantity, more bool) {
	for _, t := range k.from(prefix, after) {
		q := t.View().Quantity
		if q.Retired && !showRetired {
			continue
		}
		if len(page) == limit {
			return page, true
		}
		page = append(page, *q)
	}
	return page, false
}

// Change is the newest View.Change; while it stays, no View has changed.
func (k *Keeper) Change() uint64 { return k.published.Load() }

// Health returns nil while readings and declarations can be recorded.
func (k *Keeper) Health() error {
	if err := k.health.Load(); err != nil {
		return *err
	}
	return nil
}

// Ledger returns the ledger now open, to be read only.
func (k *Keeper) Ledger() Ledger { return *k.current.Load() }

// Outcome is a status with its reason, which is empty but for refusals.
type Outcome struct {
	Status Status
	Reason Reason
}

// Stats are numbers of the keeper as a whole.
type Stats struct {
	Position       Position // of the last record
	QueuedReadings int
	Counts         map[Outcome]uint64 // duplicates since the start of the process, the rest for ever
	// Calibration counts the readings applied since the start of the process by
	// how they stood to their instrument's calibration then.
	Calibration [len(CalibrationStates)]uint64
}

// Stats returns the present numbers.
func (k *Keeper) Stats() Stats {
	s := Stats{
		Position:       Position(k.position.Load()),
		QueuedReadings: int(max(0, k.queued.Load())),
		Counts: map[Outcome]uint64{
			{Status: Applied}:   k.applied.Load(),
			{Status: Duplicate}: k.duplicates.Load(),
		},
	}
	for i := range s.Calibration {
		s.Calibration[i] = k.calibrated[i].Load()
	}
	for i, reason := range ReadingReasons {
		s.Counts[Outcome{Refused, reason}] = k.refused[i].Load()
	}
	return s
}
