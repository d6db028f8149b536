package published_test

import (
	"cmp"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// The naive service: lists, everything folded anew in plain formulas when asked.

type naiveQuantity struct {
	revision                int
	retired                 bool
	vague                   bool
	mean, deviation         float64 // of the prior
	priorTime               time.Time
	repeatability           float64 // 0: learned under the reference prior
	walk                    float64 // standard deviation a minute; 0: constant
	lower, upper            float64 // tolerance
	applied                 []naiveReading
	description             string // only to make revisions
	hasTolerance, timedFrom bool
}

type naiveReading struct {
	posted
	at      time.Time
	untimed bool
}

// declaration writes what is declared, as JSON.
func (q *naiveQuantity) declaration() string {
	d := map[string]any{"unit": "mm", "description": q.description}
	prior := map[string]any{"vague": struct{}{}}
	if !q.vague {
		prior = map[string]any{"mean": q.mean, "standard_deviation": q.deviation}
	}
	if q.timedFrom {
		prior["time"] = rfc3339(q.priorTime)
	}
	d["prior"] = prior
	d["repeatability"] = map[string]any{"learned": struct{}{}}
	if q.repeatability > 0 {
		d["repeatability"] = map[string]any{"standard_deviation": q.repeatability}
	}
	if q.walk > 0 {
		d["dynamics"] = map[string]any{"random_walk": map[string]any{"standard_deviation": q.walk, "per": "60s"}}
	}
	if q.hasTolerance {
		d["tolerance"] = map[string]any{"lower": q.lower, "upper": q.upper}
	}
	text, err := json.Marshal(d)
	if err != nil {
		panic(err) // maps of numbers and strings can be written
	}
	return string(text)
}

// naiveBelief is what the plain formulas give.
type naiveBelief struct {
	count                   int
	hasMean, hasDeviation   bool
	mean, deviation         float64
	hasNormal               bool // breach probabilities are those of a normal
	below, above, predicted float64
}

func (q *naiveQuantity) belief(at time.Time) naiveBelief {
	var used []naiveReading
	for _, r := range q.applied {
		if !r.at.After(at) {
			used = append(used, r)
		}
	}
	slices.SortStableFunc(used, func(a, b naiveReading) int { return a.at.Compare(b.at) })
	b := naiveBelief{count: len(used)}
	if q.repeatability == 0 {
		return q.student(b, used)
	}
	return q.kalman(b, used, at)
}

// student: mean and s in two passes; Student's standard deviation is
// sqrt((n-1)/(n-3)) s / sqrt(n) (JCGM 101:2008, 6.4.9.4).
func (q *naiveQuantity) student(b naiveBelief, used []naiveReading) naiveBelief {
	n := float64(len(used))
	mean, squares := 0.0, 0.0
	for _, r := range used {
		mean += r.Value / n
	}
	for _, r := range used {
		squares += (r.Value - mean) * (r.Value - mean)
	}
	distinct := slices.ContainsFunc(used, func(r naiveReading) bool { return r.Value != used[0].Value })
	b.hasMean, b.hasDeviation = distinct && n > 2, distinct && n > 3
	b.mean, b.deviation = mean, math.Sqrt(squares/(n-3)/n)
	return b
}

// kalman is the textbook recursion (West and Harrison 1997, 2.2, theorem 2.1,
// from memory); without a walk it adds precisions.
func (q *naiveQuantity) kalman(b naiveBelief, used []naiveReading, at time.Time) naiveBelief {
	m, c, flat := q.mean, q.deviation*q.deviation, q.vague
	last := at
	switch {
	case q.timedFrom:
		last = q.priorTime
	case len(used) > 0:
		last = used[0].at
	}
	move := func(to time.Time) {
		c += q.walk * q.walk * to.Sub(last).Minutes()
		last = to
	}
	if q.walk > 0 && at.Before(last) {
		return b
	}
	for _, r := range used {
		move(r.at)
		u := q.repeatability
		if r.Uncertainty != nil {
			u = *r.Uncertainty
		}
		if flat {
			m, c, flat = r.Value, u*u, false
			continue
		}
		gain := c / (c + u*u)
		m, c = m+gain*(r.Value-m), gain*u*u
	}
	if flat {
		return b
	}
	if last.Before(at) {
		move(at)
	}
	b.hasMean, b.hasDeviation, b.hasNormal = true, true, true
	b.mean, b.deviation = m, math.Sqrt(c)
	b.below = math.Erfc((m-q.lower)/b.deviation/math.Sqrt2) / 2
	b.above = math.Erfc((q.upper-m)/b.deviation/math.Sqrt2) / 2
	b.predicted = math.Hypot(b.deviation, q.repeatability)
	return b
}

// compare compares as invariant 3 asks, probabilities a little wider: an error
// of 1e-9 sd in the mean makes one of up to 1e-9 z relative in a tail.
func (want naiveBelief) compare(got *leadlinev1.Belief, tolerance bool) error {
	ulp := math.Nextafter(math.Abs(want.mean), math.Inf(1)) - math.Abs(want.mean)
	slack := 1e-9*want.deviation + 2*ulp
	if !want.hasDeviation {
		slack = 1e-12 * math.Abs(want.mean)
	}
	switch {
	case int(got.GetReadingCount()) != want.count:
		return fmt.Errorf("%d readings, want %d", got.GetReadingCount(), want.count)
	case (got.Mean != nil) != want.hasMean || (got.StandardDeviation != nil) != want.hasDeviation:
		return fmt.Errorf("mean %v and standard deviation %v, want them to exist: %v, %v", got.Mean, got.StandardDeviation, want.hasMean, want.hasDeviation)
	case want.hasMean && !(math.Abs(got.GetMean()-want.mean) <= slack):
		return fmt.Errorf("mean %v, want %v", got.GetMean(), want.mean)
	case want.hasDeviation && !near(got.GetStandardDeviation(), want.deviation, 1e-9):
		return fmt.Errorf("standard deviation %v, want %v", got.GetStandardDeviation(), want.deviation)
	case !want.hasNormal:
		return nil
	case !near(got.GetPredictive().GetStandardDeviation(), want.predicted, 1e-9):
		return fmt.Errorf("predictive standard deviation %v, want %v", got.GetPredictive().GetStandardDeviation(), want.predicted)
	case tolerance && (!near(got.GetBreach().GetBelow(), want.below, 1e-6) || !near(got.GetBreach().GetAbove(), want.above, 1e-6)):
		return fmt.Errorf("breach %v, want below %v and above %v", got.GetBreach(), want.below, want.above)
	}
	return nil
}

// journey is one random sequence of requests.
type journey struct {
	*service
	rng        *rand.Rand
	quantities map[string]*naiveQuantity
	ids        []string
	sent       []posted
	names      int
}

func (j *journey) pick() string { return j.ids[j.rng.IntN(len(j.ids))] }

// bringsOwn tells whether a reading brought its own uncertainty. Beside those a
// learned repeatability has no plain formula. q may be nil.
func (q *naiveQuantity) bringsOwn() bool {
	return q != nil && slices.ContainsFunc(q.applied, func(r naiveReading) bool { return r.Uncertainty != nil })
}

func (j *journey) declareOne() {
	id := j.pick()
	j.names++
	q := &naiveQuantity{
		vague: j.rng.IntN(3) == 0, mean: 10 * j.rng.Float64(), deviation: 0.5 + j.rng.Float64(),
		repeatability: 0.1 + j.rng.Float64(), description: fmt.Sprint("as declared by request ", j.names),
		hasTolerance: j.rng.IntN(3) > 0, lower: 2, upper: 8,
	}
	old := j.quantities[id]
	switch n := j.rng.IntN(5); {
	case n == 0 && !old.bringsOwn():
		q.repeatability, q.vague = 0, true
	case n <= 2:
		q.walk = 0.05 + j.rng.Float64()
	}
	if j.rng.IntN(3) == 0 {
		q.timedFrom, q.priorTime = true, noon.Add(-time.Duration(j.rng.IntN(30))*time.Minute)
	}
	if old != nil {
		q.applied, q.revision = old.applied, old.revision
	}
	a := j.call("PUT", quantityPath(id), q.declaration())
	tooLate := slices.ContainsFunc(q.applied, func(r naiveReading) bool { return q.timedFrom && r.at.Before(q.priorTime) })
	if tooLate {
		if a.code != 400 || a.problem().field != "prior.time" {
			j.t.Fatalf("prior after a reading: status %d, %s", a.code, a.body)
		}
		return
	}
	q.revision++
	declared := new(leadlinev1.Quantity)
	a.into(declared)
	if int(declared.GetRevision()) != q.revision {
		j.t.Fatalf("%s is in revision %d, want %d", id, declared.GetRevision(), q.revision)
	}
	j.quantities[id] = q
}

func (j *journey) retireOne() {
	id := j.pick()
	a, q := j.call("DELETE", quantityPath(id), ""), j.quantities[id]
	if q == nil {
		if a.code != 404 {
			j.t.Fatalf("retire %s, which is not declared: status %d", id, a.code)
		}
		return
	}
	a.ok()
	q.retired = true
}

func (j *journey) reading() posted {
	if len(j.sent) > 0 && j.rng.IntN(5) == 0 {
		r := j.sent[j.rng.IntN(len(j.sent))]
		if j.rng.IntN(4) == 0 {
			r.Value++
		}
		return r
	}
	r := posted{Quantity: j.pick(), Value: math.Round(50*j.rng.NormFloat64())/10 + 5}
	if j.rng.IntN(4) > 0 {
		r.Time = rfc3339(j.clock.Now().Add(time.Duration(6-j.rng.IntN(120)) * 31 * time.Second))
	}
	if q := j.quantities[r.Quantity]; j.rng.IntN(5) == 0 && q != nil && q.repeatability > 0 {
		r.Uncertainty = new(0.2 + j.rng.Float64())
	}
	if j.rng.IntN(2) == 0 {
		j.names++
		r.ID = fmt.Sprint("r", j.names)
	}
	return r
}

// decide says what becomes of a reading.
func (j *journey) decide(p posted) (leadlinev1.Reading_Status, string) {
	const refused = leadlinev1.Reading_REFUSED
	now := j.clock.Now()
	r := naiveReading{posted: p, at: now, untimed: p.Time == ""}
	if !r.untimed {
		r.at = p.message().GetTime().AsTime()
	}
	q := j.quantities[p.Quantity]
	switch {
	case q == nil:
		return refused, "UNKNOWN_QUANTITY"
	case q.retired:
		return refused, "QUANTITY_RETIRED"
	case r.at.After(now.Add(5 * time.Minute)):
		return refused, "TIME_IN_FUTURE"
	case q.timedFrom && r.at.Before(q.priorTime):
		return refused, "BEFORE_PRIOR"
	}
	for _, old := range q.applied {
		if p.ID == "" || old.ID != p.ID {
			continue
		}
		if old.Value == p.Value && (old.at.Equal(r.at) || r.untimed || old.untimed) {
			return leadlinev1.Reading_DUPLICATE, ""
		}
		return refused, "READING_ID_CONFLICT"
	}
	q.applied = append(q.applied, r)
	return leadlinev1.Reading_APPLIED, ""
}

func (j *journey) postSome() {
	batch := make([]posted, 1+j.rng.IntN(1+j.rng.IntN(80)))
	for i := range batch {
		batch[i] = j.reading()
	}
	j.sent = append(j.sent, batch...)
	response := j.postHTTP(batch)
	for i, r := range response.GetResults() {
		status, reason := j.decide(batch[i])
		if r.GetStatus() != status || r.GetReason() != reason {
			j.t.Fatalf("%+v is %v, want %v %s", batch[i], r, status, reason)
		}
	}
}

// ask compares beliefs now and at a past instant.
func (j *journey) ask() {
	for id, q := range j.quantities {
		now := j.clock.Now()
		for _, at := range []time.Time{now.Add(4 * time.Minute), now.Add(-time.Duration(j.rng.IntN(4000)) * time.Second)} {
			b := j.belief(id, at)
			if err := q.belief(at).compare(b, q.hasTolerance); err != nil || int(b.GetRevision()) != q.revision {
				j.t.Fatalf("%s, declared as %s, revision %d, at %v: %v; %v", id, q.declaration(), q.revision, at, err, b)
			}
		}
	}
}

// list compares the readings that are kept with those of the model.
func (j *journey) list() {
	for id, q := range j.quantities {
		var got []*leadlinev1.RecordedReading
		for token := "first"; token != ""; {
			page := new(leadlinev1.ListReadingsResponse)
			if token == "first" {
				token = ""
			}
			j.call("GET", quantityPath(id)+"/readings?status=APPLIED&page_size=17&page_token="+token, "").into(page)
			got, token = append(got, page.GetReadings()...), page.GetNextPageToken()
		}
		want := slices.Clone(q.applied)
		slices.SortStableFunc(want, func(a, b naiveReading) int { return cmp.Compare(a.at.UnixNano(), b.at.UnixNano()) })
		if len(got) != len(want) {
			j.t.Fatalf("%s lists %d readings, want %d", id, len(got), len(want))
		}
		for i, r := range got {
			if r.GetValue() != want[i].Value || r.GetReadingId() != want[i].ID || !r.GetTime().AsTime().Equal(want[i].at) {
				j.t.Fatalf("%s lists %v at %d, want %+v", id, r, i, want[i])
			}
		}
	}
}

// A service that is declared to, posted to, retired, redeclared, asked, ended
// and killed at random, equals the naive one at every step.
func TestServiceEqualsNaiveModel(t *testing.T) {
	for _, seed := range seeds(6) {
		t.Run(fmt.Sprint("seed=", seed), func(t *testing.T) {
			j := &journey{
				service: start(t), rng: newRand(seed), quantities: map[string]*naiveQuantity{},
				ids: []string{"brine-pump-3.gap", "store/1/temperature", "dosing:residual", "winch"},
			}
			for range 50 {
				j.clock.Advance(time.Duration(j.rng.IntN(60)) * time.Second)
				switch n := j.rng.IntN(20); {
				case n < 5:
					j.declareOne()
				case n < 6:
					j.retireOne()
				case n < 7:
					j.service = j.restart()
				case n < 8:
					j.service = j.abandon()
				case n < 9:
					j.list()
				default:
					j.postSome()
				}
				j.ask()
			}
			j.list()
		})
	}
}
