package engine

import (
	"cmp"
	"context"
	"slices"

	"leadline.example/engine/posterior"
)

// BudgetSource is a cause of uncertainty, independent of all others.
type BudgetSource uint8

const (
	PriorSource        BudgetSource = iota // what was known of the level before any reading
	SlopePriorSource                       // likewise of the slope
	Bias                                   // a calibration's own part of its bias
	CommonReference                        // what calibrations against one reference share
	Gain                                   // an instrument's relative bias
	RepeatabilityNoise                     // white noise of readings, with display
	CorrelatedNoise                        // an instrument's correlated noise
	Occasion                               // what readings of one occasion share
	ProcessNoise                           // the movement of the level
	SlopeWander                            // the movement of the slope
	Drift                                  // the movement of a bias since its calibration
)

// BudgetSources lists every BudgetSource.
var BudgetSources = [...]BudgetSource{
	PriorSource, SlopePriorSource, Bias, CommonReference, Gain, RepeatabilityNoise, CorrelatedNoise, Occasion,
	ProcessNoise, SlopeWander, Drift,
}

// String returns the word of the interface.
func (s BudgetSource) String() string {
	return [...]string{
		"PRIOR", "SLOPE_PRIOR", "BIAS", "REFERENCE", "GAIN", "REPEATABILITY", "CORRELATED_NOISE", "OCCASION",
		"PROCESS", "SLOPE_WANDER", "DRIFT",
	}[s]
}

// BudgetPart is what one source contributes to the variance of the level.
type BudgetPart struct {
	Source     BudgetSource
	Instrument InstrumentID // of those that belong to one
	Reference  string       // of CommonReference
	Variance   float64
}

// BudgetQuery says of which belief the budget is asked.
type BudgetQuery struct {
	Now     Instant
	HasTime bool
	Time    Instant // without HasTime as in BeliefQuery
}

// Budget is the variance of a belief, split over independent sources: its parts
// sum to Variance (GUM 5.1.2: what each input contributes to the combined variance).
type Budget struct {
	Quantity     Quantity
	Time         Instant
	Variance     float64
	Parts        []BudgetPart // by Source, Instrument and Reference
	Position     Position
	Rebuilding   bool
	Undetermined []string // variance and parts, where nothing is known yet
}

// smallHistory is how many readings a budget may fold without waiting for others.
const smallHistory = 2_000

// Budget splits the variance of the level. It folds the quantity's readings
// anew, in the caller's goroutine. A quantity whose belief isn't jointly normal has
// none.
func (k *Keeper) Budget(ctx context.Context, id QuantityID, q BudgetQuery) (Budget, error) {
	check := BeliefQuery{HasTime: q.HasTime, Time: q.Time}
	if err := check.Check(); err != nil {
		return Budget{}, err
	}
	t, ok := k.find(id)
	if !ok {
		return Budget{}, notDeclared("quantity", id)
	}
	v := t.View()
	m := v.basis.joint()
	if held := v.basis.form; held >= bankForm || held == sumForm && m.declaration().Repeatability.Learned() || m.declaration().StepDetection.Widen > 0 || m.declaration().Scale == ScaleLog {
		return Budget{}, refuse(NotSupported, "quantity", "quantity %q learns a repeatability, has outliers, censored readings or a display coarser than its repeatability, is widened by steps, or is on a logarithmic scale, for which a budget is not supported; declare repeatability.standard_deviation and none of these", id)
	}
	at := q.Time
	if !q.HasTime {
		if at = q.Now; v.HasLast {
			at = max(at, v.LastTime)
		}
	}
	b := Budget{Quantity: *v.Declared(), Time: at, Position: v.Position, Rebuilding: v.Rebuilding}
	if v.Rebuilding {
		b.Position = v.foldedTo
	}
	if v.applied > smallHistory { // it takes a core for seconds: one at a time
		select {
		case k.budgeting <- struct{}{}:
			defer func() { <-k.budgeting }()
		case <-ctx.Done():
			return Budget{}, ctx.Err()
		}
	}
	j, err := k.accounted(ctx, v, m, at)
	if err != nil {
		return Budget{}, err
	}
	if j == nil || j.filter.Vague() {
		b.Undetermined = []string{"variance", "standard_deviation", "parts"}
		return b, nil
	}
	b.Variance = j.filter.Variance(0)
	b.Parts = j.parts(m)
	return b, nil
}

// accounted folds the readings up to an instant, with account of where the
// uncertainty comes from; nil before a stated prior time.
func (k *Keeper) accounted(ctx context.Context, v *View, m *model, at Instant) (*joint, error) {
	all, err := v.entries(k.Ledger())
	if err != nil {
		return nil, err
	}
	l, first := lawOf(m), at
	if len(all) > 0 {
		first = min(first, all[0].Time)
	}
	j := startJoint(m, first)
	if at < j.at {
		return nil, nil
	}
	j.filter.Account()
	for i := range all {
		if all[i].Time > at {
			break
		}
		if i%64 == 0 && ctx.Err() != nil {
			return nil, ctx.Err()
		}
		j.add(m, &all[i].Row, l.value(&all[i].Row))
	}
	j.move(m, at)
	return j, nil
}

// parts sums the contributions to the level by their sources.
func (j *joint) parts(m *model) []BudgetPart {
	var all []BudgetPart
	for _, p := range j.filter.Parts() {
		part := BudgetPart{Variance: p.Variance}
		number := InstrumentNumber(0)
		switch p.Source {
		case posterior.SourcePrior:
			part.Source = PriorSource
		case posterior.SourceSlopePrior:
			part.Source = SlopePriorSource
		case posterior.SourceWalk:
			part.Source = ProcessNoise
		case posterior.SourceWander:
			part.Source = SlopeWander
		case posterior.SourceWhite:
			part.Source, number = RepeatabilityNoise, InstrumentNumber(p.Label)
		default:
			s := j.states[p.State]
			part.Source, number, part.Reference = s.kind, s.instrument, s.reference
			if p.Source == posterior.SourceProcess && s.kind == Bias {
				part.Source = Drift
			}
		}
		if i := m.instrument(number); i != nil {
			part.Instrument = i.ID
		}
		all = append(all, part)
	}
	slices.SortFunc(all, BudgetPart.compare)
	return merged(all)
}

func (p BudgetPart) compare(q BudgetPart) int {
	return cmp.Or(cmp.Compare(p.Source, q.Source), cmp.Compare(p.Instrument, q.Instrument), cmp.Compare(p.Reference, q.Reference))
}

// merged adds up neighbours of one source and drops what contributes nothing.
func merged(parts []BudgetPart) []BudgetPart {
	var all []BudgetPart
	for _, p := range parts {
		if n := len(all); n > 0 && all[n-1].compare(p) == 0 {
			all[n-1].Variance += p.Variance
		} else {
			all = append(all, p)
		}
	}
	return slices.DeleteFunc(all, func(p BudgetPart) bool { return p.Variance == 0 })
}
