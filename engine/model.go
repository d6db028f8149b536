package engine

import (
	"math"
	"slices"
	"sort"
	"time"

	"leadline.example/engine/modelcheck"
	"leadline.example/engine/posterior"
)

// form tells how a belief is held.
type form uint8

const (
	sumForm    form = iota // sums
	walkForm               // the local level filter alone
	jointForm              // level, slope and what instruments share, jointly
	bankForm               // such a joint at each node of a learned repeatability
	countsForm             // sums and counts of what was displayed
	gridForm               // a density on points, at each node of a repeatability
)

// model is what a belief is a function of beside its readings. It is
// never changed once made; Views share it.
type model struct {
	quantity    *Quantity
	instruments []*Instrument // those that the readings name, by number
	renewals    []Renewal     // in force and not before the prior's time, by time
	form        form
	check       modelcheck.Law
	prior       posterior.Prior
	slope       posterior.SlopePrior
	motion      posterior.Motion
	forced      *forced
}

// forced says of one reading whether it is an outlier.
type forced struct {
	position Position
	outlier  bool
}

func newModel(q *Quantity, instruments []*Instrument, r *readAs, check modelcheck.Law) *model {
	d := &q.Declaration
	m := &model{
		quantity: q, instruments: instruments, renewals: q.InForce(), check: check,
		prior: d.levelPrior(), slope: d.Dynamics.Slope.prior(), motion: d.motion(),
	}
	if d.Prior.HasTime {
		first := sort.Search(len(m.renewals), func(i int) bool { return m.renewals[i].Time >= d.Prior.Time })
		m.renewals = m.renewals[first:]
	}
	m.form = m.formFor(r)
	return m
}

// formFor returns how the belief is held for readings as those.
func (m *model) formFor(r *readAs) form {
	t := traitsOf(m.declaration(), len(m.renewals), r)
	switch t.method() {
	case MethodSums:
		return sumForm
	case MethodBank:
		return bankForm
	case MethodCounts:
		return countsForm
	case MethodGrid:
		return gridForm
	}
	if t.plain && len(m.renewals) == 0 && m.motion.Form == posterior.MotionWalk {
		return walkForm
	}
	return jointForm
}

// method names how the belief is held.
func (m *model) method() Method {
	return [...]Method{MethodSums, MethodFilter, MethodFilter, MethodBank, MethodCounts, MethodGrid}[m.form]
}

// checkLaw returns by what the model of a quantity is checked. Making one takes as long as
// thousands of readings, and most quantities have the same.
func (k *Keeper) checkLaw(d *Declaration) modelcheck.Law {
	s := modelcheck.Settings{
		Window: d.ModelCheck.Window, ObjectionsPerYear: d.ModelCheck.ObjectionsPerYear, FalseAlarmInterval: d.StepDetection.FalseAlarmInterval,
	}
	l, known := k.laws[s]
	if !known {
		l = modelcheck.LawOf(s)
		k.laws[s] = l
	}
	return l
}

// joint returns m for a belief that is held jointly, whatever form m has.
func (m *model) joint() *model {
	j := *m
	j.form = jointForm
	return &j
}

// from returns m for a look ahead from an instant: a prior that waits for the first
// reading holds then.
func (m *model) from(at Instant, read bool) *model {
	if read || m.declaration().Prior.HasTime || len(m.renewals) > 0 {
		return m
	}
	n, q := *m, *m.quantity
	q.Declaration.Prior.HasTime, q.Declaration.Prior.Time = true, at
	n.quantity = &q
	return &n
}

// declaration returns what is declared of the quantity.
func (m *model) declaration() *Declaration { return &m.quantity.Declaration }

// still tells whether time alone leaves the belief as it is.
func (m *model) still() bool {
	return m.motion.Form == posterior.MotionConstant && len(m.renewals) == 0
}

// same tells whether m and n give every set of readings the same belief.
func (m *model) same(n *model) bool {
	return m.form == n.form && m.declaration().SameBelief(*n.declaration()) && m.sameRenewals(n) &&
		len(m.instruments) == len(n.instruments) && m.within(n)
}

// within tells whether n differs from m at most in further instruments.
func (m *model) within(n *model) bool {
	for _, i := range m.instruments {
		if j := n.instrument(i.Number); j == nil || i != j && !i.Declaration.SameBelief(&j.Declaration) {
			return false
		}
	}
	return true
}

func (m *model) sameRenewals(n *model) bool {
	return slices.EqualFunc(m.renewals, n.renewals, func(a, b Renewal) bool { return a.same(&b) })
}

// extends tells whether the fold of any readings under m is also their fold
// under n.
func (m *model) extends(n *model) bool {
	return m.form == n.form && m.declaration().SameBelief(*n.declaration()) && m.sameRenewals(n) && m.within(n) && m.learnsAs(n)
}

// learnsAs tells whether m and n learn the same repeatability.
func (m *model) learnsAs(n *model) bool {
	a, b := m.learns(), n.learns()
	if a == nil || b == nil {
		return a == b
	}
	ofQuantity := func(m *model, r *Repeatability) bool { return r == &m.declaration().Repeatability }
	return *a == *b && ofQuantity(m, a) == ofQuantity(n, b)
}

// instrument returns the instrument with that number, nil if no reading names it.
func (m *model) instrument(n InstrumentNumber) *Instrument {
	for _, i := range m.instruments {
		if i.Number == n {
			return i
		}
	}
	return nil
}

// renewalPrior returns what level and slope start from at a renewal.
func (m *model) renewalPrior(r *Renewal) (posterior.Prior, posterior.SlopePrior) {
	slope := m.slope
	if r.HasSlope {
		slope = r.Slope.prior()
	}
	d := *m.declaration()
	d.Prior = r.Prior
	return d.levelPrior(), slope
}

// prior returns the slope's prior by the second.
func (s Slope) prior() posterior.SlopePrior {
	if s.Per == 0 {
		return posterior.SlopePrior{}
	}
	return posterior.SlopePrior{Mean: s.Mean / s.Per.Seconds(), SD: s.StandardDeviation / s.Per.Seconds()}
}

// motion returns the dynamics by the second, on the scale of the level.
func (q *Declaration) motion() posterior.Motion {
	switch d := &q.Dynamics; d.Form {
	case DynamicsRandomWalk:
		return posterior.Motion{Form: posterior.MotionWalk, Walk: perSecond(d.StandardDeviation, d.Per)}
	case DynamicsLinearTrend:
		wander := d.Wander.StandardDeviation / d.Slope.Per.Seconds()
		return posterior.Motion{
			Form: posterior.MotionTrend,
			Walk: perSecond(d.StandardDeviation, d.Per), Wander: perSecond(wander, d.Wander.Per),
		}
	case DynamicsMeanReverting:
		return posterior.Motion{
			Form: posterior.MotionReverting,
			Mean: q.Scale.of(d.Mean), Variance: d.StandardDeviation * d.StandardDeviation, Rate: math.Ln2 / d.HalfLife.Seconds(),
		}
	}
	return posterior.Motion{Form: posterior.MotionConstant}
}

// perSecond returns the variance gained in a second by what moves by a standard
// deviation s in a time per; 0 without one.
func perSecond(s float64, per time.Duration) float64 {
	if per == 0 {
		return 0
	}
	return s * s / per.Seconds()
}
