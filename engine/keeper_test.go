package engine_test

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"sync/atomic"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/decide"
	"leadline.example/engine/ledgertest"
)

var start = engine.InstantOf(time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC))

func seconds(s float64) engine.Instant { return start + engine.Instant(s*1e9) }

// rig is a keeper on a memory ledger that can be restarted.
type rig struct {
	t      *testing.T
	ledger *ledgertest.Memory
	keeper *engine.Keeper
	option engine.Options
}

func newRig(t *testing.T, o engine.Options) *rig {
	t.Helper()
	r := &rig{t: t, ledger: ledgertest.NewMemory(func() time.Time { return start.Time() }), option: o}
	r.open()
	t.Cleanup(func() { r.keeper.Close() })
	return r
}

func (r *rig) open() {
	r.t.Helper()
	r.option.Open = func() (engine.Ledger, error) {
		r.ledger = r.ledger.Reopen()
		return r.ledger, nil
	}
	k, err := engine.New(r.option)
	if err != nil {
		r.t.Fatalf("open: %v", err)
	}
	r.keeper = k
}

// restart closes the keeper, or leaves it as after a kill, and opens another
// on the same ledger.
func (r *rig) restart(clean bool) {
	r.t.Helper()
	if clean {
		if err := r.keeper.Close(); err != nil {
			r.t.Fatalf("close: %v", err)
		}
	}
	r.open()
}

func (r *rig) declare(id engine.QuantityID, d engine.Declaration) engine.Quantity {
	r.t.Helper()
	q, _, err := r.keeper.Declare(context.Background(), id, d, engine.Condition{}, start)
	if err != nil {
		r.t.Fatalf("declare %s: %v", id, err)
	}
	return q
}

func (r *rig) post(at engine.Instant, readings ...engine.Reading) []engine.Result {
	r.t.Helper()
	res, err := r.keeper.Post(context.Background(), engine.Batch{Readings: readings, Receive: at})
	if err != nil {
		r.t.Fatalf("post: %v", err)
	}
	return res
}

func (r *rig) belief(id engine.QuantityID, q engine.BeliefQuery) engine.Belief {
	r.t.Helper()
	b, err := r.keeper.Belief(context.Background(), id, q)
	if err != nil {
		r.t.Fatalf("belief of %s: %v", id, err)
	}
	return b
}

func gap() engine.Declaration {
	return engine.Declaration{
		Unit:          "mm",
		Prior:         engine.Prior{Form: engine.PriorNormal, Mean: 100, StandardDeviation: 1},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 1},
		Tolerance:     engine.Tolerance{HasLower: true, Lower: 100},
	}
}

func reading(id engine.QuantityID, at engine.Instant, value float64, name engine.ReadingID) engine.Reading {
	return engine.Reading{Quantity: id, Value: value, HasTime: true, Time: at, ID: name}
}

// Common practice, no source: prior N(100, 1), three readings of standard
// deviation 1 with mean 101 give N(100.75, 0.5^2) and P(below 100) = 0.0668.
func TestBeliefAfterThreeReadings(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("gap", gap())
	for i, y := range []float64{101, 100.5, 101.5} {
		r.post(start, reading("gap", seconds(float64(i)), y, ""))
	}
	b := r.belief("gap", engine.BeliefQuery{Now: start})
	if m, _ := b.Level.Mean(); m != 100.75 {
		t.Errorf("mean = %v, want 100.75", m)
	}
	if s, _ := b.Level.StandardDeviation(); math.Abs(s-0.5) > 1e-15 {
		t.Errorf("standard deviation = %v, want 0.5", s)
	}
	if math.Abs(b.Below-0.06680720126885807) > 1e-15 {
		t.Errorf("P(below) = %v, want 0.0668072", b.Below)
	}
	if b.Verdict != decide.Inconclusive || b.ReadingCount != 3 || b.Time != seconds(2) {
		t.Errorf("verdict %v, %d readings, time %v", b.Verdict, b.ReadingCount, b.Time)
	}
}

func TestKeeperRefusesWithReason(t *testing.T) {
	r := newRig(t, engine.Options{})
	withPrior := gap()
	withPrior.Prior.HasTime, withPrior.Prior.Time = true, start
	r.declare("gap", withPrior)
	bare := gap()
	bare.Repeatability = engine.Repeatability{}
	r.declare("bare", bare)
	r.declare("old", gap())
	if _, err := r.keeper.Retire(context.Background(), "old", engine.Condition{}, start); err != nil {
		t.Fatal(err)
	}
	r.post(start, reading("gap", start, 100, "first"))
	before := r.belief("gap", engine.BeliefQuery{Now: start})
	with := func(change func(*engine.Reading)) engine.Reading {
		x := reading("gap", start, 100, "")
		change(&x)
		return x
	}
	tests := []struct {
		name    string
		reading engine.Reading
		want    engine.Reason
	}{
		{"unknown", with(func(x *engine.Reading) { x.Quantity = "nowhere" }), engine.UnknownQuantity},
		{"retired", with(func(x *engine.Reading) { x.Quantity = "old" }), engine.QuantityRetired},
		{"instrument", with(func(x *engine.Reading) { x.Instrument = "dial" }), engine.UnknownInstrument},
		{"unit", with(func(x *engine.Reading) { x.Unit = "m" }), engine.UnitMismatch},
		{"NaN", with(func(x *engine.Reading) { x.Value = math.NaN() }), engine.ValueOutOfRange},
		{"infinite", with(func(x *engine.Reading) { x.Value = math.Inf(-1) }), engine.ValueOutOfRange},
		{"1e308", with(func(x *engine.Reading) { x.Value = 1e308 }), engine.ValueOutOfRange},
		{"square overflows", with(func(x *engine.Reading) {
			x.Value, x.HasUncertainty, x.RandomStandardUncertainty = 1e90, true, 1e-90
		}), engine.ValueOutOfRange},
		{"year 9999", with(func(x *engine.Reading) {
			x.Time = engine.InstantOf(time.Date(9999, 1, 1, 0, 0, 0, 0, time.UTC))
		}), engine.TimeOutOfRange},
		{"future", with(func(x *engine.Reading) { x.Time = seconds(301) }), engine.TimeInFuture},
		{"before prior", with(func(x *engine.Reading) { x.Time = seconds(-1) }), engine.BeforePrior},
		{"no repeatability", with(func(x *engine.Reading) { x.Quantity = "bare" }), engine.NoRepeatability},
		{"uncertainty 0", with(func(x *engine.Reading) { x.HasUncertainty = true }), engine.RandomUncertaintyInvalid},
		{"ID conflict", with(func(x *engine.Reading) { x.ID, x.Value = "first", 101 }), engine.ReadingIDConflict},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			got := r.post(start, test.reading)[0]
			if got.Status != engine.Refused || got.Reason != test.want || got.Detail == "" {
				t.Errorf("got %v %v %q, want REFUSED %v with a detail", got.Status, got.Reason, got.Detail, test.want)
			}
		})
	}
	if after := r.belief("gap", engine.BeliefQuery{Now: start}); after.Level != before.Level {
		t.Errorf("the belief moved from %+v to %+v", before.Level, after.Level)
	}
	log, _, err := r.keeper.Readings(context.Background(), engine.ReadingsQuery{Status: engine.Refused, Limit: 100})
	if err != nil || len(log) != len(tests) {
		t.Errorf("%d refusals listed (%v), want %d", len(log), err, len(tests))
	}
}

func TestKeeperKnowsDuplicates(t *testing.T) {
	for _, window := range []int{0, 1} { // 1: known only from storage
		r := newRig(t, engine.WithGeneration(engine.Options{DuplicateWindow: window, CheckpointRecords: 2}, 1))
		r.declare("gap", gap())
		r.post(start, reading("gap", start, 100, "a"))
		r.post(start, reading("gap", seconds(1), 101, "b"))
		r.post(start, reading("gap", seconds(2), 101, "c"))
		for _, again := range []bool{false, true} {
			if again {
				r.restart(true)
			}
			if got := r.post(start, reading("gap", start, 100, "a"))[0]; got.Status != engine.Duplicate {
				t.Errorf("window %d, restarted %v: repeat is %v %v, want DUPLICATE", window, again, got.Status, got.Reason)
			}
			if got := r.post(start, reading("gap", start, 99, "a"))[0]; got.Reason != engine.ReadingIDConflict {
				t.Errorf("window %d, restarted %v: other value is %v %v, want READING_ID_CONFLICT", window, again, got.Status, got.Reason)
			}
		}
		if b := r.belief("gap", engine.BeliefQuery{Now: start}); b.ReadingCount != 3 {
			t.Errorf("window %d: %d readings, want 3", window, b.ReadingCount)
		}
	}
}

func TestUntimedRepeatIsDuplicate(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("gap", gap())
	untimed := engine.Reading{Quantity: "gap", Value: 100, ID: "a"}
	first := r.post(seconds(1), untimed)[0]
	again := r.post(seconds(9), untimed)[0]
	timed := r.post(seconds(9), reading("gap", seconds(3), 100, "a"))[0]
	if first.Status != engine.Applied || again.Status != engine.Duplicate || again.Time != seconds(1) || timed.Status != engine.Duplicate {
		t.Errorf("got %+v, %+v, %+v; want APPLIED, DUPLICATE at the first time, DUPLICATE", first, again, timed)
	}
	r.post(seconds(9), reading("gap", seconds(3), 100, "b"))
	if got := r.post(seconds(9), reading("gap", seconds(4), 100, "b"))[0]; got.Reason != engine.ReadingIDConflict {
		t.Errorf("another stated time is %v %v, want READING_ID_CONFLICT", got.Status, got.Reason)
	}
}

func TestApplyRefusedPutsThroughOnce(t *testing.T) {
	r := newRig(t, engine.Options{})
	early := engine.Reading{Quantity: "gap", Value: 101}
	r.post(seconds(1), early, early)
	r.declare("gap", gap())
	for i, want := range []engine.PutThrough{{Applied: 2}, {}} {
		got, err := r.keeper.ApplyRefused(context.Background(), "gap", seconds(5))
		if err != nil || got != want {
			t.Errorf("call %d: %+v (%v), want %+v", i+1, got, err, want)
		}
	}
	b := r.belief("gap", engine.BeliefQuery{Now: start})
	if b.ReadingCount != 2 || b.LastTime != seconds(1) {
		t.Errorf("%d readings, last at %v; want 2, at their receipt %v", b.ReadingCount, b.LastTime, seconds(1))
	}
	r.restart(false)
	if log, _, _ := r.keeper.Readings(context.Background(), engine.ReadingsQuery{Status: engine.Refused, Limit: 9}); len(log) != 0 {
		t.Errorf("%d refusals left after a restart, want 0", len(log))
	}
}

func TestNothingIsPublishedWhereNothingIsKnown(t *testing.T) {
	r := newRig(t, engine.Options{})
	d := gap()
	d.Prior = engine.Prior{}
	d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
	r.declare("gap", d)
	for i := range 2 {
		b := r.belief("gap", engine.BeliefQuery{Now: start})
		if _, ok := b.Level.Mean(); ok || b.HasBreach || b.Verdict != decide.Inconclusive || len(b.Undetermined) == 0 {
			t.Errorf("after %d readings: %+v, want nothing", i, b)
		}
		r.post(start, reading("gap", start, 101, ""))
	}
	r.post(start, reading("gap", start, 103, ""))
	if b := r.belief("gap", engine.BeliefQuery{Now: start}); !b.HasBreach {
		t.Errorf("two distinct readings leave the breach undetermined: %+v", b)
	}
}

func TestConditions(t *testing.T) {
	r := newRig(t, engine.Options{})
	ctx := context.Background()
	q := r.declare("gap", gap())
	changed := gap()
	changed.Description = "coupling gap"
	tests := []struct {
		name string
		c    engine.Condition
		want engine.Reason
	}{
		{"other tag", engine.Condition{IfMatch: "7"}, engine.ETagMismatch},
		{"exists", engine.Condition{IfNoneMatch: true}, engine.AlreadyExists},
		{"same tag", engine.Condition{IfMatch: q.ETag()}, ""},
	}
	for _, test := range tests {
		_, _, err := r.keeper.Declare(ctx, "gap", changed, test.c, start)
		var refused *engine.Error
		if errors.As(err, &refused); test.want == "" && err != nil || test.want != "" && (refused == nil || refused.Reason != test.want) {
			t.Errorf("%s: got %v, want %q", test.name, err, test.want)
		}
	}
	if q, _ := r.keeper.Quantity("gap"); q.Revision != 2 || q.Declaration != changed {
		t.Errorf("got revision %d, want 2", q.Revision)
	}
	r.declare("gap", changed)
	if q, _ := r.keeper.Quantity("gap"); q.Revision != 2 {
		t.Errorf("an equal declaration made revision %d", q.Revision)
	}
}

func TestStorageFaultIsFinal(t *testing.T) {
	var told []error
	r := newRig(t, engine.Options{OnFault: func(err error) { told = append(told, err) }})
	r.declare("gap", gap())
	r.post(start, reading("gap", start, 101, "a"))
	before := r.belief("gap", engine.BeliefQuery{Now: start})
	r.ledger.SetFault(func(int, *engine.Group) error { return engine.ErrStorageFailed })
	for range 2 {
		_, err := r.keeper.Post(context.Background(), engine.Batch{Receive: start, Readings: []engine.Reading{reading("gap", start, 102, "b")}})
		if !errors.Is(err, engine.ErrStorageFailed) {
			t.Errorf("got %v, want ErrStorageFailed", err)
		}
	}
	if r.keeper.Health() == nil || len(told) != 1 {
		t.Errorf("health %v, told %d times; want an error, told once", r.keeper.Health(), len(told))
	}
	if after := r.belief("gap", engine.BeliefQuery{Now: start}); after.Level != before.Level {
		t.Error("the belief moved by a reading that is not durable")
	}
}

func TestFullDiskPasses(t *testing.T) {
	r := newRig(t, engine.Options{})
	r.declare("gap", gap())
	r.post(start, reading("gap", start, 101, "a"))
	r.ledger.SetFault(func(int, *engine.Group) error { return engine.ErrDiskFull })
	second := engine.Batch{Receive: start, Readings: []engine.Reading{reading("gap", start, 102, "b")}}
	if _, err := r.keeper.Post(context.Background(), second); !errors.Is(err, engine.ErrDiskFull) {
		t.Fatalf("got %v, want ErrDiskFull", err)
	}
	if err := r.keeper.Resume(); !errors.Is(err, engine.ErrDiskFull) {
		t.Fatalf("resume on a disk still full: %v", err)
	}
	r.ledger.SetFault(nil)
	if err := r.keeper.Resume(); err != nil {
		t.Fatalf("resume: %v", err)
	}
	res, err := r.keeper.Post(context.Background(), second)
	if err != nil || res[0].Status != engine.Applied {
		t.Errorf("after the disk has room: %+v %v, want APPLIED", res, err)
	}
	if b := r.belief("gap", engine.BeliefQuery{Now: start}); b.ReadingCount != 2 {
		t.Errorf("%d readings, want 2", b.ReadingCount)
	}
}

// countingLedger counts the passes over rows.
type countingLedger struct {
	engine.Ledger
	passes *atomic.Int64
}

func (l countingLedger) Rows(n engine.QuantityNumber, since engine.Instant, fn func([]engine.Row) error) error {
	l.passes.Add(1)
	return l.Ledger.Rows(n, since, fn)
}

// Late readings that only storage can tell from repeats cost one pass for each
// quantity of a batch.
func TestLateBatchLooksStorageUpOnce(t *testing.T) {
	r := newRig(t, engine.WithGeneration(engine.Options{DuplicateWindow: 10, CheckpointRecords: 300}, 110))
	var passes atomic.Int64
	r.keeper.Close()
	r.option.Open = func() (engine.Ledger, error) {
		r.ledger = r.ledger.Reopen()
		return countingLedger{r.ledger, &passes}, nil
	}
	k, err := engine.New(r.option)
	if err != nil {
		t.Fatal(err)
	}
	r.keeper = k
	r.declare("gap", gap())
	r.declare("winch", gap())
	var sent []engine.Reading
	for i := range 2_000 {
		id := []engine.QuantityID{"gap", "winch"}[i%2]
		sent = append(sent, reading(id, seconds(float64(i)), 100, engine.ReadingID(fmt.Sprint(i))))
	}
	for chunk := range slices.Chunk(sent, 100) {
		r.post(seconds(3000), chunk...)
	}
	passes.Store(0)
	late := slices.Clone(sent[:1000])
	for i := range 500 {
		late[2*i].ID += "-new"
	}
	applied, duplicate := 0, 0
	for _, res := range r.post(seconds(3000), late...) {
		switch res.Status {
		case engine.Applied:
			applied++
		case engine.Duplicate:
			duplicate++
		}
	}
	if applied != 500 || duplicate != 500 {
		t.Errorf("%d applied and %d duplicate, want 500 of each", applied, duplicate)
	}
	if n := passes.Load(); n > 4 { // two quantities, once more if a checkpoint ended meanwhile
		t.Errorf("%d passes over stored rows, want at most 4", n)
	}
}

// leakyLedger has lost a chunk of rows.
type leakyLedger struct{ engine.Ledger }

func (l leakyLedger) Rows(n engine.QuantityNumber, since engine.Instant, fn func([]engine.Row) error) error {
	first := true
	return l.Ledger.Rows(n, since, func(rows []engine.Row) error {
		if first {
			first = false
			return nil
		}
		return fn(rows)
	})
}

// Where the index lacks readings, a rebuild takes them from the records and
// says so; a query that needs the index fails and invents nothing.
func TestRebuildMistrustsTheIndex(t *testing.T) {
	var faults atomic.Int64
	ledger := ledgertest.NewMemory(nil)
	k, err := engine.New(engine.Options{
		Open:              func() (engine.Ledger, error) { return leakyLedger{ledger}, nil },
		CheckpointRecords: 100,
		OnFault:           func(error) { faults.Add(1) },
	})
	if err != nil {
		t.Fatal(err)
	}
	r := &rig{t: t, keeper: k}
	t.Cleanup(func() { k.Close() })
	r.declare("gap", gap())
	for i := range 1_000 {
		r.post(seconds(2e4), reading("gap", seconds(float64(10*i)), 100, ""))
	}
	if b, err := k.Belief(context.Background(), "gap", engine.BeliefQuery{HasTime: true, Time: seconds(100)}); err == nil {
		t.Errorf("a past belief from a leaky index has %d readings and no error", b.ReadingCount)
	}
	redeclared := gap()
	redeclared.Repeatability.StandardDeviation = 2
	r.declare("gap", redeclared)
	if b := r.settled("gap", engine.BeliefQuery{Now: start}); b.ReadingCount != 1_000 || faults.Load() == 0 {
		t.Errorf("%d readings after the rebuild, told of %d faults; want 1000 and at least 1", b.ReadingCount, faults.Load())
	}
}
