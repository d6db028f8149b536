package main

import (
	"context"
	"errors"
	"fmt"
	"runtime"
	"testing"
	"time"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
	"leadline.example/engine/posterior"
)

// joint compares one update of beliefs that are held jointly with that of a plain
// constant, in turns, and tells what memory a quantity takes.
func (b *bench) joint() error {
	contenders := []struct {
		name   string
		atMost float64
		run    func(*testing.B)
	}{
		{"plain constant", 0, updateConstant},
		{"level and 2 biases", 20, func(t *testing.B) { updateJoint(t, posterior.Motion{}, false) }},
		{"trend, 2 biases and correlated noise", 60, func(t *testing.B) {
			updateJoint(t, posterior.Motion{Form: posterior.MotionTrend, Walk: 1e-6}, true)
		}},
	}
	took := make([]series, len(contenders))
	allocations := make([]int64, len(contenders))
	for range b.rounds {
		for i, c := range contenders {
			result := testing.Benchmark(c.run)
			took[i] = append(took[i], float64(result.T.Nanoseconds())/float64(result.N))
			allocations[i] += result.AllocsPerOp()
		}
	}
	for i, c := range contenders {
		fmt.Printf("one update, %-38s %8.1f ns, allocations %d\n", c.name+":", took[i].median(), allocations[i])
		if i > 0 {
			b.figure("update of "+c.name+" / plain constant", took[i].over(took[0]).median(), c.atMost, true)
			b.figure("allocations of an update of "+c.name, float64(allocations[i]), 0, true)
		}
	}
	return b.memoryOfQuantities()
}

func updateConstant(t *testing.B) {
	var c posterior.Constant
	t.ReportAllocs()
	for i := range t.N {
		c.AddKnown(20+float64(i&7), 0.5)
	}
	if c.Count() != t.N {
		t.Fatal(c.Count())
	}
}

// updateJoint reads by two instruments in turn, a second apart. Under a trend it moves
// the filter on between readings, which a constant level and its biases don't need.
func updateJoint(t *testing.B, m posterior.Motion, correlated bool) {
	f := posterior.NewFilter(m, posterior.Prior{Mean: 20, SD: 3}, posterior.SlopePrior{SD: 1e-4})
	var terms [2][]posterior.Term
	for i := range terms {
		terms[i] = append(terms[i], posterior.Term{State: f.Add(posterior.Process{Variance: 0.04}), Coefficient: 1})
	}
	if correlated {
		noise := posterior.Term{State: f.Add(posterior.Process{Variance: 0.01, Rate: 1.0 / 60}), Coefficient: 1}
		for i := range terms {
			terms[i] = append(terms[i], noise)
		}
	}
	t.ReportAllocs()
	t.ResetTimer()
	for i := range t.N {
		f.Advance(1)
		f.Update(20+float64(i&7), 0, 1, terms[i&1], 0.25)
	}
	if !(f.Variance(0) > 0) {
		t.Fatal(f.Variance(0))
	}
}

// heldAs is a kind of quantity, for what it takes in memory.
type heldAs struct {
	name        string
	declaration engine.Declaration
	by          []engine.InstrumentID // in turn; none
}

const (
	firstProbe  engine.InstrumentID = "probe-1"
	secondProbe engine.InstrumentID = "probe-2"
	slowProbe   engine.InstrumentID = "probe-3"
)

func kindsHeld() []heldAs {
	constant := engineDeclaration(1)
	constant.Prior = engine.Prior{Form: engine.PriorNormal, Mean: -21, StandardDeviation: 3}
	constant.Repeatability = engine.Repeatability{Form: engine.RepeatabilityKnown, StandardDeviation: 0.8}
	constant.Dynamics = engine.Dynamics{}
	walk, trend := constant, constant
	walk.Dynamics = engine.Dynamics{Form: engine.DynamicsRandomWalk, StandardDeviation: 0.5, Per: time.Hour}
	trend.Dynamics = engine.Dynamics{
		Form: engine.DynamicsLinearTrend, StandardDeviation: 0.1, Per: time.Hour,
		Slope: engine.Slope{StandardDeviation: 0.1, Per: time.Hour},
	}
	return []heldAs{
		{"plain constant", constant, nil},
		{"plain random walk", walk, nil},
		{"level and 2 biases", constant, []engine.InstrumentID{firstProbe, secondProbe}},
		{"trend, 2 biases and correlated noise", trend, []engine.InstrumentID{firstProbe, slowProbe}},
	}
}

// memoryOfQuantities prints the heap that 10,000 quantities of each kind take, with
// one reading each and with 50. The readings have no IDs, so what is remembered of
// IDs, of the last million at least whatever the quantities, isn't in it.
func (b *bench) memoryOfQuantities() error {
	const readings = 50
	n := quantities
	if b.quick {
		n /= 10
	}
	for _, kind := range kindsHeld() {
		one, err := heapOf(b.ctx, kind, n, 1)
		if err != nil {
			return err
		}
		all, err := heapOf(b.ctx, kind, n, readings)
		if err != nil {
			return err
		}
		fmt.Printf("memory of a quantity, %-38s %6.0f bytes after 1 reading, %6.0f after %d\n", kind.name+":", one, all, readings)
	}
	return nil
}

// heapOf fills a keeper on a ledger that keeps nothing, so that the keeper's own
// memory is left, and returns how much the heap has grown by the quantity.
func heapOf(ctx context.Context, kind heldAs, n, readings int) (bytes float64, err error) {
	before := heap()
	k, err := engine.New(engine.Options{Open: func() (engine.Ledger, error) {
		return &forgetful{Memory: ledgertest.NewMemory(nil)}, nil
	}})
	if err != nil {
		return 0, err
	}
	defer func() { err = errors.Join(err, k.Close()) }()
	start := engine.InstantOf(time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC))
	if err := declareProbes(ctx, k, start); err != nil {
		return 0, err
	}
	for i := range n {
		if _, _, err := k.Declare(ctx, engine.QuantityID(quantityID(i)), kind.declaration, engine.Condition{}, start); err != nil {
			return 0, err
		}
	}
	for r := range readings {
		at := start + engine.Instant(r)*engine.Instant(time.Second)
		if err := postRound(ctx, k, kind, n, r, at); err != nil {
			return 0, err
		}
	}
	return float64(heap()-before) / float64(n), nil
}

// heap is the memory that is in use.
func heap() int64 {
	var m runtime.MemStats
	for range 2 { // the second takes what finalizers let go
		runtime.GC()
	}
	runtime.ReadMemStats(&m)
	return int64(m.HeapAlloc)
}

func declareProbes(ctx context.Context, k *engine.Keeper, at engine.Instant) error {
	for _, id := range []engine.InstrumentID{firstProbe, secondProbe, slowProbe} {
		d := engine.InstrumentDeclaration{
			Unit: "Cel", Calibrations: []engine.Calibration{{ValidFrom: at, BiasStandardUncertainty: 0.2}},
		}
		d.Repeatability.StandardDeviation = 0.5
		if id == slowProbe {
			d.Repeatability.Correlated = engine.Correlated{StandardDeviation: 0.1, Time: time.Minute}
		}
		if _, _, err := k.DeclareInstrument(ctx, id, d, engine.Condition{}, at); err != nil {
			return err
		}
	}
	return nil
}

// postRound posts the rth reading of every quantity.
func postRound(ctx context.Context, k *engine.Keeper, kind heldAs, n, r int, at engine.Instant) error {
	for from := 0; from < n; from += perMessage {
		b := engine.Batch{Receive: at}
		for i := from; i < min(n, from+perMessage); i++ {
			reading := engine.Reading{
				Quantity: engine.QuantityID(quantityID(i)), Value: -20 + float64((i+r)&7)/8, HasTime: true, Time: at,
			}
			if len(kind.by) > 0 {
				reading.Instrument = kind.by[r%len(kind.by)]
			}
			b.Readings = append(b.Readings, reading)
		}
		results, err := k.Post(ctx, b)
		if err != nil {
			return err
		}
		for i := range results {
			if results[i].Status != engine.Applied {
				return fmt.Errorf("reading %d of quantity %d is %v: %s", r, from+i, results[i].Status, results[i].Detail)
			}
		}
	}
	return nil
}

// forgetful is a ledger that keeps nothing.
type forgetful struct {
	*ledgertest.Memory
	position engine.Position
}

// Append gives the records their positions.
func (l *forgetful) Append(g *engine.Group) error {
	for i := range g.Records {
		l.position++
		g.Records[i].Position = l.position
	}
	return nil
}
