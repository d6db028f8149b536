package engine_test

import (
	"context"
	"fmt"
	"math/rand/v2"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

// discard is a ledger that keeps nothing: the keeper alone is measured.
type discard struct {
	*ledgertest.Memory
	position engine.Position
}

func (d *discard) Append(g *engine.Group) error {
	for i := range g.Records {
		d.position++
		g.Records[i].Position = d.position
	}
	return nil
}

// BenchmarkKeeper measures deciding, folding and publishing, in nanoseconds a
// reading, over 10,000 quantities of which 7,000 walk and 3,000 learn r.
func BenchmarkKeeper(b *testing.B) {
	for _, size := range []int{1, 100, 1000} {
		b.Run(fmt.Sprint("batch=", size), func(b *testing.B) { benchmarkKeeper(b, size) })
	}
}

func benchmarkKeeper(b *testing.B, size int) {
	const quantities = 10_000
	ledger := &discard{Memory: ledgertest.NewMemory(nil)}
	k, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) { return ledger, nil }})
	if err != nil {
		b.Fatal(err)
	}
	defer k.Close()
	ctx := context.Background()
	ids := make([]engine.QuantityID, quantities)
	for i := range ids {
		ids[i] = engine.QuantityID(fmt.Sprintf("store/%04d/temperature", i))
		d := gap()
		if i < 7_000 {
			d.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.1, Per: time.Hour}
		} else {
			d.Prior = engine.Prior{}
			d.Repeatability = engine.Repeatability{Form: engine.RepeatabilityLearnedReference}
		}
		if _, _, err := k.Declare(ctx, ids[i], d, engine.Condition{}, start); err != nil {
			b.Fatal(err)
		}
	}
	rng := rand.New(rand.NewPCG(1, 1))
	n := 0
	b.ReportAllocs()
	for b.Loop() {
		batch := engine.Batch{Receive: seconds(float64(n) / 1000), Readings: make([]engine.Reading, size)}
		for i := range batch.Readings {
			n++
			batch.Readings[i] = reading(ids[rng.IntN(quantities)], seconds(float64(n)/1000), 100, engine.ReadingID(fmt.Sprintf("gw-7-%011d", n)))
		}
		if _, err := k.Post(ctx, batch); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(n), "ns/reading")
}
