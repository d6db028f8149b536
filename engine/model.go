package engine

import (
	"math"
	"slices"
	"sort"
	"time"

	"leadline.example/engine/posterior"
)

// form tells how a belief is held.
type form uint8

const (
	sumForm   form = iota // sums, which no order can change
	walkForm              // the local level filter alone
	jointForm             // level, slope and what instruments share, jointly
)

// model is what a belief is a function of beside its readings. It is
// never changed once made; Views share it.
type model struct {
	quantity    *Quantity
	instruments []*Instrument // those that the readings name, by number
	renewals    []Renewal     // in force and not before the prior's time, by time
	form        form
	prior       posterior.Prior
	slope       posterior.SlopePrior
	motion      posterior.Motion
}

func newModel(q *Quantity, instruments []*Instrument) *model {
	d := &q.Declaration
	m := &model{
		quantity: q, instruments: instruments, renewals: q.InForce(),
		prior: d.levelPrior(), slope: d.Dynamics.Slope.prior(), motion: d.Dynamics.motion(),
	}
	if d.Prior.HasTime {
		first := sort.Search(len(m.renewals), func(i int) bool { return m.renewals[i].Time >= d.Prior.Time })
		m.renewals = m.renewals[first:]
	}
	switch plain := len(instruments) == 0 && len(m.renewals) == 0; {
	case plain && d.Dynamics.Form == DynamicsConstant:
		m.form = sumForm
	case plain && d.Dynamics.Form == DynamicsRandomWalk:
		m.form = walkForm
	default:
		m.form = jointForm
	}
	return m
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

// ordered tells whether a fold depends on the order of its readings; where it
// doesn't, readings are added as they arrive.
func (m *model) ordered() bool { return m.form != sumForm }

// still tells whether time alone leaves the belief as it is.
func (m *model) still() bool {
	return m.motion.Form == posterior.MotionConstant && len(m.renewals) == 0
}

// same tells whether m and n give every set of readings the same belief.
func (m *model) same(n *model) bool {
	return m.declaration().SameBelief(*n.declaration()) && m.sameRenewals(n) &&
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
	return m.form == n.form && m.declaration().SameBelief(*n.declaration()) && m.sameRenewals(n) && m.within(n)
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

// motion returns the dynamics by the second.
func (d *Dynamics) motion() posterior.Motion {
	switch d.Form {
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
			Mean: d.Mean, Variance: d.StandardDeviation * d.StandardDeviation, Rate: math.Ln2 / d.HalfLife.Seconds(),
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
