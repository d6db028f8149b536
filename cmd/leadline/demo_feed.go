package main

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"time"

	"leadline.example/engine"
)

// The past that the demo starts with: a reading of each quantity every
// pastStep for pastLength, so that there is something to see at once.
const (
	pastLength = 10 * time.Minute
	pastStep   = 10 * time.Second
)

// declarer and poster are what the feed needs of the keeper.
type declarer interface {
	DeclareInstrument(ctx context.Context, id engine.InstrumentID, d engine.InstrumentDeclaration, c engine.Condition, receive engine.Instant) (engine.InstrumentView, bool, error)
	Declare(ctx context.Context, id engine.QuantityID, d engine.Declaration, c engine.Condition, receive engine.Instant) (engine.Quantity, bool, error)
}

type poster interface {
	Post(ctx context.Context, b engine.Batch) ([]engine.Result, error)
}

// feed makes up the readings of a plant: the same for the same seed, but for
// the instants, which are the clock's.
type feed struct {
	items  []plantItem
	random *rand.Rand
	start  time.Time
	count  int // of readings made up, for their IDs
	second int // of live ticks

	instruments []plantInstrument
	turns       map[engine.QuantityID]int
}

func newFeed(items []plantItem, seed uint64, start time.Time) *feed {
	return &feed{items: items, random: rand.New(rand.NewPCG(seed, 0)), start: start, instruments: plantInstruments(start), turns: map[engine.QuantityID]int{}}
}

// declare declares every instrument and quantity of the plant.
func (f *feed) declare(ctx context.Context, k declarer) error {
	for _, i := range f.instruments {
		_, _, err := k.DeclareInstrument(ctx, i.id, i.declaration, engine.Condition{}, engine.InstantOf(f.start))
		if err != nil {
			return fmt.Errorf("declare %s: %w", i.id, err)
		}
	}
	for _, item := range f.items {
		_, _, err := k.Declare(ctx, item.id, item.declaration, engine.Condition{}, engine.InstantOf(f.start))
		if err != nil {
			return fmt.Errorf("declare %s: %w", item.id, err)
		}
	}
	return nil
}

// postPast posts the readings of the minutes before the start.
func (f *feed) postPast(ctx context.Context, k poster) error {
	var readings []engine.Reading
	for ago := pastLength; ago > 0; ago -= pastStep {
		at := f.start.Add(-ago)
		for _, item := range f.items {
			if int(ago/pastStep)%item.pastEvery() == 0 {
				readings = append(readings, f.reading(item, at))
			}
		}
	}
	return f.post(ctx, k, readings, f.start)
}

// postNow posts the readings that are due at the next second.
func (f *feed) postNow(ctx context.Context, k poster, now time.Time) error {
	f.second++
	var readings []engine.Reading
	for _, item := range f.items {
		silent := item.silentAfter > 0 && f.second > item.silentAfter
		if f.second%item.every == 0 && !silent {
			readings = append(readings, f.reading(item, now))
		}
	}
	if len(readings) == 0 {
		return nil
	}
	return f.post(ctx, k, readings, now)
}

func (f *feed) post(ctx context.Context, k poster, readings []engine.Reading, now time.Time) error {
	results, err := k.Post(ctx, engine.Batch{
		Readings:  readings,
		Receive:   engine.InstantOf(now),
		Principal: "demo",
	})
	if err != nil {
		return fmt.Errorf("post %d readings: %w", len(readings), err)
	}
	for i, r := range results {
		if r.Status == engine.Refused {
			return fmt.Errorf("reading of %s refused: %s", readings[i].Quantity, r.Detail)
		}
	}
	return nil
}

// reading makes up one indication of an item: the true value, the random
// error, and the steps of the display.
func (f *feed) reading(item plantItem, at time.Time) engine.Reading {
	f.count++
	noise := item.noise
	if item.odd > 0 && f.random.Float64() < item.odd {
		noise *= oddInflation
	}
	value := item.truth(at.Sub(f.start).Seconds()) + noise*f.random.NormFloat64()
	by := f.instrumentOf(item)
	if by != nil {
		value += by.bias
		if by.swing != nil {
			value += by.swing.next(f.random, at)
		}
	}
	if item.display > 0 {
		value = math.Round(value/item.display) * item.display
	}
	r := engine.Reading{
		Quantity: item.id,
		Value:    value,
		HasTime:  true,
		Time:     engine.InstantOf(at),
		ID:       engine.ReadingID(fmt.Sprintf("demo-%06d", f.count)),
	}
	if by != nil {
		r.Instrument = by.id
	}
	return r
}

// instrumentOf returns the instrument whose turn it is; nil if the item has none.
func (f *feed) instrumentOf(item plantItem) *plantInstrument {
	if len(item.instruments) == 0 {
		return nil
	}
	id := item.instruments[f.turns[item.id]%len(item.instruments)]
	f.turns[item.id]++
	return &f.instruments[slices.IndexFunc(f.instruments, func(i plantInstrument) bool { return i.id == id })]
}
