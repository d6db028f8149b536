// Package ledgertest has what tests of a ledger's users and makers share: a
// ledger in memory and the suite of laws that every engine.Ledger keeps.
package ledgertest

import (
	"errors"
	"fmt"
	"maps"
	"slices"
	"sync"
	"time"

	"leadline.example/engine"
)

// ErrClosed is what a closed Memory answers.
var ErrClosed = errors.New("the ledger is closed")

// Fault decides what becomes of an Append before any of it is written: n counts
// the Appends of the store from 1; an error refuses the group, wrapped, and
// closes the handle to further Appends. It may also block.
type Fault func(n int, g *engine.Group) error

// FailAt returns a Fault that gives err at the nth Append and never again, so
// that a reopened ledger works.
func FailAt(n int, err error) Fault {
	return func(i int, _ *engine.Group) error {
		if i == n {
			return err
		}
		return nil
	}
}

// Memory is an engine.Ledger in memory: a handle to a store that Reopen gives
// out again, as a file is opened again after a crash or a full disk.
type Memory struct {
	store *store

	mu     sync.Mutex // guards failed and closed
	failed error
	closed bool
}

var _ engine.Ledger = (*Memory)(nil)

// NewMemory returns an empty ledger. Without a clock, the first group commits
// at 2026-01-01T00:00:01Z and each further one a second later.
func NewMemory(now func() time.Time) *Memory {
	s := &store{
		now: now, states: map[engine.QuantityNumber]engine.CheckpointEntry{},
		instruments: map[engine.InstrumentNumber]engine.Position{},
	}
	if now == nil {
		start := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)
		s.now = func() time.Time { return start.Add(time.Duration(s.appends) * time.Second) }
	}
	return &Memory{store: s}
}

// SetFault installs f for all Appends to come, on this handle and reopened
// ones; nil removes it.
func (m *Memory) SetFault(f Fault) {
	m.store.mu.Lock()
	defer m.store.mu.Unlock()
	m.store.fault = f
}

// Reopen closes m as a crash would and returns a new handle to what is durable.
// Rows of a segment without its sweep are gone.
func (m *Memory) Reopen() *Memory {
	m.Close()
	m.store.mu.Lock()
	defer m.store.mu.Unlock()
	m.store.chunks = slices.DeleteFunc(m.store.chunks, func(c chunk) bool { return !m.store.complete(c) })
	return &Memory{store: m.store}
}

// Append implements engine.Ledger.
func (m *Memory) Append(g *engine.Group) error {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.closed {
		return ErrClosed
	}
	if m.failed != nil {
		return fmt.Errorf("an earlier append failed: %w", m.failed)
	}
	m.failed = m.store.append(g)
	return m.failed
}

// Replay implements engine.Ledger.
func (m *Memory) Replay(from engine.Position, fn func(*engine.Record) error) error {
	if err := m.open(); err != nil {
		return err
	}
	for _, r := range m.store.since(from) {
		if err := fn(&r); err != nil {
			return err
		}
	}
	return nil
}

// Records implements engine.Ledger.
func (m *Memory) Records(at []engine.Position, fn func(*engine.Record) error) error {
	if err := m.open(); err != nil {
		return err
	}
	records := m.store.since(1)
	for _, p := range at {
		if p == 0 || p > engine.Position(len(records)) {
			return fmt.Errorf("the ledger has no position %d; its last is %d", p, len(records))
		}
		r := records[p-1]
		if err := fn(&r); err != nil {
			return err
		}
	}
	return nil
}

// Rows implements engine.Ledger.
func (m *Memory) Rows(number engine.QuantityNumber, since engine.Instant, fn func([]engine.Row) error) error {
	if err := m.open(); err != nil {
		return err
	}
	for _, c := range m.store.chunksOf(number, since) {
		if err := fn(slices.Clone(c.rows)); err != nil {
			return err
		}
	}
	return nil
}

// Checkpoint implements engine.Ledger.
func (m *Memory) Checkpoint(fn func(engine.CheckpointEntry) error) (engine.Sweep, error) {
	if err := m.open(); err != nil {
		return engine.Sweep{}, err
	}
	sweep, entries := m.store.checkpoint()
	for _, e := range entries {
		if err := fn(e); err != nil {
			return engine.Sweep{}, err
		}
	}
	return sweep, nil
}

// Instruments implements engine.Ledger.
func (m *Memory) Instruments(fn func(*engine.Record) error) error {
	return m.Records(m.store.latest(), fn)
}

// Close implements engine.Ledger; what is appended stays for Reopen.
func (m *Memory) Close() error {
	m.mu.Lock()
	defer m.mu.Unlock()
	m.closed = true
	return nil
}

func (m *Memory) open() error {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.closed {
		return ErrClosed
	}
	return nil
}

// chunk is the rows of one CheckpointEntry with their key.
type chunk struct {
	segment uint32
	number  engine.QuantityNumber
	part    uint32
	rows    []engine.Row
}

// store is what outlives a handle.
type store struct {
	now func() time.Time

	mu      sync.RWMutex // guards all below
	fault   Fault
	appends int
	records []engine.Record // appended to only: readers may keep a prefix
	states  map[engine.QuantityNumber]engine.CheckpointEntry
	chunks  []chunk // in the order of their keys
	sweep   *engine.Sweep
	// instruments has the position of the latest record of each.
	instruments map[engine.InstrumentNumber]engine.Position
}

func (s *store) append(g *engine.Group) error {
	s.mu.RLock()
	fault, n := s.fault, s.appends+1
	s.mu.RUnlock()
	var err error
	if fault != nil {
		err = fault(n, g) // outside the lock: it may block while readers go on
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	s.appends = n
	for i := range g.Records {
		err = errors.Join(err, fit(&g.Records[i]))
	}
	if err != nil {
		return fmt.Errorf("append group %d: %w", n, err)
	}
	s.stamp(g.Records)
	s.records = append(s.records, g.Records...)
	for _, e := range g.Checkpoint {
		s.keep(e)
	}
	if g.Sweep != nil {
		w := *g.Sweep
		w.Summary = slices.Clone(w.Summary)
		s.sweep = &w
	}
	return nil
}

// fit tells whether a record is of a known kind, or a reading of a known extent, and
// has what it is about.
func fit(r *engine.Record) error {
	useful := engine.KindReading <= r.Kind && r.Kind <= engine.KindStep && r.Reading.Extent <= engine.ExtentBetween
	switch r.Kind {
	case engine.KindInstrument:
		useful = r.Instrument != nil && r.Instrument.Number != 0
	case engine.KindRenewal:
		useful = r.Renewal != nil
	case engine.KindStep:
		useful = r.Step != nil
	}
	if !useful {
		return fmt.Errorf("a record of kind %d is of no use", r.Kind)
	}
	return nil
}

func (s *store) stamp(records []engine.Record) {
	at := engine.InstantOf(s.now())
	if n := len(s.records); n > 0 {
		at = max(at, s.records[n-1].CommitTime)
	}
	for i := range records {
		records[i].Position = engine.Position(len(s.records) + i + 1)
		records[i].CommitTime = at
		if r := &records[i]; r.Kind == engine.KindInstrument {
			s.instruments[r.Instrument.Number] = r.Position
		}
	}
}

// latest returns the position of the latest record of each instrument, by number.
func (s *store) latest() []engine.Position {
	s.mu.RLock()
	defer s.mu.RUnlock()
	at := make([]engine.Position, 0, len(s.instruments))
	for _, n := range slices.Sorted(maps.Keys(s.instruments)) {
		at = append(at, s.instruments[n])
	}
	return at
}

func (s *store) keep(e engine.CheckpointEntry) {
	kept, ok := s.states[e.Number]
	kept.Number = e.Number
	if e.Quantity != nil {
		q := *e.Quantity
		kept.Quantity = &q
	}
	if e.State != nil {
		kept.State, kept.Through = slices.Clone(e.State), e.Through
	}
	if ok || e.Quantity != nil || e.State != nil {
		s.states[e.Number] = kept
	}
	if len(e.Rows) > 0 {
		s.put(chunk{e.Segment, e.Number, e.Chunk, slices.Clone(e.Rows)})
	}
}

func (s *store) put(c chunk) {
	i, found := slices.BinarySearchFunc(s.chunks, c, compareChunks)
	if found {
		s.chunks[i] = c
		return
	}
	s.chunks = slices.Insert(s.chunks, i, c)
}

func compareChunks(a, b chunk) int {
	for _, pair := range [...][2]uint32{{a.segment, b.segment}, {uint32(a.number), uint32(b.number)}, {a.part, b.part}} {
		if pair[0] != pair[1] {
			return int(int64(pair[0]) - int64(pair[1]))
		}
	}
	return 0
}

// complete tells whether the sweep of the chunk's segment is written.
func (s *store) complete(c chunk) bool { return s.sweep != nil && c.segment <= s.sweep.Segment }

func (s *store) since(from engine.Position) []engine.Record {
	s.mu.RLock()
	defer s.mu.RUnlock()
	from = max(from, 1)
	if from > engine.Position(len(s.records)) {
		return nil
	}
	return s.records[from-1:]
}

func (s *store) chunksOf(number engine.QuantityNumber, since engine.Instant) []chunk {
	s.mu.RLock()
	defer s.mu.RUnlock()
	var found []chunk
	for _, c := range s.chunks {
		late := func(r engine.Row) bool { return r.Time >= since }
		if c.number == number && s.complete(c) && slices.ContainsFunc(c.rows, late) {
			found = append(found, c)
		}
	}
	return found
}

func (s *store) checkpoint() (engine.Sweep, []engine.CheckpointEntry) {
	s.mu.RLock()
	defer s.mu.RUnlock()
	var sweep engine.Sweep
	if s.sweep != nil {
		sweep = *s.sweep
		sweep.Summary = slices.Clone(sweep.Summary)
	}
	var entries []engine.CheckpointEntry
	for _, n := range slices.Sorted(maps.Keys(s.states)) {
		e := s.states[n]
		e.State = slices.Clone(e.State)
		if e.Quantity != nil {
			q := *e.Quantity
			e.Quantity = &q
		}
		entries = append(entries, e)
	}
	return sweep, entries
}
