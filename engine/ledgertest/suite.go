package ledgertest

import (
	"errors"
	"fmt"
	"sync"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"leadline.example/engine"
	"leadline.example/engine/decide"
)

// Store opens one and the same store again and again, each time after the
// handle before was closed or given up. A store that can verify itself does so
// in a cleanup of t.
type Store func(t *testing.T) engine.Ledger

// Run checks every law of engine.Ledger on new stores that create makes.
func Run(t *testing.T, create func(t *testing.T) Store) {
	for _, c := range []struct {
		name string
		test func(t *testing.T, open Store)
	}{
		{"an empty ledger has nothing", testEmpty},
		{"append stamps positions and times", testStamps},
		{"replay gives back every record from any position", testReplay},
		{"records are found by position", testRecords},
		{"instruments are the latest of each number", testInstruments},
		{"a record without what it is about is refused", testUnfit},
		{"the checkpoint is the last of each quantity", testCheckpoint},
		{"rows show complete segments only", testRows},
		{"rows of an interrupted sweep are written anew", testInterrupted},
		{"an error of the reader ends the reading", testReaderError},
		{"readers run beside append", testConcurrent},
		{"a closed ledger refuses", testClosed},
	} {
		t.Run(c.name, func(t *testing.T) { c.test(t, create(t)) })
	}
}

// Records returns n records of all kinds and with every field used, numbered
// from seed so that different calls give different ones.
func Records(seed, n int) []engine.Record {
	records := make([]engine.Record, n)
	for i := range records {
		records[i] = record(seed + i)
	}
	return records
}

var noon = engine.InstantOf(time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC))

func record(i int) engine.Record {
	r := engine.Record{
		ReceiveTime: noon + engine.Instant(i/7)*1e9,
		Kind:        engine.KindReading,
		Principal:   []string{"", "ice-plant-gateway", "slipway"}[i/9%3],
		RequestID:   fmt.Sprintf("request-%d", i/7),
		Number:      engine.QuantityNumber(i%5 + 1),
		Revision:    uint32(i%3 + 1),
	}
	switch i % 11 {
	case 3:
		r.Kind, r.Quantity, r.Declaration = engine.KindDeclaration, "brine_pump.coupling_gap", declaration(i)
		return r
	case 5:
		r.Kind, r.Quantity = engine.KindRetirement, "brine_pump.coupling_gap"
		return r
	case 7:
		r.Kind, r.Number, r.Revision = engine.KindRefusal, 0, 0
		r.Reason, r.Detail = engine.UnknownQuantity, "no quantity store_room_9.temperature is declared; declare it first"
		r.Reading.Quantity = "store_room_9.temperature"
	case 9:
		r.Kind, r.Reason, r.Detail = engine.KindRefusal, engine.ReadingIDConflict, "another value has this ID"
	}
	r.Reading.Value = float64(i)*0.01 - 3
	r.Reading.HasTime = i%4 != 0
	r.Reading.Time = noon + engine.Instant(i)*1e9 - engine.Instant(i%6)*3600e9
	r.Reading.ID = engine.ReadingID(fmt.Sprintf("compressor-2/%06d", i))
	if i%13 == 0 {
		r.Reading.ID, r.Reading.Unit, r.Reading.Instrument = "", "mm", "feeler-gauge"
		r.Reading.HasUncertainty, r.Reading.RandomStandardUncertainty = true, 0.02
		r.PutThrough = engine.Position(i)
	}
	return r
}

func declaration(i int) *engine.Declaration {
	return &engine.Declaration{
		Unit: "mm", Description: fmt.Sprintf("gap of the brine pump's coupling, text %d", i),
		Prior:         engine.Prior{Form: engine.PriorInterval, Low: 0.7, High: 0.9, Probability: 0.95, HasTime: true, Time: noon},
		Repeatability: engine.Repeatability{Form: engine.RepeatabilityLearned, Guess: 0.02, Worth: 4},
		Dynamics:      engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.01, Per: 24 * time.Hour},
		Tolerance:     engine.Tolerance{HasUpper: true, Upper: 0.9},
		Rule:          decide.Rule{ConformProbability: 0.9, BreachProbability: 0.8},
	}
}

// Rows returns n rows in canonical order, the first at position from.
func Rows(from engine.Position, n int) []engine.Row {
	rows := make([]engine.Row, n)
	for i := range rows {
		p := from + engine.Position(i)
		rows[i] = engine.Row{
			Time: noon + engine.Instant(p)*60e9, Value: 8 + float64(p)*0.01,
			HasID: p%3 == 0, Position: p,
		}
		if p%5 == 0 {
			rows[i].HasUncertainty, rows[i].Uncertainty = true, 0.05
		}
	}
	return rows
}

func appendAll(t *testing.T, l engine.Ledger, groups ...*engine.Group) (written []engine.Record) {
	t.Helper()
	for _, g := range groups {
		if err := l.Append(g); err != nil {
			t.Fatal(err)
		}
		written = append(written, g.Records...)
	}
	return written
}

// Replayed returns the records from a position on.
func Replayed(t *testing.T, l engine.Ledger, from engine.Position) (records []engine.Record) {
	t.Helper()
	if err := l.Replay(from, func(r *engine.Record) error {
		records = append(records, *r)
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return records
}

func want[T any](t *testing.T, what string, want, got T) {
	t.Helper()
	if d := cmp.Diff(want, got); d != "" {
		t.Fatalf("%s (-want +got):\n%s", what, d)
	}
}

func testEmpty(t *testing.T, open Store) {
	for range 2 {
		l := open(t)
		want(t, "records", nil, Replayed(t, l, 1))
		want(t, "checkpoint", Snapshot{}, Checkpointed(t, l))
		want(t, "instruments", nil, Instruments(t, l))
		want(t, "rows", nil, AllRows(t, l, 1, engine.MinInstant))
		if err := l.Records([]engine.Position{1}, func(*engine.Record) error { return nil }); err == nil {
			t.Fatal("position 1 of an empty ledger was found")
		}
		l.Close()
	}
}

func testStamps(t *testing.T, open Store) {
	l := open(t)
	next, last := engine.Position(1), engine.Instant(0)
	for _, n := range []int{1, 3, 40} {
		g := &engine.Group{Records: Records(int(next), n)}
		appendAll(t, l, g)
		for _, r := range g.Records {
			want(t, "position", next, r.Position)
			want(t, "commit time", g.Records[0].CommitTime, r.CommitTime)
			next++
		}
		if at := g.Records[0].CommitTime; at < last || !at.Valid() {
			t.Fatalf("the commit time %v follows %v", at, last)
		}
		last = g.Records[0].CommitTime
	}
}

func testReplay(t *testing.T, open Store) {
	l := open(t)
	written := appendAll(t, l,
		&engine.Group{Records: Records(0, 1)},
		&engine.Group{Records: Records(1, 700)},
		&engine.Group{}, // a group without records is a commit like any other
		&engine.Group{Records: Records(701, 2)})
	for range 2 {
		for _, from := range []engine.Position{0, 1, 2, 3, 64, 701, 702, 703} {
			want(t, fmt.Sprintf("records from %d", from), written[max(from, 1)-1:], Replayed(t, l, from))
		}
		want(t, "records beyond the end", nil, Replayed(t, l, 704))
		l.Close()
		l = open(t)
	}
	written = append(written, appendAll(t, l, &engine.Group{Records: Records(703, 5)}, &engine.Group{Records: FurtherRecords(0, 300)},
		&engine.Group{Records: WiderRecords(0, 300)})...)
	want(t, "records", written, Replayed(t, l, 1))
}

func testRecords(t *testing.T, open Store) {
	l := open(t)
	written := appendAll(t, l, &engine.Group{Records: Records(0, 300)}, &engine.Group{Records: Records(300, 7)})
	at := []engine.Position{1, 2, 3, 307, 150, 149, 150, 150, 301, 300}
	var wanted, got []engine.Record
	for _, p := range at {
		wanted = append(wanted, written[p-1])
	}
	if err := l.Records(at, func(r *engine.Record) error { got = append(got, *r); return nil }); err != nil {
		t.Fatal(err)
	}
	want(t, "records", wanted, got)
	for _, p := range []engine.Position{0, 308} {
		if err := l.Records([]engine.Position{p}, func(*engine.Record) error { return nil }); err == nil {
			t.Fatalf("position %d was found among 307", p)
		}
	}
}

// Snapshot is what Checkpoint gives.
type Snapshot struct {
	Entries []engine.CheckpointEntry
	Sweep   engine.Sweep
}

// Checkpointed reads the checkpoint.
func Checkpointed(t *testing.T, l engine.Ledger) (s Snapshot) {
	t.Helper()
	var err error
	s.Sweep, err = l.Checkpoint(func(e engine.CheckpointEntry) error {
		s.Entries = append(s.Entries, e)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func quantity(n engine.QuantityNumber) *engine.Quantity {
	return &engine.Quantity{
		ID: engine.QuantityID(fmt.Sprintf("store_room_%d.temperature", n)), Number: n,
		Declaration: *declaration(int(n)), Revision: 3,
		CreateTime: noon, UpdateTime: noon + 1, Retired: n%2 == 0, RetireTime: engine.Instant(n) % 2,
	}
}

// wide returns a quantity whose declaration uses every field of WiderRecords.
func wide(n engine.QuantityNumber) *engine.Quantity {
	q := quantity(n)
	q.Declaration = *leaking(int(n))
	return q
}

// renewed returns a quantity with a renewal, and with one that was withdrawn.
func renewed(n engine.QuantityNumber) *engine.Quantity {
	q := quantity(n)
	q.Declaration, q.Renewals = *moving(2), []engine.Renewal{*renewal(1), *renewal(7)}
	return q
}

func testCheckpoint(t *testing.T, open Store) {
	l := open(t)
	rows := Rows(1, 19)
	appendAll(t, l,
		&engine.Group{Records: Readings(1, rows[:9]), Checkpoint: []engine.CheckpointEntry{
			{Number: 2, Quantity: quantity(2), State: []byte("old"), Through: 3},
			{Number: 1, Quantity: renewed(1)},
		}},
		&engine.Group{Records: Readings(1, rows[9:18]), Checkpoint: []engine.CheckpointEntry{
			{Number: 2, State: []byte("new"), Through: 9},
			{Number: 3, Quantity: wide(3), State: []byte{}, Through: 8},
			rowsEntry(1, 1, 0, rows[:9]),
		}, Sweep: &engine.Sweep{Segment: 1, Through: 9, Summary: []byte("nine")}},
		&engine.Group{Records: Readings(1, rows[18:]), Checkpoint: []engine.CheckpointEntry{
			{Number: 1, State: []byte("one"), Through: 18},
		}})
	wanted := Snapshot{
		Entries: []engine.CheckpointEntry{
			{Number: 1, Quantity: renewed(1), State: []byte("one"), Through: 18},
			{Number: 2, Quantity: quantity(2), State: []byte("new"), Through: 9},
			{Number: 3, Quantity: wide(3), State: []byte{}, Through: 8},
		},
		Sweep: engine.Sweep{Segment: 1, Through: 9, Summary: []byte("nine")},
	}
	for range 2 {
		want(t, "checkpoint", wanted, Checkpointed(t, l))
		l.Close()
		l = open(t)
	}
}

// AllRows reads the rows of a quantity.
func AllRows(t *testing.T, l engine.Ledger, n engine.QuantityNumber, since engine.Instant) (rows []engine.Row) {
	t.Helper()
	if err := l.Rows(n, since, func(chunk []engine.Row) error {
		rows = append(rows, chunk...)
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return rows
}

func rowsEntry(n engine.QuantityNumber, segment, chunk uint32, rows []engine.Row) engine.CheckpointEntry {
	return engine.CheckpointEntry{Number: n, Segment: segment, Chunk: chunk, Rows: rows}
}

func testRows(t *testing.T, open Store) {
	l := open(t)
	rows := ExtentRows(1, 500)
	appendAll(t, l,
		&engine.Group{Records: Readings(1, rows[:200])},
		&engine.Group{Records: Readings(3, rows[200:201])},
		&engine.Group{Records: Readings(2, rows[201:300])},
		&engine.Group{Records: Readings(3, rows[300:400])},
		&engine.Group{Records: Readings(1, rows[400:]), Checkpoint: Entries(3, 400)},
		&engine.Group{Checkpoint: []engine.CheckpointEntry{rowsEntry(1, 1, 0, rows[:128])}},
		&engine.Group{Checkpoint: []engine.CheckpointEntry{
			rowsEntry(1, 1, 1, rows[128:200]), rowsEntry(3, 1, 0, rows[200:201]),
		}})
	want(t, "rows of an incomplete segment", nil, AllRows(t, l, 1, engine.MinInstant))
	appendAll(t, l,
		&engine.Group{Sweep: &engine.Sweep{Segment: 1, Through: 201}},
		&engine.Group{Checkpoint: []engine.CheckpointEntry{
			rowsEntry(2, 2, 0, rows[201:300]), rowsEntry(3, 2, 0, rows[300:400]),
		}, Sweep: &engine.Sweep{Segment: 2, Through: 400}},
		&engine.Group{Checkpoint: []engine.CheckpointEntry{rowsEntry(1, 4, 0, rows[400:450])},
			Sweep: &engine.Sweep{Segment: 4, Through: 450}},
		&engine.Group{Checkpoint: []engine.CheckpointEntry{rowsEntry(1, 5, 0, rows[450:])}})
	one := append(append([]engine.Row{}, rows[:200]...), rows[400:450]...)
	three := append([]engine.Row{}, rows[200:201]...)
	three = append(three, rows[300:400]...)
	for range 2 {
		want(t, "rows of 1", one, AllRows(t, l, 1, engine.MinInstant))
		want(t, "rows of 2", rows[201:300], AllRows(t, l, 2, engine.MinInstant))
		want(t, "rows of 3", three, AllRows(t, l, 3, engine.MinInstant))
		want(t, "rows of 4", nil, AllRows(t, l, 4, engine.MinInstant))
		want(t, "chunks with a late row", one[128:], AllRows(t, l, 1, rows[128].Time))
		want(t, "chunks ending at since", one, AllRows(t, l, 1, rows[127].Time))
		want(t, "chunks after the last row", nil, AllRows(t, l, 1, rows[450].Time))
		l.Close()
		l = open(t)
	}
}

func testInterrupted(t *testing.T, open Store) {
	l := open(t)
	rows := Rows(1, 300)
	appendAll(t, l,
		&engine.Group{Records: Readings(1, rows[:200]), Checkpoint: Entries(2, 0)},
		&engine.Group{Records: Readings(2, rows[200:]), Checkpoint: []engine.CheckpointEntry{rowsEntry(1, 1, 0, rows[:10])},
			Sweep: &engine.Sweep{Segment: 1, Through: 10}},
		&engine.Group{Checkpoint: []engine.CheckpointEntry{
			rowsEntry(1, 2, 0, rows[10:100]), rowsEntry(1, 2, 1, rows[100:200]), rowsEntry(2, 2, 0, rows[200:]),
		}})
	l.Close()
	l = open(t)
	appendAll(t, l, &engine.Group{Checkpoint: []engine.CheckpointEntry{rowsEntry(1, 2, 0, rows[10:20])},
		Sweep: &engine.Sweep{Segment: 2, Through: 20}})
	want(t, "rows of 1", rows[:20], AllRows(t, l, 1, engine.MinInstant))
	want(t, "rows of 2", nil, AllRows(t, l, 2, engine.MinInstant))
}

func testReaderError(t *testing.T, open Store) {
	l := open(t)
	appendAll(t, l, &engine.Group{Records: append(Readings(1, Rows(1, 8)), FurtherRecords(0, 7)...), Checkpoint: append(Entries(2, 8),
		rowsEntry(1, 1, 0, Rows(1, 4)), rowsEntry(1, 1, 1, Rows(5, 4)),
	), Sweep: &engine.Sweep{Segment: 1, Through: 8}})
	stop := errors.New("enough")
	for _, c := range []struct {
		name string
		read func(fn func() error) error
	}{
		{"Replay", func(fn func() error) error { return l.Replay(1, func(*engine.Record) error { return fn() }) }},
		{"Records", func(fn func() error) error {
			return l.Records([]engine.Position{1, 2}, func(*engine.Record) error { return fn() })
		}},
		{"Rows", func(fn func() error) error {
			return l.Rows(1, engine.MinInstant, func([]engine.Row) error { return fn() })
		}},
		{"Instruments", func(fn func() error) error { return l.Instruments(func(*engine.Record) error { return fn() }) }},
		{"Checkpoint", func(fn func() error) error {
			_, err := l.Checkpoint(func(engine.CheckpointEntry) error { return fn() })
			return err
		}},
	} {
		calls := 0
		err := c.read(func() error { calls++; return stop })
		if !errors.Is(err, stop) || calls != 1 {
			t.Errorf("%s: %d calls, error %v; want 1 call and its error", c.name, calls, err)
		}
	}
}

func testConcurrent(t *testing.T, open Store) {
	l := open(t)
	appendAll(t, l, &engine.Group{Records: Readings(1, Rows(1, 20))})
	stop := make(chan struct{})
	var readers sync.WaitGroup
	for range 2 {
		readers.Go(func() { readUntil(t, l, stop) })
	}
	for i := range 30 {
		at := engine.Position(20 + 20*i)
		appendAll(t, l, &engine.Group{Records: Readings(1, Rows(at+1, 20)),
			Checkpoint: append(Entries(1, at), rowsEntry(1, uint32(i+1), 0, Rows(at-19, 20))),
			Sweep:      &engine.Sweep{Segment: uint32(i + 1), Through: at}})
	}
	close(stop)
	readers.Wait()
	want(t, "rows at the end", Rows(1, 600), AllRows(t, l, 1, engine.MinInstant))
}

// readUntil reads everything and checks that it is whole, until stopped.
func readUntil(t *testing.T, l engine.Ledger, stop chan struct{}) {
	for {
		select {
		case <-stop:
			return
		default:
		}
		next := engine.Position(1)
		err := l.Replay(1, func(r *engine.Record) error {
			if r.Position != next {
				return fmt.Errorf("position %d follows %d", r.Position, next-1)
			}
			next++
			return nil
		})
		from := engine.Position(1)
		err = errors.Join(err, l.Rows(1, engine.MinInstant, func(rows []engine.Row) error {
			if d := cmp.Diff(Rows(from, len(rows)), rows); d != "" {
				return errors.New(d)
			}
			from += engine.Position(len(rows))
			return nil
		}), l.Instruments(func(*engine.Record) error { return nil }), l.Records([]engine.Position{next - 1, 1}, func(*engine.Record) error { return nil }))
		if err != nil {
			t.Error(err)
			return
		}
	}
}

func testClosed(t *testing.T, open Store) {
	l := open(t)
	appendAll(t, l, &engine.Group{Records: Records(0, 3)})
	for range 2 {
		if err := l.Close(); err != nil {
			t.Fatal(err)
		}
	}
	if err := l.Append(&engine.Group{Records: Records(3, 1)}); err == nil {
		t.Error("a closed ledger appended")
	}
	if err := l.Replay(1, func(*engine.Record) error { return nil }); err == nil {
		t.Error("a closed ledger replayed")
	}
	if err := l.Instruments(func(*engine.Record) error { return nil }); err == nil {
		t.Error("a closed ledger gave its instruments")
	}
	if l = open(t); len(Replayed(t, l, 1)) != 3 {
		t.Error("the refused record is in the ledger")
	}
}
