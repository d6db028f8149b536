package main

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"sync/atomic"
	"time"

	"leadline.example/engine"
)

// entry is what a client remembers of a reading it sent.
type entry struct {
	quantity engine.QuantityID
	id       engine.ReadingID
	time     engine.Instant
	value    float64
	by       engine.InstrumentID // empty: none
	occasion string
	answered bool // with APPLIED or DUPLICATE
}

// reading is the entry as the engine takes it.
func (e entry) reading() engine.Reading {
	return engine.Reading{Quantity: e.quantity, ID: e.id, HasTime: true, Time: e.time, Value: e.value, Instrument: e.by, Occasion: e.occasion}
}

// journal is one client's memory of what it sent, in the order of sending. Its
// client alone uses it while it runs.
type journal struct {
	name    string
	random  *rand.Rand
	clock   *atomic.Int64 // of the readings, shared by all clients of a run, in nanoseconds
	entries []entry
}

// next makes up n readings and remembers them before they are sent. Their
// times come from a clock that all clients share, so that arrival is nearly but
// not quite in order of time; one in fifty is late by up to a minute.
func (j *journal) next(n int) []entry {
	from := len(j.entries)
	for range n {
		item := crashPlan[j.random.IntN(len(crashPlan))]
		at := engine.Instant(j.clock.Add(int64(time.Millisecond)))
		if j.random.IntN(50) == 0 {
			at -= engine.Instant(j.random.Int64N(int64(time.Minute)))
		}
		e := entry{
			quantity: item.id,
			id:       engine.ReadingID(fmt.Sprintf("%s-%d", j.name, len(j.entries))),
			time:     at,
			value:    item.level + item.noise*j.random.NormFloat64(),
			by:       item.by,
		}
		if e.by != "" {
			e.occasion = fmt.Sprintf("round %d", at/engine.Instant(time.Second))
		}
		j.entries = append(j.entries, e)
	}
	return slices.Clone(j.entries[from:])
}

// answer notes that the entry with this ID was answered. Entries are numbered,
// so it is found at once.
func (j *journal) answer(id engine.ReadingID) error {
	var number int
	if _, err := fmt.Sscanf(string(id), j.name+"-%d", &number); err != nil || number >= len(j.entries) {
		return fmt.Errorf("answer to a reading %q that %s never sent", id, j.name)
	}
	j.entries[number].answered = true
	return nil
}

// unanswered returns the entries whose fate the client doesn't know.
func (j *journal) unanswered() []entry {
	var open []entry
	for _, e := range j.entries {
		if !e.answered {
			open = append(open, e)
		}
	}
	return open
}
