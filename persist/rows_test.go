package persist

import (
	"math"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

func drawRow(t *rapid.T) engine.Row {
	unit := rapid.SampledFrom([]int64{1, 1e3, 1e6, 1e9, 60e9}).Draw(t, "unit")
	r := engine.Row{
		Time:     engine.Instant(rapid.OneOf(rapid.Int64(), rapid.Int64Range(0, 1e6)).Draw(t, "time") * unit),
		Value:    drawFloat(t),
		HasID:    rapid.Bool().Draw(t, "id"),
		Position: engine.Position(rapid.Uint64().Draw(t, "position")),
	}
	if rapid.Bool().Draw(t, "uncertainty") {
		r.HasUncertainty, r.Uncertainty = true, drawFloat(t)
	}
	if rapid.Bool().Draw(t, "origin") {
		r.Instrument = engine.InstrumentNumber(rapid.OneOf(rapid.Uint32(), rapid.Uint32Range(0, 2)).Draw(t, "instrument"))
		r.Occasion = rapid.OneOf(rapid.Uint64(), rapid.Uint64Range(0, 2)).Draw(t, "occasion")
	}
	if rapid.Bool().Draw(t, "wide") {
		r.Extent, r.Upper, r.Samples = drawExtent(t)
	}
	return r
}

// TestRowsRoundTrip: any rows come back as they went, in any order.
func TestRowsRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		rows := rapid.SliceOfN(rapid.Custom(drawRow), 1, engine.MaxChunkRows).Draw(t, "rows")
		c, err := parseRowsBody(appendRows(nil, rows))
		if err != nil {
			t.Fatal(err)
		}
		got, err := c.appendTo(nil)
		if err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(rows, got, bitwise); d != "" {
			t.Fatalf("(-want +got):\n%s", d)
		}
		for _, r := range rows {
			if r.Time < c.earliest || r.Time > c.latest {
				t.Fatalf("the time %d is outside %d to %d", r.Time, c.earliest, c.latest)
			}
		}
	})
}

// FuzzDecodeRows: any bytes give rows xor an error; rows encoded again decode
// to the same.
func FuzzDecodeRows(f *testing.F) {
	f.Add(appendRows(nil, ledgertest.Rows(1, 5)))
	f.Add(appendRows(nil, ledgertest.Rows(1<<40, 128)))
	f.Add(appendRows(nil, ledgertest.OriginRows(1, 128)))
	f.Add(appendRows(nil, ledgertest.ExtentRows(1, 128)))
	f.Add(appendRows(nil, []engine.Row{{Time: math.MinInt64, Value: math.Inf(1)}, {Time: math.MaxInt64, Position: 1}}))
	f.Fuzz(func(t *testing.T, body []byte) {
		c, err := parseRowsBody(body)
		if err != nil {
			return
		}
		rows, err := c.appendTo(nil)
		if err != nil {
			return
		}
		c, err = parseRowsBody(appendRows(nil, rows))
		if err != nil {
			t.Fatal(err)
		}
		again, err := c.appendTo(nil)
		if err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(rows, again, bitwise); d != "" {
			t.Fatalf("(-want +got):\n%s", d)
		}
	})
}

// TestUsualRowSize bounds what a reading costs in the index.
func TestUsualRowSize(t *testing.T) {
	const n, most = engine.MaxChunkRows, 16.0 // bytes with header and key
	rows := make([]engine.Row, n)
	for i := range rows {
		rows[i] = engine.Row{Time: engine.Instant(1_772_366_400_000_000_000 + i*60_137_000_000),
			Value: 8 + float64(i*i%97)*0.01, HasID: true, Position: engine.Position(1000 + i*997)}
	}
	if got := float64(len(appendRows(nil, rows))+1+4+rowsKeyBytes) / n; got > most {
		t.Errorf("%.1f bytes a row; at most %v", got, most)
	} else {
		t.Logf("%.1f bytes a row", got)
	}
}
