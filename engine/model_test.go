package engine_test

import (
	"cmp"
	"context"
	"errors"
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/posterior"
)

var seed = flag.Uint64("seed", 0, "seed of the random tests; 0 takes the usual ones")

// seeds returns the seeds to run with: the one given, or 1 to n.
func seeds(n uint64) []uint64 {
	if *seed != 0 {
		return []uint64{*seed}
	}
	var all []uint64
	for s := range n {
		all = append(all, s+1)
	}
	return all
}

// model is the naive service: plain lists, everything folded anew when asked.
type model struct {
	quantities map[engine.QuantityID]*modelQuantity
	refused    int
	window     int // reading IDs that count for readings with another time
	named      int // readings with an ID applied so far
}

type modelQuantity struct {
	d       engine.Declaration
	retired bool
	applied []engine.Reading
	order   []int // for each applied reading, model.named before it
}

// decide says what becomes of a reading, by the rules of the interface.
func (m *model) decide(r engine.Reading, receive engine.Instant) engine.Status {
	q := m.quantities[r.Quantity]
	untimed := !r.HasTime
	if untimed {
		r.Time = receive
	}
	switch {
	case q == nil, q != nil && q.retired,
		r.Time > receive+engine.Instant(5*time.Minute),
		q.d.Prior.HasTime && r.Time < q.d.Prior.Time,
		!r.HasUncertainty && q.d.Repeatability.Form == engine.RepeatabilityAbsent:
		m.refused++
		return engine.Refused
	}
	if old := m.earlier(q, r); old != nil {
		if old.Value == r.Value && (old.Time == r.Time || untimed || !old.HasTime) {
			return engine.Duplicate
		}
		m.refused++
		return engine.Refused
	}
	q.applied, q.order = append(q.applied, r), append(q.order, m.named)
	if r.ID != "" {
		m.named++
	}
	return engine.Applied
}

// earlier finds the reading that r's ID stands for: the one of the same time,
// or else the latest, if it is among the last IDs.
func (m *model) earlier(q *modelQuantity, r engine.Reading) (found *engine.Reading) {
	for i := range q.applied {
		switch old := &q.applied[i]; {
		case r.ID == "" || old.ID != r.ID:
		case old.Time == r.Time:
			return old
		case m.named-q.order[i] <= m.window:
			found = old
		}
	}
	return found
}

// moments folds all readings up to an instant in canonical order.
func (q *modelQuantity) posterior(at engine.Instant) (posterior.Posterior, int) {
	var used []engine.Reading
	for _, r := range q.applied {
		if r.Time <= at {
			used = append(used, r)
		}
	}
	slices.SortFunc(used, func(a, b engine.Reading) int {
		return cmp.Or(cmp.Compare(a.Time, b.Time), cmp.Compare(a.ID, b.ID), cmp.Compare(a.Value, b.Value))
	})
	if q.d.Dynamics.Form == engine.DynamicsRandomWalk {
		return q.walk(used, at), len(used)
	}
	var c posterior.Constant
	for _, r := range used {
		switch {
		case r.HasUncertainty:
			c.AddKnown(r.Value, r.RandomStandardUncertainty)
		case q.d.Repeatability.Form == engine.RepeatabilityKnown:
			c.AddKnown(r.Value, q.d.Repeatability.StandardDeviation)
		default:
			c.AddLearned(r.Value)
		}
	}
	noise := posterior.Noise{Absent: q.d.Repeatability.Form == engine.RepeatabilityAbsent}
	switch r := q.d.Repeatability; r.Form {
	case engine.RepeatabilityKnown:
		noise = posterior.Noise{Known: true, SD: r.StandardDeviation}
	case engine.RepeatabilityLearned:
		noise = posterior.Noise{Guess: r.Guess, Worth: r.Worth}
	}
	return c.Posterior(q.prior(), noise), len(used)
}

func (q *modelQuantity) prior() posterior.Prior {
	if q.d.Prior.Form == engine.PriorVague {
		return posterior.Prior{Vague: true}
	}
	return posterior.Prior{Mean: q.d.Prior.Mean, SD: q.d.Prior.StandardDeviation}
}

// walk is the textbook recursion in plain floating point (West and Harrison
// 1997, 2.2, theorem 2.1, from memory).
func (q *modelQuantity) walk(used []engine.Reading, at engine.Instant) posterior.Posterior {
	p := q.prior()
	m, c, flat := p.Mean, p.SD*p.SD, p.Vague
	move := func(from, to engine.Instant) {
		d := q.d.Dynamics
		c += d.StandardDeviation * d.StandardDeviation * float64(to-from) / float64(d.Per)
	}
	last := engine.Instant(0)
	switch {
	case q.d.Prior.HasTime:
		last = q.d.Prior.Time
	case len(used) > 0:
		last = used[0].Time
	default:
		last = at
	}
	if at < last {
		return posterior.Posterior{}
	}
	for _, r := range used {
		move(last, r.Time)
		last = r.Time
		u := q.d.Repeatability.StandardDeviation
		if r.HasUncertainty {
			u = r.RandomStandardUncertainty
		}
		if flat {
			m, c, flat = r.Value, u*u, false
			continue
		}
		a := c / (c + u*u)
		m, c = m+a*(r.Value-m), a*u*u
	}
	if flat {
		return posterior.Posterior{}
	}
	move(last, at)
	return posterior.Normal(posterior.LevelOf(m), math.Sqrt(c))
}

// sameBelief compares as design invariant 3 demands, and a hair more where the
// model itself rounds.
func sameBelief(got, want posterior.Posterior) error {
	if got.Form() != want.Form() {
		return fmt.Errorf("form %v, want %v", got.Form(), want.Form())
	}
	gm, gok := got.Mean()
	wm, wok := want.Mean()
	gs, gsok := got.StandardDeviation()
	ws, wsok := want.StandardDeviation()
	if gok != wok || gsok != wsok {
		return fmt.Errorf("mean exists %v, sd exists %v; want %v, %v", gok, gsok, wok, wsok)
	}
	ulp := math.Nextafter(math.Abs(wm), math.Inf(1)) - math.Abs(wm)
	if wok && wsok && math.Abs(gm-wm) > 1e-9*ws+2*ulp {
		return fmt.Errorf("mean %v, want %v (sd %v)", gm, wm, ws)
	}
	if wsok && math.Abs(gs-ws) > 1e-9*ws {
		return fmt.Errorf("sd %v, want %v", gs, ws)
	}
	return nil
}

// journey is one random sequence of requests against keeper and model.
type journey struct {
	*rig
	rng   *rand.Rand
	model model
	now   engine.Instant
	names int
	ids   []engine.QuantityID
	sent  []engine.Reading
}

func (j *journey) declaration() engine.Declaration {
	d := engine.Declaration{Unit: "mm"}
	if j.rng.IntN(3) > 0 {
		d.Prior = engine.Prior{Form: engine.PriorNormal, Mean: 10 * j.rng.Float64(), StandardDeviation: 0.5 + j.rng.Float64()}
	}
	if j.rng.IntN(4) == 0 {
		d.Prior.HasTime, d.Prior.Time = true, start-engine.Instant(time.Hour)*engine.Instant(j.rng.IntN(3))
	}
	switch j.rng.IntN(4) {
	case 0:
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.3, Worth: 3}
	case 1:
		if j.rng.IntN(3) == 0 {
			break // absent
		}
		fallthrough
	default:
		d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.1 + j.rng.Float64()}
	}
	if !d.Repeatability.Learned() && j.rng.IntN(2) == 0 {
		d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.2, Per: time.Minute}
	}
	return d
}

func (j *journey) declareOne() {
	id := j.ids[j.rng.IntN(len(j.ids))]
	d := j.declaration()
	_, _, err := j.keeper.Declare(context.Background(), id, d, engine.Condition{}, j.now)
	q := j.model.quantities[id]
	var refused *engine.Error
	switch {
	case err == nil && q == nil:
		j.model.quantities[id] = &modelQuantity{d: d}
	case err == nil:
		q.d, q.retired = d, false
	case !errors.As(err, &refused) || q == nil || !q.forbids(d):
		j.t.Fatalf("declare %s as %+v: %v", id, d, err)
	}
	if err == nil && q != nil && q.forbids(d) {
		j.t.Fatalf("declare %s as %+v went through", id, d)
	}
}

// forbids tells whether readings applied so far don't fit d.
func (q *modelQuantity) forbids(d engine.Declaration) bool {
	return slices.ContainsFunc(q.applied, func(r engine.Reading) bool {
		return d.Prior.HasTime && r.Time < d.Prior.Time ||
			!r.HasUncertainty && d.Repeatability.Form == engine.RepeatabilityAbsent
	})
}

func (j *journey) reading() engine.Reading {
	if len(j.sent) > 0 && j.rng.IntN(6) == 0 {
		r := j.sent[j.rng.IntN(len(j.sent))]
		if j.rng.IntN(4) == 0 {
			r.Value++
		}
		return r
	}
	r := engine.Reading{
		Quantity: j.ids[j.rng.IntN(len(j.ids))],
		Value:    math.Round(50*j.rng.NormFloat64()) / 10,
	}
	if j.rng.IntN(5) > 0 {
		r.HasTime, r.Time = true, j.now-engine.Instant(j.rng.IntN(40))*engine.Instant(30*time.Second)
	}
	if j.rng.IntN(5) == 0 {
		r.HasUncertainty, r.RandomStandardUncertainty = true, 0.2+j.rng.Float64()
	}
	if j.rng.IntN(2) == 0 {
		j.names++
		r.ID = engine.ReadingID(fmt.Sprint("r", j.rng.IntN(j.names+3)))
	}
	return r
}

func (j *journey) postSome() {
	readings := make([]engine.Reading, 1+j.rng.IntN(120))
	for i := range readings {
		readings[i] = j.reading()
	}
	j.sent = append(j.sent, readings...)
	var want []engine.Status
	for _, r := range readings {
		want = append(want, j.model.decide(r, j.now))
	}
	for i, got := range j.post(j.now, slices.Clone(readings)...) {
		if got.Status != want[i] {
			j.t.Fatalf("reading %+v is %v %v (%s), want %v", readings[i], got.Status, got.Reason, got.Detail, want[i])
		}
	}
}

// ask compares every belief, now and at a past instant.
func (j *journey) ask() {
	for id, q := range j.model.quantities {
		past := j.now - engine.Instant(j.rng.IntN(1300))*engine.Instant(time.Second)
		for _, at := range []engine.Instant{j.now, past} {
			b := j.settled(id, engine.BeliefQuery{HasTime: true, Time: at})
			want, n := q.posterior(at)
			if err := sameBelief(b.Level, want); err != nil || b.ReadingCount != n {
				j.t.Fatalf("%s %+v at %v: %v; %d readings, want %d", id, q.d, at, err, b.ReadingCount, n)
			}
		}
	}
}

// settled waits for a rebuild to end.
func (r *rig) settled(id engine.QuantityID, q engine.BeliefQuery) engine.Belief {
	for range 10_000_000 {
		if b := r.belief(id, q); !b.Rebuilding {
			return b
		}
	}
	r.t.Fatalf("%s is still being rebuilt", id)
	return engine.Belief{}
}

// count compares the counts, which outlive restarts.
func (j *journey) count() {
	applied, refused := 0, uint64(0)
	for _, q := range j.model.quantities {
		applied += len(q.applied)
	}
	counts := j.keeper.Stats().Counts
	for outcome, n := range counts {
		if outcome.Status == engine.Refused {
			refused += n
		}
	}
	if got := counts[engine.Outcome{Status: engine.Applied}]; got != uint64(applied) || refused != uint64(j.model.refused) {
		j.t.Fatalf("%d readings counted as applied and %d as refused, want %d and %d", got, refused, applied, j.model.refused)
	}
}

// list compares the stored readings with the model's.
func (j *journey) list() {
	for id, q := range j.model.quantities {
		var got []engine.StoredReading
		query := engine.ReadingsQuery{Quantity: id, Status: engine.Applied, Limit: 7}
		for more := true; more; {
			page, m, err := j.keeper.Readings(context.Background(), query)
			if err != nil {
				j.t.Fatal(err)
			}
			if got, more = append(got, page...), m; len(page) > 0 {
				last := page[len(page)-1]
				query.HasAfter, query.After = true, engine.ReadingCursor{Time: last.Time, Position: last.Position}
			}
		}
		want := slices.Clone(q.applied)
		slices.SortStableFunc(want, func(a, b engine.Reading) int { return cmp.Compare(a.Time, b.Time) })
		if len(got) != len(want) {
			j.t.Fatalf("%s lists %d readings, want %d", id, len(got), len(want))
		}
		for i := range got {
			if got[i].Reading != want[i] {
				j.t.Fatalf("%s lists %+v at %d, want %+v", id, got[i].Reading, i, want[i])
			}
		}
	}
}

// A service that is asked, fed late and repeated readings, redeclared, killed
// and restarted at random equals the naive one at every step.
func TestKeeperEqualsNaiveModel(t *testing.T) {
	journeys := uint64(30)
	if testing.Short() {
		journeys = 12
	}
	for _, s := range seeds(journeys) {
		t.Run(fmt.Sprint("seed=", s), func(t *testing.T) {
			rng := rand.New(rand.NewPCG(s, 0))
			j := &journey{
				rng:   rng,
				model: model{quantities: map[engine.QuantityID]*modelQuantity{}, window: 1_000_000},
				now:   start,
				ids:   []engine.QuantityID{"brine-pump-3.gap", "store/1/temperature", "dosing:residual", "winch"},
			}
			o := engine.Options{CheckpointRecords: 1 + rng.IntN(200)}
			if s%2 == 0 {
				o.DuplicateWindow = 1 + rng.IntN(300)
				j.model.window = o.DuplicateWindow
				o = engine.WithGeneration(o, 130) // a batch has less
			}
			j.rig = newRig(t, o)
			if s%3 == 0 { // so many that a checkpoint is spread over several groups
				for i := range 60 {
					j.ids = append(j.ids, engine.QuantityID(fmt.Sprint("store/", i+2)))
				}
				for range 60 {
					j.declareOne()
				}
			}
			for range 60 {
				j.now += engine.Instant(j.rng.IntN(60)) * engine.Instant(time.Second)
				switch n := j.rng.IntN(20); {
				case n < 4:
					j.declareOne()
				case n < 5:
					j.retireOne()
				case n < 7:
					j.restart(n == 5)
				case n < 8:
					j.list()
				default:
					j.postSome()
				}
				j.ask()
				j.count()
			}
			j.list()
		})
	}
}

func (j *journey) retireOne() {
	id := j.ids[j.rng.IntN(len(j.ids))]
	_, err := j.keeper.Retire(context.Background(), id, engine.Condition{}, j.now)
	q := j.model.quantities[id]
	if (err == nil) != (q != nil) {
		j.t.Fatalf("retire %s: %v", id, err)
	}
	if q != nil {
		q.retired = true
	}
}
