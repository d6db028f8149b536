package persist

import (
	"encoding/hex"
	"math"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

func drawExtent(t *rapid.T) (e engine.Extent, upper float64, samples uint32) {
	e = engine.Extent(rapid.IntRange(0, 3).Draw(t, "extent"))
	if rapid.Bool().Draw(t, "has upper") {
		upper = drawFloat(t)
	}
	return e, upper, rapid.OneOf(rapid.Uint32Range(0, 2), rapid.Uint32()).Draw(t, "samples")
}

func drawRepeatability(t *rapid.T) engine.Repeatability {
	return engine.Repeatability{
		Form:              engine.RepeatabilityForm(rapid.IntRange(0, 3).Draw(t, "form")),
		StandardDeviation: drawFloat(t), Guess: drawFloat(t), Worth: drawFloat(t), Floor: drawFloat(t),
	}
}

func drawModel(t *rapid.T, d *engine.Declaration) {
	d.Outliers = engine.Outliers{Probability: drawFloat(t), Inflation: drawFloat(t)}
	d.Scale = engine.Scale(rapid.IntRange(0, 1).Draw(t, "scale"))
	d.ModelCheck = engine.ModelCheck{Window: rapid.IntRange(0, math.MaxUint16).Draw(t, "window"), ObjectionsPerYear: drawFloat(t)}
	d.StepDetection = engine.StepDetection{FalseAlarmInterval: drawFloat(t), Widen: drawFloat(t)}
}

func learnedBy(form engine.RepeatabilityForm) *engine.Instrument {
	i := &engine.Instrument{Number: 1}
	i.Declaration.Repeatability.Learned.Form = form
	return i
}

// TestFormatVersion3 fails when the bytes that version 3 adds change: then give
// them another version number and keep reading the old ones.
func TestFormatVersion3(t *testing.T) {
	records := ledgertest.WiderRecords(0, 24)
	for i := range records {
		records[i].Position, records[i].CommitTime = engine.Position(i+1), 1_772_366_400_000_000_000
	}
	e := newEncoder()
	e.encode(records, [32]byte{1, 2, 3})
	var b strings.Builder
	for i := range e.chunks {
		b.WriteString("ledger " + hex.EncodeToString(e.key(i)) + "\n" + hex.Dump(e.value(i)))
	}
	b.WriteString("rows\n" + hex.Dump(appendRows(nil, ledgertest.ExtentRows(1, 40))))
	q := engine.Quantity{ID: "ammonia_compressor.leak_rate", Number: 3, Declaration: *records[2].Declaration, Revision: 2,
		CreateTime: 1, UpdateTime: 2}
	b.WriteString("quantity\n" + hex.Dump(appendQuantity(nil, &q)))
	golden(t, "format3.golden", b.String())
}

// TestCostOfAnExtent: what a value says costs bytes in a row only where it isn't
// what that of the row before said.
func TestCostOfAnExtent(t *testing.T) {
	plain := len(appendRows(nil, ledgertest.Rows(1, 128)))
	for _, c := range []struct {
		name string
		set  func(i int, r *engine.Row)
		want int // bytes more than the same rows without
		why  string
	}{
		{"none", func(int, *engine.Row) {}, 0, "rows of values are those of version 1"},
		{"all below", func(_ int, r *engine.Row) { r.Extent = engine.ExtentBelow }, 1, "one control byte in the first row"},
		{"all means of 60", func(_ int, r *engine.Row) { r.Samples = 60 }, 2, "a control byte, and a varint of one"},
		{"by turns", func(i int, r *engine.Row) { r.Extent = engine.Extent(i % 2) }, 127, "a control byte in all rows but the first"},
		{"all below one upper", func(_ int, r *engine.Row) { r.Extent, r.Upper = engine.ExtentBetween, 16 }, 4,
			"two control bytes, and the two bytes of 16 that differ from those of 0"},
	} {
		rows := ledgertest.Rows(1, 128)
		for i := range rows {
			c.set(i, &rows[i])
		}
		if got := len(appendRows(nil, rows)) - plain; got != c.want {
			t.Errorf("%s: %d bytes more; want %d: %s", c.name, got, c.want, c.why)
		}
	}
}

// TestMalformedExtentsAreRefused: a row that is cut short, also within its extent, or
// has two, is an error, and so is a number of samples that no reading has.
func TestMalformedExtentsAreRefused(t *testing.T) {
	rows := []engine.Row{{Value: 8, Upper: 9.5, Extent: engine.ExtentBetween, Samples: 300, Position: 1}}
	sound := appendRows(nil, rows)
	for n := rowsHeader; n < len(sound); n++ {
		if got, err := decodeRows(sound[:n]); err == nil {
			t.Errorf("cut to %d of %d bytes: decoded to %+v", n, len(sound), got)
		}
	}
	plain := appendRows(nil, ledgertest.Rows(1, 1))
	for _, c := range []struct {
		name   string
		before []byte // of the row
		sound  bool
	}{
		{"as many samples as 32 bits hold", []byte{extentEscape | extentSamples, 0xFF, 0xFF, 0xFF, 0xFF, 0x0F}, true},
		{"one more", []byte{extentEscape | extentSamples, 0x80, 0x80, 0x80, 0x80, 0x10}, false},
		{"two extents", []byte{extentEscape | byte(engine.ExtentBelow), extentEscape}, false},
		{"an escape that no version has", []byte{extentEscape + 1<<squeezeWidth}, false},
	} {
		body := append(append(plain[:rowsHeader:rowsHeader], c.before...), plain[rowsHeader:]...)
		if got, err := decodeRows(body); c.sound != (err == nil) {
			t.Errorf("%s: decoded to %+v, %v", c.name, got, err)
		}
	}
}

func decodeRows(body []byte) ([]engine.Row, error) {
	c, err := parseRowsBody(body)
	if err != nil {
		return nil, err
	}
	return c.appendTo(nil)
}
