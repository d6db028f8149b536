package persist

import (
	"encoding/hex"
	"flag"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"leadline.example/engine"
	"leadline.example/engine/ledgertest"
)

var update = flag.Bool("update", false, "rewrite the golden files")

// bitwise compares floats by their bits: -0, NaN and infinities must come back
// as they went.
var bitwise = cmp.Comparer(func(a, b float64) bool { return math.Float64bits(a) == math.Float64bits(b) })

func drawFloat(t *rapid.T) float64 {
	return math.Float64frombits(rapid.OneOf(
		rapid.Uint64(),
		rapid.Map(rapid.Float64(), math.Float64bits),
		rapid.Map(rapid.IntRange(-9999, 9999), func(i int) uint64 { return math.Float64bits(float64(i) / 100) }),
	).Draw(t, "float"))
}

func drawInstant(t *rapid.T) engine.Instant {
	return engine.Instant(rapid.OneOf(rapid.Int64(), rapid.Int64Range(1.7e18, 1.8e18)).Draw(t, "instant"))
}

func drawRecord(t *rapid.T) engine.Record {
	word := func() string {
		return rapid.OneOf(rapid.Just(""), rapid.Just("gateway"), rapid.String()).Draw(t, "word")
	}
	r := engine.Record{
		Kind:        engine.Kind(rapid.IntRange(1, 7).Draw(t, "kind")),
		ReceiveTime: drawInstant(t),
		Principal:   word(), RequestID: word(),
		Number:   engine.QuantityNumber(rapid.Uint32().Draw(t, "number")),
		Revision: rapid.Uint32().Draw(t, "revision"),
	}
	switch r.Kind {
	case engine.KindDeclaration:
		r.Declaration = &engine.Declaration{
			Unit: word(), Description: word(),
			Prior:         drawPrior(t),
			Repeatability: drawRepeatability(t),
			Dynamics:      drawDynamics(t), BreachHorizon: drawDuration(t),
			Tolerance: engine.Tolerance{HasLower: rapid.Bool().Draw(t, "lower"), HasUpper: rapid.Bool().Draw(t, "upper"),
				Lower: drawFloat(t), Upper: drawFloat(t)},
		}
		drawModel(t, r.Declaration)
		r.Declaration.Rule.ConformProbability, r.Declaration.Rule.BreachProbability = drawFloat(t), drawFloat(t)
		fallthrough
	case engine.KindRetirement:
		r.Quantity = engine.QuantityID(word())
		return r
	case engine.KindInstrument:
		r.Instrument = drawInstrument(t)
		return r
	case engine.KindRenewal:
		r.Renewal = drawRenewal(t)
		return r
	case engine.KindStep:
		r.Step = &engine.StepEvent{Time: drawInstant(t), Since: drawInstant(t), Up: drawFlag(t), Widen: drawFloat(t)}
		return r
	}
	r.Reading = engine.Reading{
		Quantity: engine.QuantityID(word()), Value: drawFloat(t), HasTime: rapid.Bool().Draw(t, "has"),
		Time: drawInstant(t), Instrument: engine.InstrumentID(word()), Unit: word(), ID: engine.ReadingID(word()), Occasion: word(),
	}
	if rapid.Bool().Draw(t, "uncertainty") {
		r.Reading.HasUncertainty, r.Reading.RandomStandardUncertainty = true, drawFloat(t)
	}
	r.Reading.Extent, r.Reading.Upper, r.Reading.Samples = drawExtent(t)
	r.PutThrough = engine.Position(rapid.Uint64().Draw(t, "position"))
	r.Reason = rapid.SampledFrom(append(engine.ReadingReasons[:], "", "A_WORD_OF_ITS_OWN")).Draw(t, "reason")
	r.Detail = word()
	return r
}

// TestGroupRoundTrip: any group comes back from its chunks as it went, and the
// chain accepts it.
func TestGroupRoundTrip(t *testing.T) {
	e := newEncoder()
	rapid.Check(t, func(t *rapid.T) {
		records := rapid.SliceOfN(rapid.Custom(drawRecord), 1, 40).Draw(t, "records")
		commit := drawInstant(t)
		for i := range records {
			records[i].Position, records[i].CommitTime = engine.Position(i+1), commit
		}
		hash := e.encode(records, [32]byte{})
		var got []engine.Record
		c := newChain()
		c.commit = math.MinInt64
		for i := range e.chunks {
			if err := c.add(e.key(i), e.value(i)); err != nil {
				t.Fatal(err)
			}
			if s := e.chunks[i]; s.records > 1 && s.to-s.from > chunkBytes {
				t.Fatalf("a chunk of %d records has %d bytes", s.records, s.to-s.from)
			}
			got = append(got, decodeAll(t, e.key(i), e.value(i))...)
		}
		if d := cmp.Diff(records, got, bitwise); d != "" {
			t.Fatalf("(-want +got):\n%s", d)
		}
		if c.hash != hash || c.groups != 1 {
			t.Fatalf("the chain has %d groups and hash %x, want 1 and %x", c.groups, c.hash, hash)
		}
	})
}

func decodeAll(t interface{ Fatal(...any) }, key, value []byte) (records []engine.Record) {
	c, err := parseChunk(key, value)
	if err != nil {
		t.Fatal(err)
	}
	for d := c.decoder(); ; {
		var r engine.Record
		more, err := d.next(&r)
		if err != nil {
			t.Fatal(err)
		}
		if !more {
			return records
		}
		records = append(records, r)
	}
}

// TestQuantityRoundTrip: a quantity comes back as it went.
func TestQuantityRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		r := rapid.Custom(drawRecord).Filter(func(r engine.Record) bool { return r.Declaration != nil }).Draw(t, "record")
		q := engine.Quantity{
			ID: r.Quantity, Number: r.Number, Declaration: *r.Declaration, Revision: r.Revision,
			CreateTime: drawInstant(t), UpdateTime: drawInstant(t), Retired: rapid.Bool().Draw(t, "retired"), RetireTime: drawInstant(t),
		}
		for range rapid.IntRange(0, 3).Draw(t, "renewals") {
			q.Renewals = append(q.Renewals, *drawRenewal(t))
		}
		var got engine.Quantity
		if err := decodeQuantity(appendQuantity(nil, &q), &got); err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(q, got, bitwise); d != "" {
			t.Fatalf("(-want +got):\n%s", d)
		}
	})
}

// FuzzDecodeRecord: any bytes give a record xor an error; a record that is
// encoded again decodes to the same.
func FuzzDecodeRecord(f *testing.F) {
	e := newEncoder()
	for i, r := range slices.Concat(ledgertest.Records(0, 30), ledgertest.FurtherRecords(0, 24), ledgertest.WiderRecords(0, 24)) {
		r.Position, r.CommitTime = engine.Position(i+1), 1
		e.encode([]engine.Record{r}, [32]byte{})
		body, _, err := takeFrame(e.value(0)[firstHeader:])
		if err != nil {
			f.Fatal(err)
		}
		f.Add(body)
	}
	f.Fuzz(func(t *testing.T, body []byte) {
		var r, again engine.Record
		c := start(1)
		if err := c.decodeBody(body, &r); err != nil {
			return
		}
		fresh := start(1)
		b, _, err := takeFrame(fresh.appendRecord(nil, &r))
		if err != nil {
			t.Fatal(err)
		}
		c = start(1)
		if err := c.decodeBody(b, &again); err != nil {
			t.Fatalf("%+v: %v", r, err)
		}
		if d := cmp.Diff(r, again, bitwise); d != "" {
			t.Fatalf("(-want +got):\n%s", d)
		}
	})
}

// TestUnknownFieldsAreSkipped: a later version may add fields of any wire type.
func TestUnknownFieldsAreSkipped(t *testing.T) {
	for _, want := range slices.Concat(ledgertest.Records(13, 1), ledgertest.FurtherRecords(0, 6), ledgertest.WiderRecords(0, 6)) {
		c := start(0)
		body := c.appendBody(nil, &want)
		body = appendText(alwaysUint(appendFixed(body, 999, 7), 1000, 8), 1001, "of a later version")
		var got engine.Record
		c = start(0)
		if err := c.decodeBody(body, &got); err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(want, got); d != "" {
			t.Fatalf("(-want +got):\n%s", d)
		}
	}
}

// TestFormatVersion1 fails when the bytes of the format change: then give it
// another version number and keep reading the old one.
func TestFormatVersion1(t *testing.T) {
	records := ledgertest.Records(0, 30)
	for i := range records {
		records[i].Position, records[i].CommitTime = engine.Position(i+1), 1_772_366_400_000_000_000
	}
	e := newEncoder()
	e.encode(records, [32]byte{1, 2, 3})
	var b strings.Builder
	for i := range e.chunks {
		b.WriteString("ledger " + hex.EncodeToString(e.key(i)) + "\n" + hex.Dump(e.value(i)))
	}
	b.WriteString("rows\n" + hex.Dump(appendRows(nil, ledgertest.Rows(1, 20))))
	q := engine.Quantity{ID: "brine_pump.coupling_gap", Number: 3, Declaration: *records[3].Declaration, Revision: 2,
		CreateTime: 1, UpdateTime: 2, Retired: true, RetireTime: 3}
	b.WriteString("quantity\n" + hex.Dump(appendQuantity(nil, &q)))
	golden(t, "format1.golden", b.String())
}

// golden compares text with that of a file.
func golden(t *testing.T, file, got string) {
	t.Helper()
	name := filepath.Join("testdata", file)
	if *update {
		if err := os.WriteFile(name, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(string(want), got); d != "" {
		t.Fatalf("(-want +got):\n%s", d)
	}
}

// usual returns readings as a gateway of many quantities sends them: an ID of
// 16 bytes, own times, one request.
func usual(n int) []engine.Record {
	records := make([]engine.Record, n)
	for i := range records {
		at := engine.Instant(1_772_366_400_000_000_000 + i*137_003_000)
		records[i] = engine.Record{
			Position: engine.Position(i + 1), CommitTime: 1_772_366_700_123_456_789, ReceiveTime: 1_772_366_700_120_000_123,
			Kind: engine.KindReading, RequestID: "9f1c2f5e-5f3f-4c7e-9a53-0d0c6f2c7a11", Principal: "ice-plant",
			Number: engine.QuantityNumber(i%1000 + 1), Revision: 1,
			Reading: engine.Reading{Value: 8 + float64(i%700)*0.01, HasTime: true, Time: at,
				ID: engine.ReadingID("gw1-" + hex.EncodeToString([]byte{byte(i >> 16), byte(i >> 8), byte(i), 7, 7, 7}))},
		}
	}
	return records
}

// TestUsualRecordSize bounds what a reading costs in the ledger.
func TestUsualRecordSize(t *testing.T) {
	const n, most = 1000, 54.0 // bytes with all headers
	e := newEncoder()
	e.encode(usual(n), [32]byte{})
	if got := float64(len(e.buf)+len(e.keys)) / n; got > most {
		t.Errorf("%.1f bytes a reading; at most %v", got, most)
	}
}

func TestEncodeAllocatesNothing(t *testing.T) {
	e, records := newEncoder(), usual(1000)
	if n := testing.AllocsPerRun(10, func() { e.encode(records, [32]byte{}) }); n > 2 {
		t.Errorf("%v allocations for a group of 1000; want at most 2, none per record", n)
	}
}

func BenchmarkEncode(b *testing.B) {
	e, records := newEncoder(), usual(1000)
	b.ReportAllocs()
	for b.Loop() {
		e.encode(records, [32]byte{})
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/1000, "ns/record")
	b.ReportMetric(float64(len(e.buf)+len(e.keys))/1000, "B/record")
}
